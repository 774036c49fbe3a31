"""Statistical tolerance intervals: limits that hold a stated share of all particles with a stated confidence.

Normal populations after ISO 16269-6:2014 (exact factors) and Howe (1969), J. Am. Stat. Assoc. 64, 610 (approximation);
distribution-free sample sizes after Wilks (1941), Ann. Math. Stat. 12, 91.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import optimize, special, stats

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class ToleranceInterval:
    """Limits that hold at least ``content`` of the population with ``confidence``; NaN where they cannot be given."""

    low: float
    high: float
    factor: float
    content: float
    confidence: float
    n: int


def one_sided_factor(n: int, *, content: float = 0.95, confidence: float = 0.95) -> float:
    """Exact one-sided factor k1: mean + k1·s bounds ``content`` of a normal population with ``confidence``.

    k1 = t'(confidence; n − 1, z_content·√n)/√n with the quantile t' of the non-central t distribution (ISO 16269-6).

    Raises
    ------
    ValueError
        If n is below 2 or a probability does not lie between 0 and 1.
    """
    _check(n, content=content, confidence=confidence)
    root = math.sqrt(n)
    return float(stats.nct.ppf(confidence, n - 1, stats.norm.ppf(content) * root)) / root


def two_sided_factor(n: int, *, content: float = 0.95, confidence: float = 0.95) -> float:
    """Exact two-sided factor k2: mean ± k2·s holds ``content`` of a normal population with ``confidence``.

    Solves the double integral of ISO 16269-6 for the factor: the chance over the sample mean and the sample standard
    deviation that the interval holds the wanted content.

    Raises
    ------
    ValueError
        If n is below 2 or a probability does not lie between 0 and 1.
    """
    _check(n, content=content, confidence=confidence)
    nodes = _means(n, content)
    return float(optimize.brentq(lambda k: _confidence(k, n, *nodes) - confidence, 1e-3, 1e4, xtol=1e-10))


def howe_factor(n: int, *, content: float = 0.95, confidence: float = 0.95) -> float:
    """Howe's approximation of the two-sided factor (within 1 % of the exact one for n ≥ 10).

    Raises
    ------
    ValueError
        If n is below 2 or a probability does not lie between 0 and 1.
    """
    _check(n, content=content, confidence=confidence)
    z = stats.norm.ppf((1 + content) / 2)
    return float(z * math.sqrt((n - 1) * (1 + 1 / n) / stats.chi2.ppf(1 - confidence, n - 1)))


def tolerance_interval(
    values: npt.ArrayLike, *, content: float = 0.95, confidence: float = 0.95, side: str = "both"
) -> ToleranceInterval:
    """Tolerance interval of a normal population from a sample.

    Parameters
    ----------
    values
        Sample (1-D, finite); fewer than 2 values or no spread give NaN limits.
    content, confidence
        Share of the population held, and how sure that is.
    side
        ``both``, ``low`` or ``high``.

    Raises
    ------
    ValueError
        If a value is not finite, or ``side`` is unknown.
    """
    x = _sample(values)
    if side not in ("both", "low", "high"):
        raise ValueError(f"side must be both, low or high, not {side!r}")
    if x.size < 2:
        return ToleranceInterval(math.nan, math.nan, math.nan, content, confidence, int(x.size))
    make = two_sided_factor if side == "both" else one_sided_factor
    k = make(x.size, content=content, confidence=confidence)
    mean, s = float(x.mean()), float(x.std(ddof=1))
    low = -math.inf if side == "high" else mean - k * s
    high = math.inf if side == "low" else mean + k * s
    return ToleranceInterval(low, high, k, content, confidence, int(x.size))


def distribution_free_size(*, content: float = 0.95, confidence: float = 0.95, sides: int = 2) -> int:
    """Smallest sample whose extremes hold ``content`` of any continuous population with ``confidence`` (Wilks 1941).

    Raises
    ------
    ValueError
        If a probability does not lie between 0 and 1, or ``sides`` is neither 1 nor 2.
    """
    _check(2, content=content, confidence=confidence)
    if sides not in (1, 2):
        raise ValueError(f"sides must be 1 or 2, not {sides!r}")
    n = 1
    while _held(n, content, sides) < confidence:
        n += 1
    return n


def _held(n: int, content: float, sides: int) -> float:
    if sides == 1:
        return 1 - content**n
    return 1 - n * content ** (n - 1) + (n - 1) * content**n


def _confidence(k: float, n: int, half_widths: FloatArray, weights: FloatArray) -> float:
    """Chance that mean ± k·s holds the content: average over the mean of the chance over s."""
    return float(weights @ stats.chi2.sf((n - 1) * (half_widths / k) ** 2, n - 1))


def _means(n: int, content: float) -> tuple[FloatArray, FloatArray]:
    """For nodes over the sample mean: the half-width that holds the content around it, and the node's weight."""
    node, weight = np.polynomial.legendre.leggauss(120)
    edge = 9 / math.sqrt(n)  # beyond nine standard errors of the mean nothing counts
    x = edge * (node + 1) / 2
    density = 2 * math.sqrt(n / (2 * math.pi)) * np.exp(-n * x * x / 2) * weight * edge / 2
    low, high = np.zeros_like(x), x + 10.0
    for _ in range(80):  # bisection to the last bit, all nodes at once
        middle = (low + high) / 2
        short = special.ndtr(x + middle) - special.ndtr(x - middle) < content
        low, high = np.where(short, middle, low), np.where(short, high, middle)
    return high, density


def _sample(values: npt.ArrayLike) -> npt.NDArray[np.float64]:
    x = np.asarray(values, dtype=np.float64).ravel()
    if not np.isfinite(x).all():
        raise ValueError("values must be finite (leave out particles without a value before calling)")
    return x


def _check(n: int, **probabilities: float) -> None:
    if n < 2:
        raise ValueError(f"n must be at least 2, not {n}")
    for name, p in probabilities.items():
        if not 0 < p < 1:
            raise ValueError(f"{name} must lie between 0 and 1, not {p!r}")
