"""Squared distance of every pixel of a mask to the nearest pixel outside it: exact integers.

With g(p) the distance to the nearest outside pixel along the first axis, the squared distance within the plane of the first two axes is

    d²(x) = min over u of (x − u)² + g²(u)

along each line of the second axis: the lower envelope of parabolas, found in one pass over the line, and once more along the
third axis of a volume. No parabola beyond an outside pixel (height 0) can be the lowest one, so each run of inside pixels is a line of
its own, closed by the outside pixels at its ends.

References
----------
Meijster, Roerdink and Hesselink, in Mathematical Morphology and its Applications (2000) 331 (first pass, integer crossings).
Felzenszwalb and Huttenlocher, Theory of Computing 8 (2012) 415 (lower envelope).
"""

from __future__ import annotations

import numba
import numpy as np
import numpy.typing as npt

from poroscan.section import BoolArray

SquaredDistance = npt.NDArray[np.int32] | npt.NDArray[np.int64]

#: Squared distances beyond this need eight bytes.
_MOST_INT32 = 2**31 - 2


def squared_distance(mask: BoolArray) -> SquaredDistance:
    """Squared Euclidean distance of every True pixel to the nearest False pixel centre; the array border is no boundary.

    Parameters
    ----------
    mask
        bool array, 2-D or 3-D, of any memory layout.

    Returns
    -------
    int32 array (int64 where a side is longer than some 30 000 pixels), contiguous; 0 on False pixels, and the largest number of
    its type everywhere where no pixel is False.

    Raises
    ------
    ValueError
        If ``mask`` is not a 2-D or 3-D bool array.
    """
    if not isinstance(mask, np.ndarray) or mask.dtype != np.bool_ or mask.ndim not in (2, 3):
        raise ValueError("mask must be a 2-D or 3-D bool array (use array.astype(bool))")
    farthest = sum(n * n for n in mask.shape)
    out = np.empty(mask.shape, np.int32 if farthest <= _MOST_INT32 else np.int64)
    if out.size == 0:
        return out
    volume = np.ascontiguousarray(mask).view(np.uint8).reshape(mask.shape[0], -1, mask.shape[-1])
    _along_first_axis(volume, out.reshape(volume.shape), np.iinfo(out.dtype).max)
    if mask.ndim == 3:
        _along_second_axis(out, np.iinfo(out.dtype).max)
    _along_last_axis(out.reshape(-1, mask.shape[-1]), np.iinfo(out.dtype).max)
    return out


@numba.njit(cache=True)
def _along_first_axis(mask, out, far):  # type: ignore[no-untyped-def]
    planes, rows, columns = mask.shape
    beyond = planes  # longer than any distance along the axis
    for z in range(planes):
        for y in range(rows):
            for x in range(columns):
                if mask[z, y, x] == 0:
                    out[z, y, x] = 0
                else:
                    out[z, y, x] = beyond if z == 0 else min(out[z - 1, y, x] + 1, beyond)
    for z in range(planes - 2, -1, -1):
        for y in range(rows):
            for x in range(columns):
                out[z, y, x] = min(out[z, y, x], out[z + 1, y, x] + 1)
    for z in range(planes):
        for y in range(rows):
            for x in range(columns):
                g = out[z, y, x]
                out[z, y, x] = far if g == beyond else g * g


@numba.njit(cache=True)
def _along_second_axis(out, far):  # type: ignore[no-untyped-def]
    planes, rows, columns = out.shape
    line = np.empty(rows, out.dtype)
    place, height, start = np.empty(rows + 1, np.int64), np.empty(rows + 1, np.int64), np.empty(rows + 1, np.int64)
    for z in range(planes):
        for x in range(columns):
            for y in range(rows):
                line[y] = out[z, y, x]
            _lower_envelope(line, place, height, start, far)
            for y in range(rows):
                out[z, y, x] = line[y]


@numba.njit(cache=True)
def _along_last_axis(out, far):  # type: ignore[no-untyped-def]
    lines, n = out.shape
    place, height, start = np.empty(n + 1, np.int64), np.empty(n + 1, np.int64), np.empty(n + 1, np.int64)
    for i in range(lines):
        _lower_envelope(out[i], place, height, start, far)


@numba.njit(cache=True)
def _lower_envelope(line, place, height, start, far):  # type: ignore[no-untyped-def]
    """Replace squared heights by the squared distance along one line; parabola k is the lowest from ``start[k]`` on."""
    n = line.size
    end = 0
    while end < n:
        if line[end] == 0:
            end += 1
            continue
        first = end
        while end < n and line[end] != 0:
            end += 1
        k = -1
        if first > 0:
            k, place[0], height[0], start[0] = 0, first - 1, 0, first - 1
        for u in range(first, min(end + 1, n)):
            if line[u] == far:
                continue
            above = np.int64(line[u])
            begin = first
            while k >= 0:
                v = place[k]
                begin = ((u - v) * (u + v) + above - height[k]) // (2 * (u - v)) + 1
                if begin > start[k]:
                    break
                k -= 1
            if k < 0:
                begin = first
            if begin < end:
                k += 1
                place[k], height[k], start[k] = u, above, begin
        if k < 0:
            continue
        for x in range(end - 1, first - 1, -1):
            while k > 0 and start[k] > x:
                k -= 1
            line[x] = (x - place[k]) * (x - place[k]) + height[k]
