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
from poroscan.segment.closing import close_mask, distance_to, fill_holes, stable_radius

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
ACCEPT = 0.25


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
    window = max(3, int(max(grey.shape) / 60) | 1)
    mean = ndimage.uniform_filter(grey, window)
    variance = ndimage.uniform_filter((grey - float(grey.mean())) ** 2, window) - (mean - float(grey.mean())) ** 2
    floor = 1e-8 + 0.01 * float(np.median(np.abs(variance)))
    return (0.5 * np.log(np.maximum(variance, 0) + floor)).astype(np.float32)


OUTLINES: Mapping[str, Callable[[Float32], Float32]] = MappingProxyType(
    {"pale": pale, "dark": dark, "texture": texture}
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
    """The candidate of one named way, or None where the feature does not separate anything."""
    feature = OUTLINES[name](grey)
    level, separation = half_level(feature)
    if not math.isfinite(level) or separation < 2.0:
        return None
    raw = feature > level
    raw = ndimage.binary_opening(raw, np.ones((2, 2)))
    if radius is None:
        radius = stable_radius(raw)
    bodies = fill_holes(close_mask(raw, radius))
    return Candidate(name, feature, level, raw, bodies, radius, quality(raw, bodies))


def quality(raw: BoolArray, bodies: BoolArray) -> float:
    """How well a candidate looks like particles before a ground, 0…1.

    The ground must reach the frame, be wide, and be free of the particle's class; the bodies must bulge towards it.
    """
    ground = ~bodies
    share = float(ground.mean())
    if share < 0.02 or not bodies.any():
        return 0.0
    frame = np.concatenate([ground[0], ground[-1], ground[:, 0], ground[:, -1]])
    width = float(_inner_radius(ground))
    hole = float(_inner_radius(bodies & ~raw)) if (bodies & ~raw).any() else 0.0
    if width < 1.5 * hole or float(frame.mean()) < 0.08:
        return 0.0
    bulge = _solidity(bodies) - _solidity(ground)
    return float(np.clip(0.5 + 0.5 * float(frame.mean()) + bulge - 0.5, 0.0, 1.0))


def _inner_radius(mask: BoolArray) -> float:
    return float(distance_to(~mask).max()) if not mask.all() else float(min(mask.shape))


def _solidity(mask: BoolArray) -> float:
    """Area-weighted solidity of the connected bodies of a mask."""
    from skimage.morphology import convex_hull_image

    labels, count = ndimage.label(mask)
    if count == 0:
        return 0.0
    sizes = np.bincount(labels.ravel())[1:]
    area = hull = 0.0
    for k in np.argsort(-sizes)[:12]:
        box = ndimage.find_objects(labels, int(k) + 1)[int(k)]
        area += float(sizes[k])
        hull += float(convex_hull_image(labels[box] == k + 1).sum())
    return area / hull


def find_bodies(grey: Float32, choice: str, *, radius: float | None) -> Candidate | None:
    """The best candidate among the ways asked for, on the reduced picture; None where none is good enough."""
    names = tuple(OUTLINES) if choice == "auto" else (choice,)
    found = [c for name in names if (c := candidate(name, grey, radius=radius)) is not None]
    found = [c for c in found if c.quality >= ACCEPT or choice != "auto"]
    return max(found, key=lambda c: c.quality, default=None)
