"""Control charts of batches: individuals and moving range, with runs rules by their published source.

Shewhart (1931) limits; constants computed from the distribution of the normal range, not copied. Rules: Western Electric,
*Statistical Quality Control Handbook* (1956); the trend rule: Nelson (1984), J. Qual. Technol. 16, 237, test 3.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import numpy.typing as npt
from scipy import integrate, special, stats

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]


@functools.cache
def range_mean(n: int) -> float:
    """d2: expected range of n standard normal values."""
    value, _ = integrate.quad(lambda x: 1 - stats.norm.cdf(x) ** n - stats.norm.sf(x) ** n, -9, 9, epsabs=1e-12)
    return float(value)


@functools.cache
def range_sd(n: int) -> float:
    """d3: standard deviation of the range of n standard normal values."""

    def joint(y: float, x: float) -> float:
        a, b = special.ndtr(x), special.ndtr(y)
        return float(1 - b**n - (1 - a) ** n + (b - a) ** n)

    second, _ = integrate.dblquad(joint, -8.5, 8.5, lambda x: x, 8.5, epsabs=1e-9, epsrel=1e-9)
    return math.sqrt(2 * second - range_mean(n) ** 2)


def sd_bias(n: int) -> float:
    """c4: expected sample standard deviation of n standard normal values."""
    return math.sqrt(2 / (n - 1)) * math.exp(math.lgamma(n / 2) - math.lgamma((n - 1) / 2))


@dataclass(frozen=True, eq=False)
class IndividualsChart:
    """Individuals and moving-range chart.

    Parameters
    ----------
    values, moving_range
        The batches in order, and the ranges of neighbours (one fewer).
    centre, sigma
        Mean and standard deviation estimated from the mean moving range.
    lower, upper
        Three-sigma limits of the individuals.
    range_centre, range_upper
        Centre and upper limit of the moving range.
    signals
        Rule -> indices of the values at which the rule speaks.
    """

    values: FloatArray
    moving_range: FloatArray
    centre: float
    sigma: float
    lower: float
    upper: float
    range_centre: float
    range_upper: float
    signals: Mapping[str, tuple[int, ...]]


def individuals_chart(
    values: npt.ArrayLike, *, rules: tuple[str, ...] = ("beyond_limits",), baseline: int | None = None
) -> IndividualsChart:
    """Individuals chart of values in order of time.

    Parameters
    ----------
    values
        One finite value per batch, in order.
    rules
        Names from ``RULES``.
    baseline
        Number of first values that set the limits; None takes all.

    Raises
    ------
    ValueError
        If fewer than 2 values set the limits, a value is not finite, or a rule is unknown.
    """
    x = np.asarray(values, dtype=np.float64).ravel()
    base = x if baseline is None else x[:baseline]
    if base.size < 2:
        raise ValueError(f"a chart needs at least 2 values to set its limits, not {base.size}")
    if not np.isfinite(x).all():
        raise ValueError("values must be finite (leave out batches without a value before calling)")
    unknown = [r for r in rules if r not in RULES]
    if unknown:
        raise ValueError(f"unknown rule {unknown[0]!r}; known: {', '.join(RULES)}")
    mean_range = float(np.abs(np.diff(base)).mean())
    centre, sigma = float(base.mean()), mean_range / range_mean(2)
    # without any spread every other value would be "beyond": only exact equality is in control then
    z = (x - centre) / sigma if sigma > 0 else np.where(x == centre, 0.0, np.copysign(np.inf, x - centre))
    signals = {rule: tuple(int(i) for i in np.flatnonzero(RULES[rule].test(z, x))) for rule in rules}
    return IndividualsChart(
        values=x,
        moving_range=np.abs(np.diff(x)),
        centre=centre,
        sigma=sigma,
        lower=centre - 3 * sigma,
        upper=centre + 3 * sigma,
        range_centre=mean_range,
        range_upper=(1 + 3 * range_sd(2) / range_mean(2)) * mean_range,
        signals=MappingProxyType(signals),
    )


@dataclass(frozen=True)
class Rule:
    """A runs rule: words, published source, and the test on standardised values z and raw values x."""

    words: str
    source: str
    test: Callable[[FloatArray, FloatArray], BoolArray]


def _k_of_n(k: int, n: int, beyond: float) -> Callable[[FloatArray, FloatArray], BoolArray]:
    def test(z: FloatArray, _x: FloatArray) -> BoolArray:
        out = np.zeros(z.shape, dtype=bool)
        for side in (z > beyond, z < -beyond):
            counts = np.convolve(side, np.ones(n, dtype=int))[: z.size]
            out |= (counts >= k) & side
        return out

    return test


def _trend(n: int) -> Callable[[FloatArray, FloatArray], BoolArray]:
    def test(_z: FloatArray, x: FloatArray) -> BoolArray:
        out = np.zeros(x.shape, dtype=bool)
        step = np.sign(np.diff(x))
        for sign in (1, -1):
            run = np.convolve(step == sign, np.ones(n - 1, dtype=int))[: step.size]
            out[1:] |= run >= n - 1
        return out

    return test


_WESTERN = "Western Electric, Statistical Quality Control Handbook, 1956"
RULES: Mapping[str, Rule] = MappingProxyType(
    {
        "beyond_limits": Rule("one value beyond three sigma", "Shewhart 1931", lambda z, _x: np.abs(z) > 3),
        "two_of_three": Rule("two of three beyond two sigma on one side", _WESTERN, _k_of_n(2, 3, 2.0)),
        "four_of_five": Rule("four of five beyond one sigma on one side", _WESTERN, _k_of_n(4, 5, 1.0)),
        "eight_on_one_side": Rule("eight in a row on one side of the centre", _WESTERN, _k_of_n(8, 8, 0.0)),
        "six_trending": Rule("six in a row rising or falling", "Nelson 1984, test 3", _trend(6)),
    }
)
