"""Particles against their surroundings.

Each named way gives a candidate mask of what is unlike the ground; ``find_bodies`` closes and fills it, judges it, and takes
the best. Work is done on a picture reduced to about 600 pixels, where noise is low and morphology cheap; the outline is then
drawn at full resolution at the half-way grey value between ground and particle.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import numpy.typing as npt
from scipy import ndimage
from skimage.filters import threshold_otsu

from poroscan.section import BoolArray, FloatArray
from poroscan.segment.closing import close_mask, fill_holes, inner_radius, mouth_radius, split_touching

Float32 = npt.NDArray[np.float32]

#: Longest side, in pixels, of the reduced picture.
COARSE = 600


@dataclass(frozen=True, eq=False)
class Candidate:
    """One way of telling particles from ground, on the reduced picture.

    Parameters
    ----------
    name
        ``pale``, ``dark`` or ``texture``.
    feature
        float32 array in which the particle is high.
    level
        Half-way value of ``feature`` between ground and particle.
    raw
        ``feature > level``.
    bodies
        ``raw`` closed and filled.
    radius
        Closing radius in reduced pixels.
    quality
        0…1; below ``ACCEPT`` there is no outline.
    """

    name: str
    feature: Float32
    level: float
    raw: BoolArray
    bodies: BoolArray
    radius: float
    quality: float


#: Least quality of an outline.
ACCEPT = 0.15


def reduce_picture(grey: Float32) -> tuple[Float32, int]:
    """Mean over square blocks, so that the longest side is at most ``COARSE``; returns the block edge as well."""
    k = max(1, math.ceil(max(grey.shape) / COARSE))
    if k == 1:
        return grey, 1
    rows, columns = (-(-n // k) * k for n in grey.shape)
    padded = np.pad(grey, ((0, rows - grey.shape[0]), (0, columns - grey.shape[1])), mode="edge")
    return padded.reshape(rows // k, k, columns // k, k).mean(axis=(1, 3), dtype=np.float32), k


def pale(grey: Float32) -> Float32:
    """Feature of pale particles on dark ground: the grey value."""
    return grey


def dark(grey: Float32) -> Float32:
    """Feature of dark particles on pale ground: the negative of the grey value."""
    return -grey


def texture(grey: Float32) -> Float32:
    """Feature of rough particles on smooth ground: logarithm of the local standard deviation."""
    window = texture_window(grey.shape)
    mean = ndimage.uniform_filter(grey, window)
    variance = ndimage.uniform_filter((grey - float(grey.mean())) ** 2, window) - (mean - float(grey.mean())) ** 2
    floor = 1e-8 + 0.01 * float(np.median(np.abs(variance)))
    return (0.5 * np.log(np.maximum(variance, 0) + floor)).astype(np.float32)


def texture_window(shape: tuple[int, ...]) -> int:
    """Edge of the window of ``texture`` in pixels, odd."""
    return max(3, int(max(shape) / 60) | 1)


def smoothness(grey: Float32) -> Float32:
    """Feature of smooth particles on rough ground: the negative of ``texture``."""
    return -texture(grey)


OUTLINES: Mapping[str, Callable[[Float32], Float32]] = MappingProxyType(
    {"pale": pale, "dark": dark, "texture": texture, "smooth": smoothness}
)


def half_level(feature: FloatArray) -> tuple[float, float]:
    """Half-way value between the two classes of a feature, and how far apart they are.

    Starts at Otsu's threshold and then takes the mean of the two class medians until it stands, so that the value lies midway
    between ground and material however much there is of each.

    Returns
    -------
    level : float
    separation : float
        Distance of the medians over the pooled spread (1.4826 times the median deviation).

    References
    ----------
    N. Otsu, IEEE Trans. Syst. Man Cybern. 9 (1979) 62; T. W. Ridler, S. Calvard, ibid. 8 (1978) 630.
    """
    values = feature[np.isfinite(feature)]
    if values.size == 0 or float(values.min()) == float(values.max()):
        return math.nan, 0.0
    level = float(threshold_otsu(values))
    for _ in range(20):
        low, high = values[values <= level], values[values > level]
        if low.size == 0 or high.size == 0:
            return math.nan, 0.0
        new = 0.5 * (float(np.median(low)) + float(np.median(high)))
        if abs(new - level) < 1e-5:
            break
        level = new
    spread = math.sqrt(0.5 * (_mad(low) ** 2 + _mad(high) ** 2)) + 1e-9
    return level, (float(np.median(high)) - float(np.median(low))) / spread


def _mad(values: FloatArray) -> float:
    return 1.4826 * float(np.median(np.abs(values - np.median(values))))


def candidate(name: str, grey: Float32, *, radius: float | None) -> Candidate | None:
    """The candidate of one named way, or None where the feature does not separate anything.

    Where the radius is free and the bodies are ragged, twice the radius is tried as well.
    """
    feature = OUTLINES[name](grey)
    level, separation = half_level(feature)
    if not math.isfinite(level) or separation < 2.0:
        return None
    first = _closed(name, feature, level, radius)
    ground = feature[~first.bodies]
    if name in BY_GREY and ground.size > 100 and first.raw.any():
        level = _clear_of_ground(ground, feature[first.raw], level)
        first = _closed(name, feature, level, radius)
    if radius is not None or first.quality >= 0.6:
        return first
    return max(first, _closed(name, feature, level, 2.0 * first.radius), key=lambda c: c.quality)


def _closed(name: str, feature: Float32, level: float, radius: float | None) -> Candidate:
    raw = ndimage.binary_opening(feature > level, np.ones((2, 2)))
    radius = mouth_radius(raw) if radius is None else radius
    bodies = fill_holes(close_mask(raw, radius))
    if name in BY_GREY:
        bodies = _sharp_bodies(feature, raw, bodies)
    return Candidate(name, feature, level, raw, bodies, radius, quality(name, feature, raw, bodies))


def _clear_of_ground(ground: Float32, material: Float32, level: float) -> float:
    """The level raised above a rough ground, but not beyond three quarters of the way to the particle."""
    middle, top = float(np.median(ground)), float(np.median(material))
    return min(max(level, middle + 2.5 * _mad(ground)), middle + 0.75 * (top - middle))


def _sharp_bodies(feature: Float32, raw: BoolArray, bodies: BoolArray) -> BoolArray:
    """Bodies with a sharp border; blotches of the ground fade out instead.

    Sharpness is the range of the feature within two pixels of the border over the contrast of particle and ground.
    """
    labels, count = ndimage.label(bodies)
    if count == 0 or bodies.all() or not raw.any():
        return bodies
    contrast = float(np.median(feature[raw])) - float(np.median(feature[~bodies]))
    rim = bodies & ~ndimage.binary_erosion(bodies, iterations=3, border_value=1)
    border = raw & ~ndimage.binary_erosion(raw, border_value=1) & rim
    span = ndimage.maximum_filter(feature, 5) - ndimage.minimum_filter(feature, 5)
    keep = np.zeros(count + 1, bool)
    present = np.unique(labels[border])
    keep[present] = ndimage.median(span, np.where(border, labels, 0), present) >= SHARP * contrast
    keep[0] = False
    return keep[labels]


def quality(name: str, feature: Float32, raw: BoolArray, bodies: BoolArray) -> float:
    """How well a candidate looks like particles before a ground, 0…1.

    The ground must reach the frame and be much wider than the pores; the bodies must be compact and bulge towards it. Many plain
    dark bodies are the pores of an interior view, and very many bodies of any kind its structure.
    """
    ground = ~bodies
    if float(ground.mean()) < 0.02 or not bodies.any():
        return 0.0
    frame = float(np.concatenate([ground[0], ground[-1], ground[:, 0], ground[:, -1]]).mean())
    holes = bodies & ~raw
    width = inner_radius(ground)
    hole = inner_radius(holes) if holes.any() else 0.0
    least = (0.04 if name in BY_GREY else 0.1) * math.sqrt(bodies.size)
    if frame < 0.08 or width < max(2.5 * hole, least):
        return 0.0
    solid = _solidity(bodies)
    if solid < 0.8:
        solid = _solidity_apart(bodies, width)
    if solid < 0.8 or _like_pores(name, feature, raw, bodies):
        return 0.0
    return float(np.clip(0.5 * frame + solid - _solidity(ground), 0.0, 1.0))


def _like_pores(name: str, feature: Float32, raw: BoolArray, bodies: BoolArray) -> bool:
    """Whether bodies are rather the pores, or the cells, of an interior view."""
    labels, _ = ndimage.label(bodies)
    sizes = np.bincount(labels.ravel())[1:]
    large = int((sizes > 0.04 * sizes.max()).sum())
    if large > (MANY if name in BY_GREY else MANY // 8):
        return True
    if name != "dark":
        return False
    own = feature[bodies & raw]
    black = float(feature.max()) - float(np.median(own)) < 0.1 * (
        float(np.median(own)) - float(np.median(feature[~raw]))
    )
    plain = float((bodies & ~raw).sum()) < 0.04 * float(bodies.sum())
    return (plain or black) and (large > 3 or float(sizes.max()) < 0.08 * bodies.size)


#: Ways that draw the outline by grey value.
BY_GREY = ("pale", "dark")

#: Least sharpness of a body's border.
SHARP = 0.7

#: Neck at which bodies are taken apart before they are judged (as ``SegmentSettings.split_neck``), and most pieces of that kind.
TOUCHING_NECK = 0.7
FEW = 6

#: More bodies than this are the structure of an interior, not particles.
MANY = 60


def _solidity(mask: BoolArray) -> float:
    """Area-weighted solidity of the connected bodies of a mask."""
    labels, count = ndimage.label(mask)
    return _solidity_of(labels, np.bincount(labels.ravel())[1:]) if count else 0.0


def _solidity_of(labels: npt.NDArray[np.int32], sizes: npt.NDArray[np.integer]) -> float:
    from skimage.morphology import (
        convex_hull_image,
    )  # the hull of the pixels' corners: small bodies are not solid by being small

    area = hull = 0.0
    boxes = ndimage.find_objects(labels)
    for k in np.argsort(-sizes)[:12]:
        box = boxes[int(k)]
        area += float(sizes[k])
        hull += float(convex_hull_image(labels[box] == k + 1).sum())
    return area / hull


def _solidity_apart(bodies: BoolArray, width: float) -> float:
    """Solidity of bodies that hang together by necks, taken apart; 0 where the pieces are not those of a few touching particles.

    Particles are few, fill their hulls, and are large against the gaps that a structure of walls would leave between them: the
    ground holds a disc as large as half the largest piece.
    """
    labels = split_touching(bodies, TOUCHING_NECK)
    sizes = np.bincount(labels.ravel())[1:]
    large = sizes > 0.1 * sizes.max()
    if int(large.sum()) > FEW or float(sizes[large].sum()) < 0.9 * float(sizes.sum()):
        return 0.0
    if width < 0.5 * math.sqrt(float(sizes.max()) / math.pi):
        return 0.0
    solid = _solidity_of(labels, sizes)
    return solid if solid > 0.9 else 0.0


def find_bodies(grey: Float32, choice: str, *, radius: float | None) -> Candidate | None:
    """The best candidate among the ways asked for, on the reduced picture; None where none is good enough."""
    names = tuple(OUTLINES) if choice == "auto" else (choice,)
    found = {name: c for name in names if (c := candidate(name, grey, radius=radius)) is not None}
    if choice != "auto":
        return found.get(choice)
    good = [c for c in found.values() if c.quality >= ACCEPT]
    # an outline drawn by grey value is exact to the pixel, one by texture to its window: it is the last resort
    return max(good, key=lambda c: c.quality - (0.0 if c.name in BY_GREY else 0.3), default=None)


#: Bodies that cover less than this share of the picture, before a ground whose grey values stand less than this many spreads away
#: from theirs, may be debris on a surface.
SCANT, FAINT = 0.05, 3.5


def like_debris(best: Candidate) -> bool:
    """Whether bodies are small against the picture and hardly stand out: debris on a surface rather than particles before a ground."""
    return float(best.bodies.mean()) < SCANT and half_level(best.feature)[1] < FAINT
