"""Lineal path function: how likely a straight segment of length z lies wholly in one phase.

L(z) is counted over all segments along the array axes that lie wholly inside the outline: of the grid segments of z steps (z + 1
pixel centres), the share whose pixels all belong to the phase. A run of n pixels holds n − z such segments, so the run
lengths of the phase and of the particle give every L(z) at once. L(0) is the share of the phase.

References
----------
Lu and Torquato, Phys. Rev. A 45 (1992) 922; Serra, Image Analysis and Mathematical Morphology (1982), chapter 10.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from poroscan.measure.part import Part
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.two_point import check_masks
from poroscan.measure.uncertainty import block_ratio
from poroscan.quantities import Curve, Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

BoolArray = npt.NDArray[np.bool_]
Float = npt.NDArray[np.float64]

#: The curve ends where fewer segments than this are left to judge by.
_LEAST_SEGMENTS = 100


def runs(mask: BoolArray, *, axis: int) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]]:
    """Runs of True pixels along one axis.

    Returns
    -------
    start, length
        Flat index (in the array with ``axis`` moved last, C order) and length of every run.
    """
    lines = np.moveaxis(mask, axis, -1)
    n = lines.shape[-1]
    padded = np.zeros((lines.size // n, n + 1), dtype=bool)
    padded[:, :n] = lines.reshape(-1, n)
    flat = padded.ravel()
    change = np.flatnonzero(flat[1:] != flat[:-1]) + 1
    if flat[0]:
        change = np.concatenate([[0], change])
    start, end = change[0::2], change[1::2]
    return start - start // (n + 1), end - start


def lineal_path(phase: BoolArray, particle: BoolArray, *, axis: int | None = None) -> tuple[Float, Float]:
    """Lineal path function of a phase inside an outline.

    Parameters
    ----------
    phase, particle
        bool masks of one shape, 2-D or 3-D; the phase lies inside the particle.
    axis
        Axis of the segments; None pools all axes.

    Returns
    -------
    path, segments
        L(z) for z = 0, 1, … steps of one pixel, and the number of segments that fit into the outline at each z; the
        arrays end with the longest segment that fits.

    Raises
    ------
    ValueError
        As ``two_point.check_masks``.
    """
    check_masks(phase, particle)
    axes = range(particle.ndim) if axis is None else (axis,)
    top = max(particle.shape) + 1
    inside, all_ = np.zeros(top), np.zeros(top)
    for a in axes:
        inside += _segments(runs(phase, axis=a)[1], top)
        all_ += _segments(runs(particle, axis=a)[1], top)
    keep = all_ > 0
    return inside[keep] / all_[keep], all_[keep]


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Curve of the pores, and the lineal path length of pores and walls with intervals."""
    path, segments = lineal_path(section.pores, section.particle)
    keep = segments >= min(_LEAST_SEGMENTS, segments[0])
    path = path[keep]
    unknown = np.full(path.size, math.nan)
    estimates = {
        "lineal_path_length": _length(section.pores, shared, path),
        "wall_lineal_path_length": _length(shared.walls, shared, lineal_path(shared.walls, section.particle)[0]),
    }
    curve = Curve("lineal_path", np.arange(path.size, dtype=np.float64), path, unknown, unknown)
    return Part(estimates, (curve,))


def path_length(path: Float) -> float:
    """∫ L(z) dz / L(0) in pixels (trapezoidal rule); NaN for an absent phase."""
    return float(np.trapezoid(path) / path[0]) if path[0] > 0 else math.nan


def _segments(lengths: npt.NDArray[np.intp], top: int) -> Float:
    """Number of segments of z steps, Σ max(n − z, 0) over runs of n pixels, for z = 0 … top − 1."""
    histogram = np.bincount(lengths, minlength=top + 1).astype(np.float64)
    longer = np.cumsum(histogram[::-1])[::-1]  # runs of at least n pixels
    return np.asarray(np.cumsum(longer[::-1])[::-1][1 : top + 1])


def _length(phase: BoolArray, shared: Shared, path: Float) -> Estimate:
    """Path length with its interval; each run counts in the block of its first pixel.

    ∫L dz / φ is, edge effects apart, Σ n²/2 over Σ n of the runs of the phase: the scatter of that ratio gives the relative
    uncertainty, which is passed to the edge-corrected value.
    """
    value = path_length(path)
    if not math.isfinite(value):
        return Estimate(math.nan)
    n_blocks = int(shared.blocks.max())
    num, den = np.zeros(n_blocks), np.zeros(n_blocks)
    for axis in range(phase.ndim):
        start, length = runs(phase, axis=axis)
        blocks = np.moveaxis(shared.blocks, axis, -1)
        block = blocks[np.unravel_index(start, blocks.shape)]
        num += np.bincount(block, length**2 / 2.0, n_blocks + 1)[1:]
        den += np.bincount(block, length.astype(np.float64), n_blocks + 1)[1:]
    ratio = block_ratio(num, den, inflation=shared.block_inflation, scale="log")
    if not math.isfinite(ratio.sd):
        return Estimate(value)
    scale = value / ratio.value
    return Estimate(value, ratio.low * scale, ratio.high * scale, {"sampling": ratio.sd * scale})
