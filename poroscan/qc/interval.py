"""Interval of a batch mean that stays where the quantity can be: no porosity below 0, no diameter below nothing."""

from __future__ import annotations

import math

from poroscan.measure.uncertainty import t_quantile
from poroscan.qc.comparison import BatchMean
from poroscan.quantities import by_key

Bounds = tuple[float, float]

#: An interval of a fraction that covers more than this share of all it could be says nothing.
WIDEST_SHARE = 0.9
#: An interval of a positive quantity whose ends differ by more than this factor says nothing.
WIDEST_RATIO = 100.0

_FRACTIONS = ("porosity", "_fraction")
_BETWEEN_ENDS = ("radial_asymmetry", "pore_size_asymmetry")


def bounds_of(key: str) -> Bounds:
    """Smallest and largest value that a quantity can have.

    Parameters
    ----------
    key
        Column of particles.csv.

    Raises
    ------
    KeyError
        If no quantity has this column.
    """
    q = by_key(key)
    if q.base.endswith(_FRACTIONS) or q.base.startswith("porosity"):
        return 0.0, 1.0
    if q.base in _BETWEEN_ENDS:
        return -1.0, 1.0
    positive = q.power != 0 and not q.base.startswith("euler")
    return (0.0, math.inf) if positive else (-math.inf, math.inf)


def mean_interval(
    mean: BatchMean, *, level: float = 0.95, bounds: Bounds = (-math.inf, math.inf)
) -> tuple[float, float]:
    """Student's interval of a nested mean; NaN where too few particles were counted for one.

    Where mean ± t·se would leave what the quantity can be, it is formed on the logit scale (two bounds) or the logarithmic
    scale (lower bound only) by the delta method and taken back. An interval that then says nothing, because it covers
    almost all that is possible, is not given.

    Parameters
    ----------
    mean
        Nested estimate.
    level
        Confidence level.
    bounds
        Smallest and largest possible value.

    References
    ----------
    Agresti, Categorical Data Analysis, 3rd ed. (2013), sections 1.4 and 16.1 (delta method, logit scale).
    """
    if not (mean.df > 0 and math.isfinite(mean.standard_error) and math.isfinite(mean.mean)):
        return math.nan, math.nan
    half = t_quantile(mean.df, level=level) * mean.standard_error
    low, high = mean.mean - half, mean.mean + half
    if low >= bounds[0] and high <= bounds[1]:
        return low, high
    if not bounds[0] < mean.mean < bounds[1]:
        return math.nan, math.nan
    return _logit_interval(mean.mean, half, bounds) if math.isfinite(bounds[1]) else _log_interval(mean.mean, half)


def _logit_interval(mean: float, half: float, bounds: Bounds) -> tuple[float, float]:
    width = bounds[1] - bounds[0]
    p = (mean - bounds[0]) / width
    centre, reach = math.log(p / (1 - p)), min(half / width / (p * (1 - p)), 50.0)
    low, high = (bounds[0] + width / (1 + math.exp(-(centre + side * reach))) for side in (-1, 1))
    return (low, high) if high - low <= WIDEST_SHARE * width else (math.nan, math.nan)


def _log_interval(mean: float, half: float) -> tuple[float, float]:
    reach = half / mean
    if 2 * reach > math.log(WIDEST_RATIO):
        return math.nan, math.nan
    return mean * math.exp(-reach), mean * math.exp(reach)
