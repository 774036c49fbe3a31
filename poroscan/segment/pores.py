"""From grey values to pores: named ways, and the band of each threshold."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import numpy.typing as npt
from scipy import ndimage
from skimage.filters import threshold_otsu

from poroscan.section import BoolArray
from poroscan.segment.histogram import Levels
from poroscan.segment.result import Threshold
from poroscan.segment.settings import SegmentSettings
from poroscan.segment.trained import Odds

Float32 = npt.NDArray[np.float32]


@dataclass(frozen=True, eq=False)
class Inside:
    """What a pore method sees: one particle, pores dark.

    Parameters
    ----------
    grey
        Smoothed and levelled grey values (float32), turned over where pores are bright.
    mask
        The outline's inside.
    noise
        Standard deviation of the noise left in ``grey``.
    levels
        Levels of material and pore.
    """

    grey: Float32
    mask: BoolArray
    noise: float
    levels: Levels


@dataclass(frozen=True, eq=False)
class Pores:
    """Pore mask with its band.

    Parameters
    ----------
    pores, low, high
        bool arrays; ``low`` holds fewer pores, ``high`` more. Both equal ``pores`` where no threshold exists.
    level, uncertainty
        Threshold and its standard uncertainty in the grey values given; NaN where there is none.
    method
        In words.
    flags
        Keys of ``quantities.FLAGS``.
    """

    pores: BoolArray
    low: BoolArray
    high: BoolArray
    level: float
    uncertainty: float
    method: str
    flags: tuple[str, ...] = ()


#: A mask as a function of the shift of the threshold.
_MaskAt = Callable[[float], BoolArray]


def auto(inside: Inside, settings: SegmentSettings) -> Pores:
    """Half-way between pore and material where pores have a level of their own, else the lower limit of the material."""
    levels = inside.levels
    if not math.isfinite(levels.limit):
        return _none(inside, "nothing darker than the material", ("no_pores",))
    if math.isfinite(levels.pore):
        level = levels.valley
        contrast = levels.material - levels.pore
        other = abs(level - 0.5 * (levels.pore + levels.material)) / math.sqrt(3.0)
        uncertainty = math.hypot(0.04 * contrast, other, inside.noise)
        method = "between the modes of pore and material"
    else:
        level = levels.limit
        uncertainty = math.hypot(0.5 * levels.spread, inside.noise)
        method = "lower limit of the material's grey values"
    shrink = math.isfinite(levels.pore) or _within_blur(inside)
    return _banded(inside, settings, lambda s: inside.grey < level + s, level, uncertainty, method, shrink=shrink)


def _within_blur(inside: Inside) -> bool:
    """Whether the limit is nearer to the material than a tenth of the contrast, where the blur of an edge still reaches."""
    levels = inside.levels
    dark = np.percentile(inside.grey[inside.mask & (inside.grey < levels.limit)], 25)
    return levels.material - levels.limit < 0.1 * (levels.material - float(dark))


def global_threshold(inside: Inside, settings: SegmentSettings) -> Pores:
    """One threshold by Otsu (1979), refused where the two classes are not apart."""
    values = inside.grey[inside.mask]
    if float(values.max() - values.min()) < 1e-6:
        return _none(inside, "one grey value", ("no_threshold",))
    level = float(threshold_otsu(values))
    low, high = values[values <= level], values[values > level]
    gap = float(np.median(high) - np.median(low))
    if gap < 4.0 * max(inside.levels.spread, inside.noise):
        return _none(inside, "Otsu's threshold would split the material's own grey values", ("no_threshold",))
    middle = 0.5 * float(np.median(high) + np.median(low))
    uncertainty = max(abs(middle - level) / math.sqrt(3.0), 0.02 * gap)
    return _banded(inside, settings, lambda s: inside.grey < level + s, level, uncertainty, "Otsu's threshold")


def local_threshold(inside: Inside, settings: SegmentSettings) -> Pores:
    """A threshold that follows the local brightness of the material."""
    base = auto(inside, settings)
    if not math.isfinite(base.level):
        return base
    window = settings.local_window_px or max(15, int(math.sqrt(float(inside.mask.sum())) / 4))
    material = inside.mask & ~base.high
    weight = ndimage.uniform_filter(material.astype(np.float32), window)
    local = ndimage.uniform_filter(np.where(material, inside.grey, np.float32(0)), window)
    trusted = weight > 0.05
    offset = np.where(trusted, local / np.maximum(weight, 1e-3) - inside.levels.material, 0.0).astype(np.float32)
    grey = inside.grey - offset
    words = f"local threshold, window {window} pixels"
    return _banded(inside, settings, lambda s: grey < base.level + s, base.level, base.uncertainty, words)


def two_level(inside: Inside, settings: SegmentSettings) -> Pores:
    """Pores start where it is clearly dark and grow to the limit of the material (hysteresis, Canny 1986)."""
    levels = inside.levels
    if not math.isfinite(levels.limit):
        return _none(inside, "nothing darker than the material", ("no_pores",))
    strict = levels.material - 2.0 * (levels.material - levels.limit)

    def mask(shift: float) -> BoolArray:
        labels, count = ndimage.label((inside.grey < levels.limit + shift) & inside.mask, np.ones((3, 3)))
        keep = np.zeros(count + 1, bool)
        keep[labels[(inside.grey < strict + shift) & inside.mask]] = True
        keep[0] = False
        return keep[labels]

    return _banded(inside, settings, mask, levels.limit, 0.35 * levels.spread, "two levels")


def trained(inside: Inside, settings: SegmentSettings, odds: Odds) -> Pores:
    """Pixels more like the user's pore strokes than the material ones; the band is one standard uncertainty of the log-odds."""
    least = settings.min_pore_px or 4
    seen_through = np.zeros_like(inside.mask) if odds.surroundings is None else odds.surroundings
    shifts = (0.0, 1.0, -1.0)
    masks = [(odds.value > s * odds.error) | seen_through for s in shifts]
    pores, low, high = (tidy(m & inside.mask, inside.mask, least) for m in masks)
    flags = () if pores.any() else ("no_pores",)
    return Pores(pores, low & pores, high | pores, math.nan, math.nan, "classifier trained on strokes", flags)


def fixed(inside: Inside, settings: SegmentSettings, level: float) -> Pores:
    """The user's own threshold."""
    return _banded(
        inside, settings, lambda s: inside.grey < level + s, level, settings.threshold_uncertainty, "given threshold"
    )


PORES: Mapping[str, Callable[[Inside, SegmentSettings], Pores]] = MappingProxyType(
    {"auto": auto, "global": global_threshold, "local": local_threshold, "two_level": two_level}
)


def _banded(
    inside: Inside,
    settings: SegmentSettings,
    mask_at: _MaskAt,
    level: float,
    uncertainty: float,
    method: str,
    *,
    shrink: bool = True,
) -> Pores:
    least = settings.min_pore_px or 4
    middle = _half_height(inside)
    masks = []
    for shift in (0.0, -uncertainty, uncertainty):
        rough = tidy(mask_at(shift) & inside.mask, inside.mask, least)
        masks.append(tidy(_on_the_slope(rough, inside, middle + shift, shrink=shrink), inside.mask, least))
    pores = masks[0]
    share = float(pores.sum()) / max(float(inside.mask.sum()), 1.0)
    flags = ("no_pores",) if share == 0.0 else (("all_pores",) if share > 0.97 else ())
    return Pores(pores, masks[1] & pores, masks[2] | pores, level, uncertainty, method, flags)


#: Reach in pixels within which the two sides of an edge are looked for, and within which a border may move.
REACH = 3


def _half_height(inside: Inside) -> Float32:
    """Midway between the darkest and the brightest grey value within ``REACH`` pixels, inside the outline only.

    Where pores have a level, the bright side counts up to half the contrast above the material (an edge, not a foreign grain),
    and slopes of less than half the contrast get NaN: they are no borders of pores.
    """
    size = 2 * REACH + 1
    top = ndimage.maximum_filter(np.where(inside.mask, inside.grey, np.float32(-9)), size)
    bottom = ndimage.minimum_filter(np.where(inside.mask, inside.grey, np.float32(9)), size)
    levels = inside.levels
    if not math.isfinite(levels.pore):
        return np.float32(0.5) * (top + bottom)
    contrast = levels.material - levels.pore
    np.minimum(top, np.float32(levels.material + 0.5 * contrast), out=top)
    return np.where(top - bottom > 0.5 * contrast, np.float32(0.5) * (top + bottom), np.float32(np.nan))


def _on_the_slope(pores: BoolArray, inside: Inside, middle: Float32, *, shrink: bool) -> BoolArray:
    """Move the borders of pores to half height of their own slope.

    A bright edge, a shallow pore or a small one shifts the crossing of a common threshold away from the steepest place; half
    height between the two sides stays there.
    """
    wall = inside.mask & ~pores
    near = ndimage.binary_dilation(pores, iterations=2) & ndimage.binary_dilation(wall, iterations=2) & inside.mask
    moved = np.where(near & ~np.isnan(middle), inside.grey < middle, pores)
    return moved if shrink else moved | pores


def _none(inside: Inside, method: str, flags: tuple[str, ...]) -> Pores:
    empty = np.zeros_like(inside.mask)
    return Pores(empty, empty, empty, math.nan, math.nan, method, flags)


def tidy(pores: BoolArray, mask: BoolArray, least: int) -> BoolArray:
    """Drop pores, and islands inside pores, of fewer than ``least`` pixels."""
    return mask & ~_without_small(mask & ~_without_small(pores, least), least)


def _without_small(mask: BoolArray, least: int) -> BoolArray:
    if least <= 1:
        return mask
    labels, _ = ndimage.label(mask)
    keep = np.bincount(labels.ravel()) >= least
    keep[0] = False
    return keep[labels]


def threshold_of(pores: Pores, *, bright: bool) -> Threshold | None:
    """The threshold on the picture's own scale; None where there is none."""
    if not math.isfinite(pores.level):
        return None
    return Threshold(-pores.level if bright else pores.level, pores.uncertainty, bright, pores.method)
