"""Sphere sizes of one section with their intervals: stereology applied to the table of pore bodies.

Means are ratios of sums over the sections (``stereology``), so their intervals come from blocks like every other ratio; the median
comes from unfolded linear classes and its interval from resampled blocks.
"""

from __future__ import annotations

import math
from types import MappingProxyType
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from poroscan.measure.part import Part
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.size_gradient import centroid_index
from poroscan.measure.stereology import kernel, linear_classes
from poroscan.measure.uncertainty import LEAST_BLOCKS, block_ratio, estimate_of
from poroscan.quantities import Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]

BASES = ("sphere_d50", "sphere_d32", "sphere_d43", "sphere_density")


def estimates(
    diameters: npt.ArrayLike,
    block_of: npt.ArrayLike,
    *,
    block_area: npt.ArrayLike,
    rng: np.random.Generator,
    weights: npt.ArrayLike | None = None,
    inflation: float = 1.0,
    replicates: int = 400,
) -> dict[str, Estimate]:
    """Sphere D50 (by volume), D[3,2], D[4,3] and number per volume from section diameters.

    Parameters
    ----------
    diameters
        Diameters of the pore bodies in the section, pixels, positive; may be empty.
    block_of
        Block (1…n) of each body.
    block_area
        Area of each block 1…n, pixels.
    rng
        For the resampling of blocks.
    weights
        Frame weight of each body; None counts each once.
    inflation
        Factor on variances for the correlation between blocks.
    replicates
        Number of resamples.

    Raises
    ------
    ValueError
        If lengths differ or a diameter is not positive.
    """
    d, block, area = np.asarray(diameters, float), np.asarray(block_of, np.int64), np.asarray(block_area, float)
    if d.size == 0:
        return {base: Estimate(math.nan) for base in BASES}
    if block.shape != d.shape:
        raise ValueError(f"block_of must have one entry per diameter ({d.size}), not shape {block.shape}")
    w = np.ones_like(d) if weights is None else np.asarray(weights, float)
    n = area.size + 1
    by = {k: np.bincount(block, w * d**k, n)[1:] for k in (-1, 1, 2, 3)}
    d32 = block_ratio(3 * math.pi / 8 * by[2], by[1], inflation=inflation, scale="log")
    d43 = block_ratio(32 / (9 * math.pi) * by[3], by[2], inflation=inflation, scale="log")
    density = block_ratio(2 / math.pi * by[-1], area, inflation=inflation, scale="log")
    return {
        "sphere_d50": _median(d, w, block, area, rng, inflation, replicates),
        "sphere_d32": estimate_of(d32),
        "sphere_d43": estimate_of(d43),
        "sphere_density": estimate_of(density),
    }


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Sphere sizes behind the pore bodies of a section; nothing in a volume, where the bodies are seen whole.

    Bodies that the frame cuts are left out, and the others counted by their Miles–Lantuéjoul weight.
    """
    if section.ndim != 2:
        return Part()
    table = shared.pore_table
    keep = (table["area"] >= settings.smallest_pore_px) & ~table["touches_frame"]
    d = table["diameter"][keep]
    block = shared.block_at(centroid_index(section, table))[keep]
    weights = frame_weight(d, section.particle.shape) if section.touches_frame else None
    return Part(
        estimates(
            d,
            block,
            block_area=shared.block_pixels,
            weights=weights,
            rng=rng,
            inflation=shared.block_inflation,
            replicates=settings.bootstrap_replicates,
        )
    )


def frame_weight(diameters: Float, frame: tuple[int, ...]) -> Float:
    """Weight of a round feature that lies wholly in a rectangular frame: frame area over the area that its centre may take.

    Z1 Z2 / ((Z1 − d)(Z2 − d)) (Miles 1974; Lantuéjoul 1980), with the diameter for both Feret diameters; features that nearly
    fill the frame get the weight of one that leaves a pixel.
    """
    room = [np.maximum(n - diameters, 1.0) / n for n in frame]
    return np.asarray(1 / (room[0] * room[1]))


def _median(
    d: Float,
    w: Float,
    block: npt.NDArray[np.int64],
    area: Float,
    rng: np.random.Generator,
    inflation: float,
    replicates: int,
) -> Estimate:
    whole = linear_classes(d, area=float(area.sum()), weights=w)
    value = whole.quantile(0.5)
    used = np.unique(block[block > 0])
    if not math.isfinite(value) or used.size < LEAST_BLOCKS:
        return Estimate(value)
    # Classes stay those of the whole section; what is drawn anew is how many sections of each block fall in each.
    step = np.clip(np.searchsorted(whole.edges, d, side="right") - 1, 0, whole.diameter.size - 1)
    row = np.searchsorted(used, block)
    keep = w * (block > 0)
    row = np.minimum(row, used.size - 1)
    counts = np.zeros((used.size, whole.diameter.size))
    sums = np.zeros((used.size, 2))
    np.add.at(counts, (row, step), keep)
    np.add.at(sums, row, np.stack([d * keep, d**2 * keep], axis=1))
    weights = rng.multinomial(used.size, np.full(used.size, 1 / used.size), size=replicates).astype(float)
    density = (weights @ counts) @ np.linalg.inv(kernel(whole.edges)).T
    drawn = _drawn_medians(whole.edges[1:], density, weights @ sums)
    spread = drawn[np.isfinite(drawn)]
    if spread.size < 0.9 * replicates:
        return Estimate(value)
    widen = math.sqrt(inflation)
    sd = float(np.std(np.log(spread))) * widen
    low, high = (float(np.exp(widen * (np.log(q) - np.log(value)))) for q in np.quantile(spread, (0.025, 0.975)))
    return Estimate(value, value * min(low, 1), value * max(high, 1), MappingProxyType({"sampling": value * sd}))


def _drawn_medians(diameter: Float, density: Float, sums: Float) -> Float:
    """``Unfolded.quantile(0.5)`` of many densities (resample, class), each moved to the Sauter diameter of its own sections (their
    number-weighted sums of d and d²); NaN where a sum is not positive."""
    with np.errstate(divide="ignore", invalid="ignore"):
        sauter = 3 * math.pi / 8 * sums[:, 1] / sums[:, 0]
        classes = (density @ diameter**3) / (density @ diameter**2)
        weight = density * diameter**3
        middle = np.maximum.accumulate(np.cumsum(weight, axis=1) - weight / 2, axis=1)
        half = weight.sum(axis=1) / 2
        right = np.minimum(np.maximum(np.sum(middle <= half[:, None], axis=1), 1), diameter.size - 1)
        left, each = np.maximum(right - 1, 0), np.arange(half.size)
        low, high = middle[each, left], middle[each, right]
        share = np.where(high > low, np.clip((half - low) / (high - low), 0, 1), 0.0)
        median = diameter[left] + share * (diameter[right] - diameter[left])
        return np.where((sums[:, 0] > 0) & (half > 0) & (classes > 0), median * sauter / classes, math.nan)
