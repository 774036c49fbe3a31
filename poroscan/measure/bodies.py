"""Pieces and bodies of the pores: what hangs together, and where touching pores part.

A *piece* is a connected region of pore (8 neighbours in the plane, 26 in space; the polymer then has 4 and 6). A *body* is a
part of a piece with a centre of its own: the pore pixels are flooded from the deepest point downwards, and where two basins
meet they become one, unless the neck is narrower than the smaller basin's inscribed disc by more than the split depth:

    d(neck) < (1 − split_depth) · min(d(centre 1), d(centre 2)),     d = distance to the wall, half a pixel taken off.

This is the watershed of the distance to the wall with a relative depth of basins. Basins meet first at their widest neck, so the
result does not depend on the order among the rest.

References
----------
Beucher and Lantuéjoul, Int. Workshop on Image Processing (1979); Vincent and Soille, IEEE Trans. PAMI 13 (1991) 583; Grimaud,
SPIE 1769 (1992) 292 (dynamics of basins).
"""

from __future__ import annotations

import math

import numba
import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import BoolArray

Float32 = npt.NDArray[np.float32]
Int32 = npt.NDArray[np.int32]


def pieces(mask: BoolArray, *, diagonal: bool) -> tuple[Int32, int]:
    """Label connected pieces 1…n; diagonal neighbours count where ``diagonal`` is True."""
    structure = ndimage.generate_binary_structure(mask.ndim, mask.ndim if diagonal else 1)
    labels = np.empty(mask.shape, dtype=np.int32)
    n = ndimage.label(mask, structure=structure, output=labels)
    return labels, int(n)


def beside_outline(particle: BoolArray) -> BoolArray:
    """Particle pixels with a face neighbour outside the particle; beyond the array lies the frame, which is no outline."""
    near = np.zeros(particle.shape, dtype=bool)
    for axis in range(particle.ndim):
        a: list[slice] = [slice(None)] * particle.ndim
        b = list(a)
        a[axis], b[axis] = slice(1, None), slice(None, -1)
        near[tuple(a)] |= ~particle[tuple(b)]
        near[tuple(b)] |= ~particle[tuple(a)]
    near &= particle
    return near


def split_bodies(pores: BoolArray, distance: Float32, *, split_depth: float) -> tuple[Int32, int]:
    """Label pore bodies 1…n: connected pieces parted at their necks.

    Parameters
    ----------
    pores
        bool array, 2-D or 3-D.
    distance
        Distance of every pore pixel from the wall, half a pixel taken off; inf is allowed (nothing but pore).
    split_depth
        Share 0…1 by which a neck must be narrower than the smaller of the two bodies that it parts.

    Returns
    -------
    labels : int32 array, 0 outside the pores; bodies are numbered in the order of their first pixel
    n : number of bodies

    Raises
    ------
    ValueError
        If the shapes differ or ``split_depth`` lies outside 0…1.
    """
    if pores.shape != distance.shape:
        raise ValueError(f"pores and distance must have one shape, not {pores.shape} and {distance.shape}")
    if not 0 <= split_depth <= 1:
        raise ValueError(f"split_depth must lie between 0 and 1, not {split_depth!r}")
    shape = (1, *pores.shape) if pores.ndim == 2 else pores.shape
    flat = np.ascontiguousarray(distance).ravel()
    inside = np.ascontiguousarray(pores).ravel()
    level = _levels(flat, inside)
    order = _deepest_first(level, inside, int(level.max(initial=0)))
    del level
    labels, n = _flood(order, flat, shape, np.float32(1.0 - split_depth))
    return labels.reshape(pores.shape), int(n)


@numba.njit(cache=True)
def _levels(distance, inside):  # type: ignore[no-untyped-def]
    """Squared distance to the nearest pixel outside, an integer; 1 everywhere where nothing lies outside."""
    level = np.zeros(distance.size, dtype=np.int32)
    for i in range(distance.size):
        if inside[i]:
            level[i] = int((distance[i] + 0.5) ** 2 + 0.5) if np.isfinite(distance[i]) else 1
    return level


@numba.njit(cache=True)
def _deepest_first(level, inside, largest):  # type: ignore[no-untyped-def]
    start = np.zeros(largest + 2, dtype=np.int64)
    n = 0
    for i in range(level.size):
        if inside[i]:
            start[largest - level[i] + 1] += 1
            n += 1
    for k in range(1, largest + 2):
        start[k] += start[k - 1]
    order = np.empty(n, dtype=np.int32)
    for i in range(level.size):
        if inside[i]:
            k = largest - level[i]
            order[start[k]] = i
            start[k] += 1
    return order


@numba.njit(cache=True)
def _flood(order, distance, shape, keep):  # type: ignore[no-untyped-def]
    planes, rows, columns = shape
    labels = np.zeros(distance.size, dtype=np.int32)
    parent = np.empty(1024, dtype=np.int32)
    centre = np.empty(1024, dtype=np.float32)
    n = 1
    for i in order:
        x = i % columns
        y = i // columns % rows
        z = i // (columns * rows)
        own, steepest, uphill = 0, np.float32(-1.0), 0
        for dz in range(-1 if z > 0 else 0, 2 if z < planes - 1 else 1):
            for dy in range(-1 if y > 0 else 0, 2 if y < rows - 1 else 1):
                for dx in range(-1 if x > 0 else 0, 2 if x < columns - 1 else 1):
                    j = i + (dz * rows + dy) * columns + dx
                    if labels[j] == 0:
                        continue
                    other = _root(parent, labels[j])
                    slope = (distance[j] - distance[i]) / np.float32(math.sqrt(dz * dz + dy * dy + dx * dx))
                    if not slope <= steepest:  # also where both are infinite
                        steepest, uphill = slope, other
                    if own == 0 or other == own:
                        own = other
                        continue
                    small, big = (own, other) if centre[own] < centre[other] else (other, own)
                    if distance[i] >= keep * centre[small]:
                        parent[small] = big
                        own = big
                    elif centre[other] > centre[own]:
                        own = other
        if own != 0:
            own = _root(parent, uphill)  # on a neck, where the way uphill is steepest
        else:
            if n == parent.size:
                parent = np.concatenate((parent, np.empty_like(parent)))
                centre = np.concatenate((centre, np.empty_like(centre)))
            own = n
            parent[n] = n
            centre[n] = distance[i]
            n += 1
        labels[i] = own
    number = np.zeros(n, dtype=np.int32)
    count = 0
    for i in range(labels.size):
        if labels[i] > 0:
            root = _root(parent, labels[i])
            if number[root] == 0:
                count += 1
                number[root] = count
            labels[i] = number[root]
    return labels, count


@numba.njit(cache=True)
def _root(parent, label):  # type: ignore[no-untyped-def]
    while parent[label] != label:
        parent[label] = parent[parent[label]]
        label = parent[label]
    return label
