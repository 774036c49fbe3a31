"""Closing the mouths of surface pores, and separating particles that touch.

Discs are Euclidean, by distance transform; the frame of the picture neither closes nor opens anything.
"""

from __future__ import annotations

import edt
import numpy as np
import numpy.typing as npt
from scipy import ndimage
from skimage.morphology import local_maxima, reconstruction
from skimage.segmentation import watershed

from poroscan.section import BoolArray
from poroscan.segment.hull import convex_hull

#: Radii tried for an automatic closing, as fractions of the square root of the picture's area.
_RADII = (0.0, 0.005, 0.0075, 0.011, 0.0165, 0.025, 0.0375, 0.055)


def distance_to(mask: BoolArray) -> npt.NDArray[np.float32]:
    """Euclidean distance of every pixel to the nearest True pixel centre; 0 inside ``mask``."""
    if not mask.any():
        return np.full(mask.shape, np.inf, np.float32)
    return edt.edt(np.ascontiguousarray(~mask), black_border=False, parallel=1)


def close_mask(mask: BoolArray, radius: float) -> BoolArray:
    """Morphological closing by a disc, the mask being continued beyond the frame by its edge pixels.

    Parameters
    ----------
    mask
        bool array (row, column).
    radius
        Radius of the disc in pixels; 0 returns the mask itself.

    Returns
    -------
    bool array
        Contains ``mask``.
    """
    if radius < 0.5 or not mask.any():
        return mask
    pad = int(np.ceil(radius)) + 2
    wide = np.pad(mask, pad, mode="edge")
    grown = distance_to(wide) <= radius
    if grown.all():
        return np.ones_like(mask)
    shrunk = distance_to(~grown) > radius
    return shrunk[pad:-pad, pad:-pad] | mask


def fill_holes(mask: BoolArray) -> BoolArray:
    """Fill what is enclosed by the mask; ground that reaches the frame is not enclosed."""
    ground, count = ndimage.label(~mask)
    if count == 0:
        return mask
    outside = np.zeros(count + 1, bool)
    for line in (ground[0], ground[-1], ground[:, 0], ground[:, -1]):
        outside[line] = True
    outside[0] = False
    return ~outside[ground]


def inner_radius(mask: BoolArray) -> float:
    """Radius of the largest disc inside a mask, the frame not counting as its border."""
    if mask.all():
        return 0.5 * float(max(mask.shape))
    return float(distance_to(~mask).max())


def mouth_radius(raw: BoolArray) -> float:
    """Closing radius that keeps the pores open to the outside within the outline.

    First the radius is raised until the filled area hardly grows any more (a packing of loose beads becomes one body); then it is
    at least an eighth of the radius of the largest body.

    Parameters
    ----------
    raw
        bool array: pixels unlike the ground.

    Returns
    -------
    float
        Radius in pixels.
    """
    scale = float(np.sqrt(raw.size))
    filled = [fill_holes(close_mask(raw, f * scale)) for f in _RADII[:1]]
    for f in _RADII[1:]:
        filled.append(fill_holes(close_mask(raw, f * scale)))
        if len(filled) > 2 and filled[-1].sum() < 1.02 * filled[-3].sum():
            break
    chosen = max(len(filled) - 3, 0)
    return max(_RADII[chosen] * scale, MOUTH * inner_radius(filled[chosen]))


#: Automatic closing radius relative to the radius of the body.
MOUTH = 0.125


#: Area of the hull over that of a body that needs no wider closing.
FILLED = 1.004


def close_body(
    body: BoolArray, *, radius: float | None, pore: float = 0.0, holes: float = 0.0
) -> tuple[BoolArray, float]:
    """Close one body and fill it.

    Parameters
    ----------
    body
        bool array: one particle's pixels, holes filled.
    radius
        Closing radius in pixels; None takes an eighth of the body's own inner radius, three and eight tenths where they add no
        more than a rim as porous as the inside would, and closes wider mouths where the bay behind them is no larger than
        the pores inside.
    pore
        Area of the largest pore inside, square pixels.
    holes
        Pore fraction inside, 0…1, as far as known.

    Returns
    -------
    closed : bool array
    radius : float
        Radius used.
    """
    if radius is not None:
        return fill_holes(close_mask(body, radius)), radius
    used = MOUTH * inner_radius(body)
    closed = fill_holes(close_mask(body, used))
    inner = inner_radius(closed)
    # the wider closings stay within the hull: nothing is left for them where the body nearly fills it
    if float(convex_hull(closed).sum()) < FILLED * float(closed.sum()):
        return closed | cut_pores(closed, pore=max(pore, 0.004 * float(closed.sum()))), used
    for factor, allowed in ((0.3, max(0.025, 0.1 * holes)), (0.8, 0.06 * holes)):
        wider = fill_holes(close_mask(closed, factor * inner)) if allowed > 0 else closed
        if wider.sum() <= (1 + allowed) * closed.sum():
            closed, used = wider, factor * inner
    return closed | cut_pores(closed, pore=max(pore, 0.004 * float(closed.sum()))), used


def cut_pores(body: BoolArray, *, pore: float) -> BoolArray:
    """Bays of a body that are pores cut open by its outline.

    Of the pieces between the body and its convex hull, those that are no larger than one and a half of the largest pore inside and
    deep against their mouth (depth² at least 0.3 of the area; a half disc has 0.64, a shallow bay next to nothing).

    Parameters
    ----------
    body
        bool array, one body.
    pore
        Area of the largest pore inside, square pixels.

    Returns
    -------
    bool array
    """
    if not body.any():
        return body
    hull = convex_hull(body)
    bays, count = ndimage.label(ndimage.binary_opening(hull & ~body, np.ones((3, 3))))
    if count == 0:
        return np.zeros_like(body)
    depth = distance_to(~np.pad(hull, 1))[1:-1, 1:-1]
    deepest = np.atleast_1d(ndimage.maximum(depth, bays, np.arange(1, count + 1)))
    area = np.bincount(bays.ravel(), minlength=count + 1)[1:]
    keep = np.concatenate([[False], (area <= 1.5 * pore) & (deepest**2 >= 0.3 * area)])
    chosen = ndimage.binary_dilation(keep[bays], np.ones((3, 3)))
    return chosen & hull & ~body


def split_touching(mask: BoolArray, neck: float) -> npt.NDArray[np.int32]:
    """Label bodies, separating those that hang together by a narrow neck.

    Maxima of the distance from the ground are bodies; two of them are one body where the pass between them is wider than
    ``neck`` times the smaller maximum. The rest is separated along the watershed of the distance.

    Parameters
    ----------
    mask
        bool array (row, column), holes filled.
    neck
        Fraction in 0…1; 0 never splits.

    Returns
    -------
    int32 array
        0 outside, bodies from 1 on.

    References
    ----------
    S. Beucher, C. Lantuéjoul, Int. Workshop on Image Processing, Rennes 1979 (watershed); the depth criterion
    is relative, so that it does not depend on magnification.
    """
    labels, count = ndimage.label(mask)
    labels = labels.astype(np.int32)
    if count == 0 or neck <= 0:
        return labels
    depth = distance_to(~mask)
    markers = _bodies(depth, mask, neck)
    if int(markers.max()) <= count:
        return labels
    return watershed(-depth, markers, mask=mask).astype(np.int32)


def _bodies(depth: npt.NDArray[np.float32], mask: BoolArray, neck: float) -> npt.NDArray[np.int32]:
    """Markers of the maxima that stand out: the logarithm makes a relative depth an absolute one."""
    height = np.where(mask, np.log(np.maximum(depth, 1.0)) + 1.0, 0.0)
    lowered = np.maximum(height + np.log(neck), 0.0)
    flat = reconstruction(lowered, height, method="dilation")
    markers, count = ndimage.label(local_maxima(flat) & mask, np.ones((3, 3)))
    return _without_bumps(markers.astype(np.int32), count, depth, mask)


#: A maximum shallower than this fraction of the deepest of its body is a bump, not a particle.
BUMP = 0.35


def _without_bumps(
    markers: npt.NDArray[np.int32], count: int, depth: npt.NDArray[np.float32], mask: BoolArray
) -> npt.NDArray[np.int32]:
    if count == 0:
        return markers
    bodies, number = ndimage.label(mask)
    deepest = np.concatenate([[0.0], np.atleast_1d(ndimage.maximum(depth, bodies, np.arange(1, number + 1)))])
    index = np.arange(1, count + 1)
    own = np.atleast_1d(ndimage.maximum(depth, markers, index))
    body = np.atleast_1d(ndimage.maximum(bodies, markers, index)).astype(int)
    keep = np.concatenate([[False], own >= BUMP * deepest[body]])
    return (np.cumsum(keep) * keep)[markers].astype(np.int32)
