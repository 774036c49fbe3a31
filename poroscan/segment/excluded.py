"""Parts of a picture that show no specimen (a burnt-in scale bar): filled from their surroundings."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import numpy.typing as npt
from scipy import sparse
from scipy.sparse.linalg import spsolve

from poroscan.section import BoolArray

Float32 = npt.NDArray[np.float32]
Box = tuple[int, int, int, int]


def box_mask(shape: tuple[int, ...], boxes: Iterable[Box]) -> BoolArray:
    """True inside the boxes (row0, column0, row1, column1), half open; what lies outside the picture is left out."""
    mask = np.zeros(shape, bool)
    for top, left, bottom, right in boxes:
        mask[max(top, 0) : max(bottom, 0), max(left, 0) : max(right, 0)] = True
    return mask


def fill_unknown(grey: Float32, unknown: BoolArray) -> Float32:
    """Replace unknown pixels by the harmonic function that takes the values around them.

    A harmonic function has no maximum and no minimum inside: no particle and no pore can lie in the filled part alone, and one
    that reaches it ends there. The frame of the picture is a border without flow.

    Parameters
    ----------
    grey
        2-D float32 array (row, column).
    unknown
        bool array of the same shape.

    Returns
    -------
    float32 array
        ``grey`` itself where nothing is unknown, or nothing known.
    """
    if not unknown.any() or unknown.all():
        return grey
    number = np.full(grey.shape, -1)
    rows, columns = np.nonzero(unknown)
    number[rows, columns] = np.arange(rows.size)
    degree, right = np.zeros(rows.size), np.zeros(rows.size)
    first, second = [], []
    for down, across in ((-1, 0), (1, 0), (0, -1), (0, 1)):
        r, c = rows + down, columns + across
        inside = (r >= 0) & (r < grey.shape[0]) & (c >= 0) & (c < grey.shape[1])
        degree += inside
        own, r, c = np.nonzero(inside)[0], r[inside], c[inside]
        other = number[r, c]
        right[own[other < 0]] += grey[r[other < 0], c[other < 0]]
        first.append(own[other >= 0])
        second.append(other[other >= 0])
    i, j = np.concatenate(first), np.concatenate(second)
    matrix = sparse.csc_matrix((-np.ones(i.size), (i, j)), shape=(rows.size, rows.size)) + sparse.diags(degree)
    filled = grey.copy()
    filled[rows, columns] = spsolve(matrix.tocsc(), right)
    return filled
