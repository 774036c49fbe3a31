"""Counting pixels by two labels at once, without the temporary arrays that the same count costs by indexing."""

from __future__ import annotations

import numba
import numpy as np
import numpy.typing as npt

from poroscan.section import BoolArray

Float = npt.NDArray[np.float64]
Int32 = npt.NDArray[np.int32]


def tally(pores: BoolArray, blocks: Int32, classes: npt.NDArray[np.integer], *, number: int) -> tuple[Float, Float]:
    """Pore pixels and pixels by block and class.

    Parameters
    ----------
    pores
        bool mask.
    blocks
        Block labels 1…n of the same shape; pixels of block 0 are left out.
    classes
        Class 0…number − 1 of each pixel; pixels of a negative class are left out.
    number
        Number of classes.

    Returns
    -------
    pores, pixels
        float64 arrays of shape (n, number).
    """
    n = int(blocks.max(initial=0))
    hits, pixels = _tally(np.ravel(pores), np.ravel(blocks), np.ravel(classes), n, number)
    return hits.astype(np.float64), pixels.astype(np.float64)


@numba.njit(cache=True)
def _tally(
    pores: BoolArray, blocks: Int32, classes: npt.NDArray[np.integer], n: int, number: int
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    hits = np.zeros((n, number), np.int64)
    pixels = np.zeros((n, number), np.int64)
    for i in range(blocks.size):
        block, k = blocks[i], classes[i]
        if block > 0 and k >= 0:
            pixels[block - 1, k] += 1
            if pores[i]:
                hits[block - 1, k] += 1
    return hits, pixels
