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


def stable_radius(mask: BoolArray) -> float:
    """Closing radius beyond which the filled area hardly grows.

    The filled, closed area A(r) rises while mouths are being bridged and is flat once they are. The smallest radius is taken from
    which on the next two octave-thirds add less than 1 % each.

    Parameters
    ----------
    mask
        bool array: pixels unlike the ground.

    Returns
    -------
    float
        Radius in pixels.
    """
    scale = float(np.sqrt(mask.size))
    areas = [float(fill_holes(close_mask(mask, f * scale)).sum()) for f in _RADII]
    for k in range(len(_RADII) - 2):
        if areas[k] > 0 and areas[k + 1] < 1.01 * areas[k] and areas[k + 2] < 1.02 * areas[k]:
            return _RADII[k] * scale
    return _RADII[-1] * scale


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
    markers, _ = ndimage.label(local_maxima(flat) & mask, np.ones((3, 3)))
    return markers.astype(np.int32)
