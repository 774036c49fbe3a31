"""Sampling uncertainty from blocks of one section, and the combination of components after the GUM.

A section is one look at a random structure. Neighbouring pixels are not independent, so the pixel count says nothing
about the uncertainty; what counts is how many *independent pieces* the section holds. The section is cut into square
(cubic) blocks several correlation lengths wide, and the scatter between blocks gives the standard uncertainty of
every ratio (porosity = pore area over area; surface = boundary length over area) and every quantile.

References
----------
Künsch, Ann. Statist. 17 (1989) 1217 (blocks of dependent data); Cochran, Sampling Techniques (1977), chapter 6 (ratio
estimator); Woodruff, J. Am. Stat. Assoc. 47 (1952) 635 (interval of a quantile); MacKinnon and White, J. Econometrics 29
(1985) 305 (leverage correction); JCGM 100:2008, 5.1.2 and annex G.4 (combination, effective degrees of freedom).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special

from poroscan.measure.tally import label_counts, label_sums
from poroscan.quantities import Estimate

Scale = Literal["plain", "log", "logit", "signed"]

#: Effective number of blocks below which no interval is stated by blocks.
LEAST_BLOCKS = 5.0


@dataclass(frozen=True)
class BlockEstimate:
    """A value with its sampling uncertainty from blocks.

    Parameters
    ----------
    value
        The estimate over all blocks; NaN where the denominators sum to zero.
    sd
        Standard uncertainty; NaN with fewer than two effective blocks.
    low, high
        Ends of the interval at the level asked for; NaN where ``sd`` is.
    n_blocks
        Blocks that carry a denominator.
    df
        Effective degrees of freedom, Kish's effective number of blocks less one (Kish, Survey Sampling, 1965): slivers at the
        outline count for what they weigh.
    """

    value: float
    sd: float
    low: float
    high: float
    n_blocks: int
    df: float


def t_quantile(df: float, *, level: float = 0.95) -> float:
    """Two-sided Student factor, also for fractional degrees of freedom; infinite ``df`` gives the normal factor."""
    _check_level(level)
    p = 0.5 + level / 2
    return float(special.ndtri(p)) if math.isinf(df) else float(special.stdtrit(df, p))


def block_sums(
    blocks: npt.NDArray[np.int32], weights: npt.NDArray[np.generic] | None = None
) -> npt.NDArray[np.float64]:
    """Sum of ``weights`` (or the pixel count) over every block 1…n; pixels of block 0 are left out.

    ``blocks`` are labels as of ``Shared.blocks``; numbers that no pixel carries give 0, which the ratio leaves out.
    """
    n = int(blocks.max(initial=0))
    if weights is None:
        return label_counts(blocks, number=n + 1)[1:].astype(np.float64)
    return label_sums(blocks, weights, number=n + 1)[1:]


def block_ratio(
    numerators: npt.ArrayLike,
    denominators: npt.ArrayLike,
    *,
    level: float = 0.95,
    inflation: float = 1.0,
    scale: Scale = "plain",
) -> BlockEstimate:
    """Ratio of sums over blocks, with its uncertainty from the scatter of the blocks.

    With R = Σn/Σd, e_i = n_i − R d_i and h_i = d_i/Σd, the variance is Σ e_i²/(1 − h_i) / (Σd)² (ratio estimator with leverage
    correction), and the interval uses Student's factor at Kish's effective number of blocks less one.

    Parameters
    ----------
    numerators, denominators
        One number per block, finite; denominators not negative.
    level
        Level of the interval.
    inflation
        Factor on the variance for the correlation between neighbouring blocks (see ``integral_range.block_inflation``).
    scale
        Scale on which the interval is symmetric: ``log`` for positive quantities, ``logit`` for fractions; the interval then
        never leaves the range of the quantity.

    Raises
    ------
    ValueError
        If the two differ in length, hold NaN, or a denominator is negative.
    """
    num, den = _pair(numerators, denominators)
    if not inflation > 0:
        raise ValueError(f"inflation must be a positive factor, not {inflation!r}")
    keep = (den > 0) | (num != 0)
    num, den = num[keep], den[keep]
    total = float(den.sum())
    if total <= 0:
        return BlockEstimate(math.nan, math.nan, math.nan, math.nan, 0, 0.0)
    value = float(num.sum()) / total
    return block_linear(value, (num - value * den) / total, den, level=level, inflation=inflation, scale=scale)


def block_linear(
    value: float,
    influence: npt.NDArray[np.float64],
    weights: npt.NDArray[np.float64],
    *,
    level: float = 0.95,
    inflation: float = 1.0,
    scale: Scale = "plain",
) -> BlockEstimate:
    """A smooth function of several ratios, from what each block contributes to it to first order (delta method).

    Parameters
    ----------
    value
        The estimate.
    influence
        Contribution of each block: the gradient times that block's residual sums; adds up to zero over the section.
    weights
        Pixels (or another size) of each block, for the leverage correction and the degrees of freedom.
    """
    total = float(weights.sum())
    n = int(np.count_nonzero(weights))
    df = total**2 / float(np.square(weights).sum()) - 1 if total > 0 else 0.0
    if df < LEAST_BLOCKS - 1 or not math.isfinite(value):
        return BlockEstimate(value, math.nan, math.nan, math.nan, n, df)
    sd = math.sqrt(inflation * float(np.sum(influence**2 / (1 - weights / total))))
    low, high = symmetric_on(float(value), t_quantile(df, level=level) * sd, scale=scale)
    return BlockEstimate(float(value), sd, low, high, n, df)


def block_quantile(
    values: npt.ArrayLike,
    weights: npt.ArrayLike,
    block_of_value: npt.ArrayLike,
    *,
    q: float,
    level: float = 0.95,
    inflation: float = 1.0,
) -> BlockEstimate:
    """Weighted quantile with Woodruff's interval from blocks.

    The share of weight at or below the quantile is a ratio whose interval follows from ``block_ratio``; the quantiles at the two
    ends of that interval bound the quantile itself. No density is estimated. Where few features carry the smaller tail (the
    handful of largest pores above D90), Student's factor goes by their effective number rather than that of the blocks.

    A feature counts whole in one block, so no pair of points straddles a border: features need no ``inflation``, pixels do.

    Parameters
    ----------
    values, weights
        One number per feature (pore, pixel, chord); weights not negative.
    block_of_value
        Block of each feature, 1…n (0: counted in the value, not in the interval).
    q
        Share of weight below the quantile, 0…1.

    Raises
    ------
    ValueError
        If lengths differ, a value is NaN, a weight is negative or q lies outside 0…1.
    """
    x, w = _pair(values, weights, names=("values", "weights"))
    block = np.asarray(block_of_value, dtype=np.int64)
    if block.shape != x.shape:
        raise ValueError(f"block_of_value must have one entry per value ({x.size}), not shape {block.shape}")
    if not 0 <= q <= 1:
        raise ValueError(f"q must lie between 0 and 1, not {q!r}")
    if x.size == 0 or w.sum() <= 0:
        return BlockEstimate(math.nan, math.nan, math.nan, math.nan, 0, 0.0)
    order = np.argsort(x, kind="stable")
    x, w, block = x[order], w[order], block[order]
    value = float(_weighted_quantile(x, w, q))
    below = _share_below(x, w, value)
    n = int(block.max(initial=0)) + 1
    ratio = block_ratio(
        np.bincount(block, w * below, n)[1:],
        np.bincount(block, w, n)[1:],
        level=level,
        inflation=inflation,
        scale="logit",
    )
    if not math.isfinite(ratio.low):
        return BlockEstimate(value, math.nan, math.nan, math.nan, ratio.n_blocks, ratio.df)
    # The interval of the share is centred on the share actually reached, so that ties do not shift it away from q.
    df = min(ratio.df, max(_tail_features(x, w, value) - 1, 2.0))
    factor = t_quantile(df, level=level)
    ends = symmetric_on(ratio.value, factor * ratio.sd, scale="logit")
    low, high = (float(_weighted_quantile(x, w, p)) for p in ends)
    sd = (high - low) / (2 * factor)
    return BlockEstimate(value, sd, min(low, value), max(high, value), ratio.n_blocks, df)


def symmetric_on(value: float, half_width: float, *, scale: Scale) -> tuple[float, float]:
    """Interval value ± half_width, made symmetric on a scale by the delta method.

    ``log`` is for positive quantities, ``logit`` for fractions, ``signed`` for contrasts between −1 and 1 (Fisher's z =
    artanh; Fisher 1921, Metron 1, 3): the interval then stays where the quantity can be.
    """
    if scale == "log" and value > 0:
        factor = math.exp(half_width / value)
        return value / factor, value * factor
    if scale == "logit" and 0 < value < 1:
        step, centre = half_width / (value * (1 - value)), math.log(value / (1 - value))
        return float(special.expit(centre - step)), float(special.expit(centre + step))
    if scale == "signed" and -1 < value < 1:
        step, centre = half_width / (1 - value * value), math.atanh(value)
        return math.tanh(centre - step), math.tanh(centre + step)
    if scale not in ("plain", "log", "logit", "signed"):
        raise ValueError(f"scale must be plain, log, logit or signed, not {scale!r}")
    return value - half_width, value + half_width


@dataclass(frozen=True)
class Combined:
    """Combined standard uncertainty, its effective degrees of freedom and the coverage factor at ``level``."""

    sd: float
    df: float
    factor: float
    level: float

    @property
    def half_width(self) -> float:
        """Expanded uncertainty: factor times combined standard uncertainty."""
        return self.factor * self.sd


def combine(components: Mapping[str, float], *, df: Mapping[str, float] | None = None, level: float = 0.95) -> Combined:
    """Root of the sum of squares of independent components (JCGM 100:2008, 5.1.2), expanded by Student's factor at the
    Welch–Satterthwaite degrees of freedom (annex G.4.1).

    Parameters
    ----------
    components
        Standard uncertainties by name, all in the unit of the value. NaN makes the result NaN: an unknown part is not zero.
    df
        Degrees of freedom by name; a component without an entry is taken as exactly known (infinite).

    Raises
    ------
    ValueError
        If a component is negative, or ``df`` names a component that is not there.
    """
    _check_level(level)
    known = dict(df or {})
    if extra := set(known) - set(components):
        raise ValueError(f"df names components that are not there: {', '.join(sorted(extra))}")
    if any(not v > 0 for v in known.values()):
        raise ValueError(f"df must be positive degrees of freedom, not {known!r}")
    if any(u < 0 for u in components.values()):
        raise ValueError(f"components must be standard uncertainties of at least 0, not {dict(components)!r}")
    sd = math.sqrt(math.fsum(u * u for u in components.values()))
    if not sd > 0:
        return Combined(sd, math.inf, t_quantile(math.inf, level=level), level)
    spread = math.fsum(
        (u / sd) ** 4 / known[name] for name, u in components.items() if known.get(name, math.inf) < math.inf
    )
    total = 1 / spread if spread > 0 else math.inf
    return Combined(sd, total, t_quantile(total, level=level), level)


def expanded(
    value: float,
    components: Mapping[str, float],
    *,
    df: Mapping[str, float] | None = None,
    level: float = 0.95,
    scale: Scale = "plain",
) -> Estimate:
    """Estimate with its expanded interval and every component visible; low and high are NaN where a component is unknown."""
    combined = combine(components, df=df, level=level)
    low, high = symmetric_on(value, combined.half_width, scale=scale) if math.isfinite(value) else (math.nan, math.nan)
    return Estimate(value, low, high, MappingProxyType(dict(components)))


def estimate_of(
    block: BlockEstimate, *, threshold: float | None = None, scale: Scale = "plain", level: float = 0.95
) -> Estimate:
    """Estimate of the catalogue from a block estimate, with the threshold's component added where there is one.

    Parameters
    ----------
    block
        Value and sampling uncertainty.
    threshold
        Standard uncertainty from the threshold band; None where there was no threshold.
    scale
        Scale on which the combined interval is symmetric.
    """
    if threshold is None:
        parts = {} if math.isnan(block.sd) else {"sampling": block.sd}
        return Estimate(block.value, block.low, block.high, MappingProxyType(parts))
    components = {"sampling": block.sd, "threshold": threshold}
    if not (math.isfinite(block.sd) and math.isfinite(threshold)):
        known = {name: u for name, u in components.items() if math.isfinite(u)}
        return Estimate(block.value, components=MappingProxyType(known))
    return expanded(block.value, components, df={"sampling": block.df}, level=level, scale=scale)


def threshold_sd(low: float, high: float) -> float:
    """Standard uncertainty from the values at −1 and +1 standard uncertainty of the threshold: half their distance."""
    return abs(high - low) / 2


def _weighted_quantile(
    x: npt.NDArray[np.float64], w: npt.NDArray[np.float64], q: float | npt.NDArray[np.float64]
) -> npt.NDArray[np.float64]:
    """Quantile of sorted values: midpoint rule, each value at the middle of its own weight, linear between."""
    return np.asarray(np.interp(q, (np.cumsum(w) - w / 2) / w.sum(), x))


def _tail_features(x: npt.NDArray[np.float64], w: npt.NDArray[np.float64], value: float) -> float:
    """Kish's effective number of features beyond a value, on the side where there are fewer."""
    sides = (w[x >= value], w[x <= value])
    return min(float(v.sum() ** 2 / np.square(v).sum()) if v.sum() > 0 else 1.0 for v in sides)


def _share_below(x: npt.NDArray[np.float64], w: npt.NDArray[np.float64], value: float) -> npt.NDArray[np.float64]:
    """1 below, 0 above, and one half at the value itself (the midpoint rule for ties)."""
    return np.where(x < value, 1.0, np.where(x > value, 0.0, 0.5))


def _pair(
    a: npt.ArrayLike, b: npt.ArrayLike, *, names: tuple[str, str] = ("numerators", "denominators")
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    x, y = np.asarray(a, dtype=np.float64), np.asarray(b, dtype=np.float64)
    if x.ndim != 1 or x.shape != y.shape:
        raise ValueError(f"{names[0]} and {names[1]} must be 1-D and of one length, not {x.shape} and {y.shape}")
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        raise ValueError(f"{names[0]} and {names[1]} must be finite (leave out features without a value)")
    if (y < 0).any():
        raise ValueError(f"{names[1]} must not be negative")
    return x, y


def _check_level(level: float) -> None:
    if not 0 < level < 1:
        raise ValueError(f"level must lie between 0 and 1 (0.95 for a 95 % interval), not {level!r}")
