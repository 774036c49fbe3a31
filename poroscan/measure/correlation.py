"""What the two-point correlation says about a section: correlation length, integral range, anisotropy, curves.

The pair counts themselves, and S2, stand in ``two_point``; this module sums them up.

References
----------
Debye, Anderson and Brumberger, J. Appl. Phys. 28 (1957) 679; Torquato, Random Heterogeneous Materials (2002), chapter 2.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from poroscan.measure.integral_range import integral_range
from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.two_point import RadialCorrelation, TwoPoint, correlation_length, radial_average, two_point
from poroscan.measure.uncertainty import block_linear, block_sums, estimate_of
from poroscan.quantities import Curve, Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

__all__ = [
    "RadialCorrelation",
    "TwoPoint",
    "anisotropy",
    "correlation_length",
    "correlation_length_estimate",
    "part",
    "radial_average",
    "two_point",
]

Float = npt.NDArray[np.float64]


def correlation_length_estimate(
    section: Section, radial: RadialCorrelation, *, blocks: npt.NDArray[np.int32], inflation: float = 1.0
) -> tuple[Estimate, bool]:
    """Correlation length with its sampling interval, and whether the section had blocks enough for one.

    The length solves U = S2(ℓ) − φ² − (φ − φ²)/e = 0, so its variance is that of U over the squared slope of the covariance;
    U is linear in ratios of block sums (pairs at lag ℓ along the array axes, and the porosity).
    """
    length = correlation_length(radial)
    if not math.isfinite(length):
        return Estimate(math.nan), True
    lag = max(1, round(length))
    phi = radial.s2[0]
    slope = float(np.gradient(radial.s2, radial.r)[min(lag, radial.r.size - 1)])
    if not slope < 0:
        return Estimate(length), False
    influence, pixels = _influence(section, lag, float(phi), blocks)
    # A length is positive: its interval is symmetric on the logarithmic scale.
    result = block_linear(length, influence / abs(slope), pixels, inflation=inflation, scale="log")
    return estimate_of(result), math.isfinite(result.sd)


def anisotropy(counts: TwoPoint) -> float:
    """Correlation length along the rows axis (down) over that along the columns axis (across); NaN where either is."""
    ndim = len(counts.reach)
    lengths = []
    for axis in (ndim - 2, ndim - 1):
        s2, pairs = counts.axis(axis)
        lengths.append(
            correlation_length(RadialCorrelation(np.arange(s2.size, dtype=np.float64), s2, pairs.astype(float)))
        )
    return lengths[0] / lengths[1]


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Correlation length, integral range, anisotropy; curves s2, s2_rows, s2_columns (and s2_planes in 3-D)."""
    range_name = "integral_range" if section.ndim == 2 else "integral_range_3d"
    if shared.n_pores in (0, shared.n_particle):
        return undefined(("correlation_length", range_name, "s2_anisotropy"))
    counts = shared.two_point
    radial = radial_average(counts)
    length, enough = correlation_length_estimate(
        section, radial, blocks=shared.blocks, inflation=shared.block_inflation
    )
    estimates = {
        "correlation_length": length,
        range_name: Estimate(integral_range(counts).value),
        "s2_anisotropy": Estimate(anisotropy(counts)),
    }
    names = ("s2_rows", "s2_columns") if section.ndim == 2 else ("s2_planes", "s2_rows", "s2_columns")
    curves = [_curve("s2", radial.r, radial.s2)]
    for axis, name in enumerate(names):
        s2, _ = counts.axis(axis)
        curves.append(_curve(name, np.arange(s2.size, dtype=np.float64), s2))
    return Part(estimates, tuple(curves), () if enough else ("few_blocks",))


def _influence(section: Section, lag: int, phi: float, blocks: npt.NDArray[np.int32]) -> tuple[Float, Float]:
    """Contribution of each block to U = S2(lag) − φ² − (φ − φ²)/e, and the pixels of each block."""
    pixels = block_sums(blocks)
    pore = block_sums(blocks, section.pores) - phi * pixels
    n = pixels.size
    hits, pairs = np.zeros(n), np.zeros(n)
    for axis in range(section.ndim):
        a, b = _shift(axis, lag, section.ndim)
        near = blocks[a]
        both = section.particle[b] & (near > 0)
        pairs += np.bincount(near[both], minlength=n + 1)[1:]
        hits += np.bincount(near[both & section.pores[a] & section.pores[b]], minlength=n + 1)[1:]
    total = max(float(pairs.sum()), 1.0)
    u = (hits - hits.sum() / total * pairs) / total - (2 * phi + (1 - 2 * phi) / math.e) * pore / pixels.sum()
    return np.asarray(u), pixels


def _shift(axis: int, lag: int, ndim: int) -> tuple[tuple[slice, ...], tuple[slice, ...]]:
    a, b = [slice(None)] * ndim, [slice(None)] * ndim
    a[axis], b[axis] = slice(None, -lag), slice(lag, None)
    return tuple(a), tuple(b)


def _curve(name: str, x: Float, y: Float) -> Curve:
    good = np.isfinite(y)
    unknown = np.full(int(good.sum()), math.nan)
    return Curve(name, x[good], y[good], unknown, unknown)
