"""Distance to the boundary of a mask, with the half pixel accounted for."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from poroscan.measure.squared_distance import squared_distance
from poroscan.section import BoolArray

Float32 = npt.NDArray[np.float32]


def distance_inside(mask: BoolArray) -> Float32:
    """Euclidean distance of every True pixel to the nearest False pixel centre; the array border is no boundary.

    Parameters
    ----------
    mask
        bool array, 2-D or 3-D.

    Returns
    -------
    float32 array; 0 on False pixels and inf everywhere inside where no pixel is False.

    Raises
    ------
    ValueError
        If ``mask`` is not a 2-D or 3-D bool array.
    """
    if mask.all():
        return np.full(mask.shape, np.inf, dtype=np.float32)
    # Through float64 in small pieces: a squared distance of more than 4096² would lose its last digit in float32.
    distance: Float32 = np.sqrt(squared_distance(mask), out=np.empty(mask.shape, np.float32), casting="same_kind")
    return distance


def boundary_distance(mask: BoolArray) -> Float32:
    """Distance of every True pixel centre from the boundary itself: half a pixel less than to the nearest False centre.

    Without the half pixel, mean distances in the void of Boolean discs of radius 16 px are too long by 5 per cent.
    """
    distance = distance_inside(mask)
    distance -= np.float32(0.5) * mask
    return distance
