"""Porosity from the outline inwards: profiles, core, shell, skin, and the asymmetry between outer and inner half.

Two distances are used. The *depth* is the distance of a pixel from the outline. The *normalised radius* of a pixel is

    s = sqrt(share of the section that lies deeper than the pixel)        (cube root of the volume share in 3-D),

which is r/R for a disc (ball) and stays meaningful for any outline: s² < ½ is the deeper half of the area, whatever the shape. In an
edge view the centre lies in the fitted circle, and s is the distance from its centre over its radius.

Frames are no outline. In an edge view only pixels that are nearer to the outline than to the frame enter the profile
against depth (minus-sampling), because behind the frame there may be a nearer outline.

References
----------
Miles, J. Appl. Prob. 11 (1974) 1 (minus-sampling at the frame); Delesse, C. R. Acad. Sci. 25 (1847) 544. A section through
the middle of a graded particle over-weights its core: for φ = a + b r/R the section has a + 2b/3, the particle a + 3b/4.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from poroscan.measure import elongation, polar, size_gradient, skin
from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.tally import tally
from poroscan.measure.uncertainty import BlockEstimate, block_linear, block_ratio, estimate_of, threshold_sd
from poroscan.quantities import Curve, Estimate
from poroscan.section import BoolArray, Circle, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]
Int16 = npt.NDArray[np.int16]
Int32 = npt.NDArray[np.int32]

#: Classes of equal area (volume) into which the normalised radius is cut; core, shell and rings are made up of whole classes.
CLASSES = 1200

_BASES = (
    "core_porosity",
    "shell_porosity",
    "skin_porosity",
    "skin_thickness",
    "radial_asymmetry",
    "radial_slope",
    "pore_size_asymmetry",
)


@dataclass(frozen=True, eq=False)
class RingTable:
    """Pores and pixels by block and ring.

    Parameters
    ----------
    pores, pixels
        Counts of shape (blocks, rings); rings run outwards.
    radius
        Normalised radius at the ring edges, rings + 1 values.
    ndim
        2 for a section, 3 for a volume.
    """

    pores: Float
    pixels: Float
    radius: Float
    ndim: int

    def between(self, low: float, high: float) -> tuple[Float, Float]:
        """Pores and pixels of each block whose normalised radius lies between two values (to the nearest ring edge)."""
        i, j = (int(np.argmin(np.abs(self.radius - edge))) for edge in (low, high))
        return self.pores[:, i:j].sum(axis=1), self.pixels[:, i:j].sum(axis=1)

    def residual(self) -> RingTable:
        """The table with the pores expected from the radial trend taken off."""
        return RingTable(self.pores - self.pixels * trend(self), self.pixels, self.radius, self.ndim)

    def rings(self, number: int) -> RingTable:
        """The same table with equal-area classes pooled into ``number`` rings."""
        edges = np.rint(np.linspace(0, self.pixels.shape[1], number + 1)).astype(int)
        pores, pixels = (np.add.reduceat(t, edges[:-1], axis=1) for t in (self.pores, self.pixels))
        return RingTable(pores, pixels, self.radius[edges], self.ndim)


def radius_classes(
    depth: npt.NDArray[np.float32], particle: BoolArray, *, circle: Circle | None = None, classes: int = CLASSES
) -> Int16:
    """Class of the normalised radius of every pixel: classes of equal area (volume), 0 innermost; −1 outside.

    Parameters
    ----------
    depth
        Distance of every particle pixel from the outline, pixels, finite inside.
    particle
        bool mask of the same shape, 2-D or 3-D.
    circle
        Fitted circle of an edge view: s is then the distance from its centre over its radius, and pixels beyond it fall in the
        last class.

    Raises
    ------
    ValueError
        If no outline is in sight (infinite depth) and no circle is given.
    """
    if circle is not None:
        rows, columns = np.ogrid[: particle.shape[0], : particle.shape[1]]
        share = (((rows - circle.row) / circle.radius) ** 2).astype(np.float32)
        share = share + (((columns - circle.column) / circle.radius) ** 2).astype(np.float32)
        share *= classes
        out = np.minimum(share, classes - 1, out=share).astype(np.int16)
        out[~particle] = -1
        return out
    deepest = float(depth.max())
    if not math.isfinite(deepest):
        raise ValueError("depth must be finite inside particle: no outline is in sight (give the fitted circle)")
    # A fine histogram of depths replaces a sort; ties share the middle of their common rank.
    fine = 16 * CLASSES
    index = (depth * np.float32((fine - 1) / max(deepest, 1e-6))).astype(np.uint16)
    counts = _histogram(index, fine)
    counts[0] -= particle.size - np.count_nonzero(particle)  # pixels outside have depth 0
    deeper = counts.sum() - np.cumsum(counts) + counts / 2
    table = np.minimum(deeper * (classes / counts.sum()), classes - 1).astype(np.int16)
    out = table[index]
    out[~particle] = -1
    return out


def _histogram(index: npt.NDArray[np.uint16], size: int) -> npt.NDArray[np.int64]:
    """Counts of small integers, in slabs: counting by index costs eight bytes per number otherwise."""
    counts = np.zeros(size, np.int64)
    for slab in np.array_split(np.ravel(index), max(1, index.size // 2**18)):
        counts += np.bincount(slab, minlength=size)
    return counts


def ring_table(pores: BoolArray, blocks: Int32, classes: Int16, *, ndim: int, number: int = CLASSES) -> RingTable:
    """Count pores and pixels by block (1…n) and class of the normalised radius."""
    hits, pixels = tally(pores, blocks, classes, number=number)
    return RingTable(hits, pixels, (np.arange(number + 1) / number) ** (1 / ndim), ndim)


def trend(table: RingTable) -> Float:
    """Porosity of each class by pooled rings, the radial trend that is not scatter: shape (rings,) of ``table``.

    Twenty rings of equal area; the innermost are pooled until at least eight effective blocks share them, since a ring of one
    block would follow that block exactly.
    """
    n = table.pixels.shape[1]
    edges = np.rint(np.linspace(0, n, 21)).astype(int)
    first = next((k for k in range(1, 20) if _effective(table.pixels[:, : edges[k]]) >= 8), 20)
    edges = np.concatenate([[0], edges[first:]])
    pores, pixels = (np.add.reduceat(t.sum(axis=0), edges[:-1]) for t in (table.pores, table.pixels))
    return np.repeat(pores / np.maximum(pixels, 1), np.diff(edges))


def asymmetry(table: RingTable, *, inflation: float = 1.0) -> BlockEstimate:
    """(outer − inner) / (outer + inner) of the porosity, halves of equal area (volume); NaN without pores."""
    half = 0.5 ** (1 / table.ndim)
    inner, inner_pixels = table.between(0, half)
    outer, outer_pixels = table.between(half, 1)
    p, q = _share(outer, outer_pixels), _share(inner, inner_pixels)
    if not p + q > 0:
        return BlockEstimate(math.nan, math.nan, math.nan, math.nan, 0, 0.0)
    slope = 2 / (p + q) ** 2
    residual = table.residual()
    influence = slope * q * residual.between(half, 1)[0] / outer_pixels.sum()
    influence = influence - slope * p * residual.between(0, half)[0] / inner_pixels.sum()
    return block_linear((p - q) / (p + q), influence, outer_pixels + inner_pixels, inflation=inflation, scale="signed")


def slope(table: RingTable, *, inflation: float = 1.0, number: int = 20) -> BlockEstimate:
    """Slope of porosity against the normalised radius over the mean porosity, area-weighted least squares."""
    rings = table.rings(number)
    s = _ring_middle(rings)
    pixels, pores = rings.pixels.sum(axis=0), rings.pores.sum(axis=0)
    mean, centre = pores.sum() / pixels.sum(), np.average(s, weights=pixels)
    spread = float(np.sum(pixels * (s - centre) ** 2))
    if not (mean > 0 and spread > 0):
        return BlockEstimate(math.nan, math.nan, math.nan, math.nan, 0, 0.0)
    beta = float(np.sum(pores * (s - centre))) / spread
    residual = table.residual().rings(number).pores
    influence = residual @ ((s - centre) / spread) / mean
    influence -= beta / mean**2 * residual.sum(axis=1) / pixels.sum()
    return block_linear(beta / mean, influence, rings.pixels.sum(axis=1), inflation=inflation)


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Core, shell and skin, asymmetries, elongation; curves radial_porosity and radial_porosity_normalised."""
    names = _BASES if section.ndim == 3 else _BASES + polar.BASES + elongation.BASES
    if section.view == "interior" or not math.isfinite(float(shared.depth.max())):
        return undefined(names, "interior_view") if section.view == "interior" else undefined(names)
    circle = section.circle if section.view == "edge" else None
    classes = radius_classes(shared.depth, section.particle, circle=circle)
    estimates: dict[str, Estimate] = {name: Estimate(math.nan) for name in names}
    table = ring_table(section.pores, shared.blocks, classes, ndim=section.ndim)
    band = [
        ring_table(pores, shared.blocks, classes, ndim=section.ndim)
        for pores in (section.pores_low, section.pores_high)
        if pores is not None
    ]
    inner_shell = (1 - settings.shell_area_fraction) ** (1 / section.ndim)
    inflation = shared.block_inflation
    if section.view == "whole":
        outer = classes >= CLASSES // 2
        estimates["pore_size_asymmetry"] = size_gradient.estimate(section, shared, outer)
        del outer
    estimates["core_porosity"] = _zone(table, band, 0, settings.core_fraction, inflation)
    estimates["shell_porosity"] = _zone(table, band, inner_shell, 1, inflation)
    if section.view == "whole":
        result = asymmetry(table, inflation=inflation)
        sd = threshold_sd(*(asymmetry(t).value for t in band)) if len(band) == 2 else None
        estimates["radial_asymmetry"] = estimate_of(result, threshold=sd, scale="signed")
        estimates["radial_slope"] = estimate_of(slope(table, inflation=inflation))
    curves = [_normalised_curve(table, settings.radial_bins, inflation)]
    if section.view == "whole" and section.ndim == 2:
        expected = np.append(trend(table), 0).astype(np.float32)[classes]
        estimates |= polar.estimates(section, shared, expected=expected)
        del expected
    del classes
    profile = skin.depth_profile(section, shared.depth, shared.blocks)
    curves.append(skin.curve(profile, inflation=inflation))
    estimates |= skin.estimates(profile, settings, inflation=inflation, rng=rng)
    if section.view == "whole" and section.ndim == 2:
        estimates |= elongation.estimates(section, shared)
    return Part(estimates, tuple(curves))


def _zone(table: RingTable, band: list[RingTable], low: float, high: float, inflation: float) -> Estimate:
    pores, pixels = table.between(low, high)
    value = _share(pores, pixels)
    if not math.isfinite(value):
        return Estimate(value)
    influence = table.residual().between(low, high)[0] / pixels.sum()
    result = block_linear(value, influence, pixels, inflation=inflation, scale="logit")
    sd = threshold_sd(*(_share(*t.between(low, high)) for t in band)) if len(band) == 2 else None
    return estimate_of(result, threshold=sd, scale="logit")


def _normalised_curve(table: RingTable, number: int, inflation: float) -> Curve:
    rings = table.rings(number)
    middle = _ring_middle(rings)
    results = [
        block_ratio(n, d, inflation=inflation, scale="logit")
        for n, d in zip(rings.pores.T, rings.pixels.T, strict=True)
    ]
    y, low, high = (np.array([getattr(r, name) for r in results]) for name in ("value", "low", "high"))
    keep = np.isfinite(y)
    return Curve("radial_porosity_normalised", middle[keep], y[keep], low[keep], high[keep], x_power=0)


def _ring_middle(rings: RingTable) -> Float:
    """Mean normalised radius of each ring."""
    n, a, b = rings.ndim, rings.radius[:-1], rings.radius[1:]
    return np.asarray(n / (n + 1) * (b ** (n + 1) - a ** (n + 1)) / (b**n - a**n))


def _effective(pixels: Float) -> float:
    """Kish's effective number of blocks."""
    weight = pixels.sum(axis=1)
    square = float(np.square(weight).sum())
    return float(weight.sum()) ** 2 / square if square > 0 else 0.0


def _share(pores: Float, pixels: Float) -> float:
    total = float(pixels.sum())
    return float(pores.sum()) / total if total > 0 else math.nan
