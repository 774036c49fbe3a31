"""Counts and sums by label, without the temporary arrays (eight bytes per pixel and more) that they cost by indexing."""

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


def label_counts(labels: npt.NDArray[np.integer], *, number: int) -> npt.NDArray[np.int64]:
    """Pixels of each label 0…number − 1.

    Parameters
    ----------
    labels
        Integers of any shape and memory layout, 0…number − 1.
    number
        Number of labels.

    Raises
    ------
    ValueError
        If a label lies outside 0…number − 1.
    """
    counts: npt.NDArray[np.int64] = _counts(_checked(labels, number), number)
    return counts


def label_sums(
    labels: npt.NDArray[np.integer], values: npt.NDArray[np.generic], *, number: int
) -> npt.NDArray[np.float64]:
    """Sum of ``values`` over the pixels of each label 0…number − 1.

    Parameters
    ----------
    labels
        Integers, 0…number − 1.
    values
        Real numbers or truth values of the same shape.
    number
        Number of labels.

    Raises
    ------
    ValueError
        If the shapes differ or a label lies outside 0…number − 1.
    """
    if np.shape(values) != labels.shape:
        raise ValueError(f"values must have the shape of labels {labels.shape}, not {np.shape(values)}")
    sums: Float = _sums(_checked(labels, number), np.ravel(values), number)
    return sums


def _checked(labels: npt.NDArray[np.integer], number: int) -> npt.NDArray[np.integer]:
    if labels.size and not (int(labels.min()) >= 0 and int(labels.max()) < number):
        raise ValueError(f"labels must be integers 0…{number - 1}, not {labels.min()}…{labels.max()}")
    return np.ravel(labels)


@numba.njit(cache=True)
def _counts(labels: npt.NDArray[np.integer], number: int) -> npt.NDArray[np.int64]:
    counts = np.zeros(number, np.int64)
    for i in range(labels.size):
        counts[labels[i]] += 1
    return counts


@numba.njit(cache=True)
def _sums(labels: npt.NDArray[np.integer], values: npt.NDArray[np.generic], number: int) -> Float:
    sums = np.zeros(number, np.float64)
    for i in range(labels.size):
        sums[labels[i]] += values[i]
    return sums


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
