"""Integral range: how many independent pieces a section holds, from the two-point correlation.

The variance of the porosity of a window W is exactly

    Var(φ̂) = Σ_h C(h) n(h) / n(0)²,     C(h) = S2(h) − φ²,  n(h) = number of pairs of pixels h apart inside W.

For a window much larger than the structure this is φ(1 − φ) A / |W| with the integral range A = Σ_h C(h) / φ(1 − φ). The sums
here use the pair counts of the actual outline, so that small and round windows are exact too.

References
----------
Matheron, The Theory of Regionalized Variables (1971); Lantuéjoul, J. Microsc. 161 (1991) 387; Kanit et al., Int. J. Solids
Struct. 40 (2003) 3647.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.measure.two_point import RadialCorrelation, TwoPoint, correlation_length, radial_average

Float = npt.NDArray[np.float64]

#: The covariance is summed up to this many correlation lengths; beyond lies noise.
REACH_LENGTHS = 5.0
#: For the correlation between blocks, a small correction, a shorter reach loses little and is far less noisy.
NEAR_LENGTHS = 3.0


@dataclass(frozen=True)
class IntegralRange:
    """Sampling variance of the porosity of one window.

    Parameters
    ----------
    value
        Integral range in px^n: area (volume) that counts as one independent piece.
    porosity_sd
        Standard uncertainty of the porosity of this window.
    pieces
        Independent pieces in the window: φ(1 − φ) / variance.
    cutoff
        Lag up to which the covariance was summed, pixels.
    """

    value: float
    porosity_sd: float
    pieces: float
    cutoff: float


def porosity_variance(counts: TwoPoint, covariance: Callable[[Float], Float]) -> float:
    """Variance of the porosity of a window for a *known* isotropic covariance C(r), exact for the window's pixels.

    Parameters
    ----------
    counts
        Pair counts of the window (its ``hits`` are not used); lags beyond its reach are taken as uncorrelated.
    covariance
        Function of an array of distances in pixels.
    """
    n0 = float(counts.pairs[counts.zero])
    weighted = counts.pairs * counts.multiplicity() * covariance(counts.distance())
    return float(weighted.sum()) / n0**2


def integral_range(counts: TwoPoint, *, cutoff: float | None = None) -> IntegralRange:
    """Integral range and porosity uncertainty estimated from the section itself.

    The covariance measured about the section's own mean is too low by the very variance sought (over all lags it
    sums to zero); with N pairs within the cut-off, V = Σ n (Ĉ + V) / n(0)² is solved for V.

    Parameters
    ----------
    counts
        Pair counts of pores and outline.
    cutoff
        Largest lag summed, pixels; None takes five correlation lengths.

    Returns
    -------
    IntegralRange; all NaN without pores or walls, or where the cut-off exceeds the lags at hand so far that the window
    holds fewer than about four pieces.
    """
    radial = radial_average(counts)
    length = correlation_length(radial)
    if cutoff is None:
        cutoff = REACH_LENGTHS * length
    if not math.isfinite(cutoff):
        return IntegralRange(math.nan, math.nan, math.nan, math.nan)
    near = radial.r <= cutoff
    n0 = float(radial.pairs[0])
    share = float(radial.pairs[near].sum()) / n0**2
    phi = float(radial.s2[0])
    raw = float((radial.covariance[near] * radial.pairs[near]).sum()) / n0**2
    if share > 0.5 or not raw > 0:
        return IntegralRange(math.nan, math.nan, math.nan, cutoff)
    variance = raw / (1 - share)
    value = _ring_sum(radial, near, variance, len(counts.reach)) / (phi * (1 - phi))
    return IntegralRange(value, math.sqrt(variance), phi * (1 - phi) / variance, cutoff)


def block_inflation(radial: RadialCorrelation, *, side: float, size: float, ndim: int) -> float:
    """Factor on a variance from blocks for the correlation between neighbouring blocks.

    Blocks taken as independent miss the pairs that straddle their borders. To first order a window of side b has the
    variance A(1 − c/b)/b², c = Σ_h (|h_1| + … + |h_n|) C(h) / Σ_h C(h) (second-order terms included below), so the blocks'
    estimate must be multiplied by the ratio of that bracket for the section (``size``) and for a block (``side``).

    Parameters
    ----------
    radial
        Radial correlation of the section.
    side, size
        Side of a block and side of the square (cube) of the section's own area (volume), pixels.
    ndim
        2 or 3.

    Returns
    -------
    Factor between 1 and 2; 1.0 where it cannot be told (a structure so coarse is flagged by its few blocks anyway).
    """
    length = correlation_length(radial)
    if not math.isfinite(length) or not side > 0:
        return 1.0
    near = (radial.r <= min(NEAR_LENGTHS * length, 0.5 * size)) & (np.arange(radial.r.size) > 0)
    r, c = radial.r[near], radial.covariance[near]
    shell = r ** (ndim - 1)
    zero = radial.covariance[0] / (2 * math.pi if ndim == 2 else 4 * math.pi)
    total = zero + float((c * shell).sum())
    if not total > 0:
        return 1.0

    def bracket(b: float) -> float:
        return (zero + float((c * shell * _overlap(r / b, ndim)).sum())) / total

    block, whole = bracket(side), bracket(size)
    return float(min(max(whole / block, 1.0), 2.0)) if block > 0 else 1.0


def _overlap(x: Float, ndim: int) -> Float:
    """Mean over directions of the share of a unit square (cube) that overlaps its copy moved by x, for x up to about 1."""
    if ndim == 2:  # 1 − (|h1| + |h2|) + |h1 h2|: means of |cos| + |sin| and of |cos sin|
        return np.asarray(np.maximum(1 - 4 / math.pi * x + x**2 / math.pi, 0))
    # 3-D: means over the sphere of |u|+|v|+|w| = 3/2, |uv|+|vw|+|wu| = 2/π, |uvw| = 1/4π
    return np.asarray(np.maximum(1 - 1.5 * x + 2 / math.pi * x**2 - x**3 / (4 * math.pi), 0))


def _ring_sum(radial: RadialCorrelation, near: npt.NDArray[np.bool_], variance: float, ndim: int) -> float:
    """Σ_h (Ĉ + V) over all lags of the rings, by the number of grid points that a ring holds on average."""
    c = radial.covariance[near] + variance
    r = radial.r[near]
    shell = 2 * math.pi * r if ndim == 2 else 4 * math.pi * (r**2 + 1 / 12)
    shell[0] = 1.0
    return float((c * shell).sum())
