"""Process capability: how the spread of the particles compares with the width between the limits.

Definitions after ISO 22514-2; interval of Cp from the chi-square distribution of s², interval of Cpk after Bissell (1990),
Appl. Statist. 39, 331.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats


@dataclass(frozen=True)
class Capability:
    """Capability indices with the ends of their intervals; NaN where an index is not defined.

    ``cp`` needs both limits, ``cpk`` at least one, ``cpm`` both limits and a target.
    """

    cp: float
    cp_low: float
    cp_high: float
    cpk: float
    cpk_low: float
    cpk_high: float
    cpm: float
    n: int


def capability(
    values: npt.ArrayLike,
    *,
    low: float | None = None,
    high: float | None = None,
    target: float | None = None,
    level: float = 0.95,
) -> Capability:
    """Capability of a sample against its limits.

    Parameters
    ----------
    values
        Sample, finite.
    low, high
        Limits; at least one.
    target
        Target value for Cpm.
    level
        Confidence level of the intervals.

    Raises
    ------
    ValueError
        If both limits are missing or contradict each other, or a value is not finite.
    """
    x = np.asarray(values, dtype=np.float64).ravel()
    if not np.isfinite(x).all():
        raise ValueError("values must be finite (leave out particles without a value before calling)")
    n = int(x.size)
    mean = float(x.mean()) if n else math.nan
    s = float(x.std(ddof=1)) if n > 1 else math.nan
    return from_moments(mean, s, n=n, low=low, high=high, target=target, level=level)


def from_moments(
    mean: float,
    s: float,
    *,
    n: int,
    low: float | None = None,
    high: float | None = None,
    target: float | None = None,
    level: float = 0.95,
) -> Capability:
    """Capability from mean, standard deviation and sample size (see ``capability``).

    Raises
    ------
    ValueError
        If both limits are missing or contradict each other.
    """
    if low is None and high is None:
        raise ValueError("give a lower limit, an upper limit, or both")
    if low is not None and high is not None and not low < high:
        raise ValueError(f"the lower limit {low} must lie below the upper limit {high}")
    if n < 2 or not s > 0:
        nan = math.nan
        return Capability(nan, nan, nan, nan, nan, nan, nan, n)
    sides = ([(high - mean) / (3 * s)] if high is not None else []) + (
        [(mean - low) / (3 * s)] if low is not None else []
    )
    cpk = min(sides)
    cpk_low, cpk_high = cpk_interval(cpk, n=n, level=level)
    if low is None or high is None:
        return Capability(math.nan, math.nan, math.nan, cpk, cpk_low, cpk_high, math.nan, n)
    cp = (high - low) / (6 * s)
    cp_low, cp_high = cp_interval(cp, n=n, level=level)
    cpm = math.nan if target is None else (high - low) / (6 * math.hypot(s, mean - target))
    return Capability(cp, cp_low, cp_high, cpk, cpk_low, cpk_high, cpm, n)


def cp_interval(cp: float, *, n: int, level: float = 0.95) -> tuple[float, float]:
    """Interval of Cp from the chi-square distribution of the variance (exact for a normal population)."""
    a = (1 - level) / 2
    return (
        cp * math.sqrt(stats.chi2.ppf(a, n - 1) / (n - 1)),
        cp * math.sqrt(stats.chi2.ppf(1 - a, n - 1) / (n - 1)),
    )


def cpk_interval(cpk: float, *, n: int, level: float = 0.95) -> tuple[float, float]:
    """Approximate interval of Cpk (Bissell 1990)."""
    half = stats.norm.ppf((1 + level) / 2) * math.sqrt(1 / (9 * n) + cpk**2 / (2 * (n - 1)))
    return cpk - float(half), cpk + float(half)
