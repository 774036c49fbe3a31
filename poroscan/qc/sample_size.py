"""How many: particles for a size statistic, fields for a point count, and shares with exact intervals.

Particles: Masuda and Gotoh (1999), Adv. Powder Technol. 10, 159, the form of ISO 13322-1. Points: the t interval of
ASTM E562. Shares: Wilson (1927), J. Am. Stat. Assoc. 22, 209; Clopper and Pearson (1934), Biometrika 26, 404.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import numpy.typing as npt
from scipy import stats


def particles_for_diameter(spread: float, *, form: float, relative: float, level: float = 0.95) -> int:
    """Particles needed for a mean diameter of a lognormal population within a relative error.

    n = u² s² (1 + 2 c² s²)/δ² with s = ln σ_g.

    Parameters
    ----------
    spread
        Geometric standard deviation σ_g, above 1.
    form
        Exponent c of the diameter ln D = μ + c s²: 0.5 arithmetic mean, 1.5 D[3,0], 2.5 D[3,2], 3 mass median, 3.5 D[4,3].
    relative
        Wanted relative half-width δ.
    level
        Confidence level.

    Raises
    ------
    ValueError
        If the spread is not above 1 or the relative error not positive.
    """
    if not spread > 1:
        raise ValueError(f"spread is a geometric standard deviation above 1, not {spread!r}")
    if not relative > 0:
        raise ValueError(f"relative must be positive, not {relative!r}")
    s2 = math.log(spread) ** 2
    u = float(stats.norm.ppf((1 + level) / 2))
    return math.ceil(u * u * s2 * (1 + 2 * form * form * s2) / relative**2)


@dataclass(frozen=True)
class PointCount:
    """Mean of the fields with its t interval (fractions), and the relative accuracy (fraction of the mean)."""

    mean: float
    s: float
    half_width: float
    relative: float
    n: int


def point_count(hits: npt.ArrayLike, points: int, *, level: float = 0.95) -> PointCount:
    """Volume fraction from point counts in several fields (ASTM E562): mean ± t·s/√n.

    Parameters
    ----------
    hits
        Hits per field, a boundary hit counting one half.
    points
        Points of the grid.
    level
        Confidence level.

    Raises
    ------
    ValueError
        If fewer than 2 fields are given or a count lies outside 0…points.
    """
    h = np.asarray(hits, dtype=np.float64).ravel()
    if h.size < 2:
        raise ValueError(f"a point count needs at least 2 fields, not {h.size}")
    if not ((h >= 0) & (h <= points)).all():
        raise ValueError(f"every count must lie between 0 and {points}")
    p = h / points
    s = float(p.std(ddof=1))
    half = float(stats.t.ppf((1 + level) / 2, h.size - 1)) * s / math.sqrt(h.size)
    mean = float(p.mean())
    return PointCount(mean, s, half, half / mean if mean > 0 else math.nan, int(h.size))


def fields_for_point_count(fraction: float, *, points: int, relative: float) -> int:
    """Fields needed for a relative accuracy when hits are independent: n ≥ (4/E²)(1−V)/(V·P) (ASTM E562 form).

    Raises
    ------
    ValueError
        If the fraction does not lie between 0 and 1, or the others are not positive.
    """
    if not 0 < fraction < 1:
        raise ValueError(f"fraction must lie between 0 and 1, not {fraction!r}")
    if points < 1 or not relative > 0:
        raise ValueError("points and relative must be positive")
    # decimal fractions as they were written: binary rounding would turn an exact 24 into 25
    v, e = Fraction(repr(float(fraction))), Fraction(repr(float(relative)))
    return math.ceil(4 / e**2 * (1 - v) / (v * points))


def wilson_interval(count: int, n: int, *, level: float = 0.95) -> tuple[float, float]:
    """Wilson score interval of a share; (0, 1) where nothing was counted.

    Raises
    ------
    ValueError
        If not 0 ≤ count ≤ n.
    """
    _check(count, n)
    if n == 0:
        return 0.0, 1.0
    z = float(stats.norm.ppf((1 + level) / 2))
    p = count / n
    middle = (p + z * z / (2 * n)) / (1 + z * z / n)
    half = z * math.sqrt(p * (1 - p) / n + z * z / (4 * n * n)) / (1 + z * z / n)
    # the two ends that are exact zeros or ones in theory are so in the result
    return (0.0 if count == 0 else middle - half), (1.0 if count == n else middle + half)


def clopper_pearson_interval(count: float, n: float, *, level: float = 0.95) -> tuple[float, float]:
    """Exact interval of a share (never covers less than the level); (0, 1) where nothing was counted.

    Fractional counts serve an effective sample size (Korn and Graubard 1998, Survey Methodology 24, 193).

    Raises
    ------
    ValueError
        If not 0 ≤ count ≤ n.
    """
    _check(count, n)
    a = (1 - level) / 2
    low = 0.0 if count == 0 else float(stats.beta.ppf(a, count, n - count + 1))
    high = 1.0 if count == n else float(stats.beta.ppf(1 - a, count + 1, n - count))
    return low, high


def _check(count: float, n: float) -> None:
    if not 0 <= count <= n:
        raise ValueError(f"need 0 <= count <= n, not count={count}, n={n}")
