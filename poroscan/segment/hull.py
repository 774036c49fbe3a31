"""Convex hull of a mask, filled row by row."""

from __future__ import annotations

import numpy as np
from scipy.spatial import ConvexHull, QhullError

from poroscan.section import BoolArray


def convex_hull(mask: BoolArray) -> BoolArray:
    """Pixels whose centres lie in the convex hull of the centres of a mask's pixels.

    A convex set meets a row in one interval, so that two chains of edges say it all.

    Parameters
    ----------
    mask
        bool array (row, column).

    Returns
    -------
    bool array
        Contains ``mask``; equal to it where its pixels lie on one line.
    """
    rows = np.nonzero(mask.any(axis=1))[0]
    if rows.size < 2:
        return mask.copy()
    part = mask[rows]
    first, last = part.argmax(axis=1), mask.shape[1] - 1 - part[:, ::-1].argmax(axis=1)
    points = np.concatenate([np.stack([rows, first], 1), np.stack([rows, last], 1)])
    try:
        corners = points[ConvexHull(points).vertices].astype(np.float64)
    except QhullError:
        return mask.copy()
    every = np.arange(int(rows[0]), int(rows[-1]) + 1)
    left, right = _chain(corners, every, 1.0), _chain(corners, every, -1.0)
    column = np.arange(mask.shape[1])[None, :]
    filled = mask.copy()
    filled[every] |= (column >= left[:, None] - 1e-9) & (column <= right[:, None] + 1e-9)
    return filled


def _chain(corners: np.ndarray, rows: np.ndarray, sign: float) -> np.ndarray:
    """Left (sign 1) or right (−1) border of the polygon in every row."""
    following = np.roll(corners, -1, axis=0)
    border = np.full(rows.size, np.inf)
    for (r0, c0), (r1, c1) in zip(corners, following, strict=True):
        (r0, c0), (r1, c1) = sorted(((r0, c0), (r1, c1)))
        span = slice(int(r0 - rows[0]), int(r1 - rows[0]) + 1)
        at = (
            np.full(int(r1 - r0) + 1, min(sign * c0, sign * c1))
            if r0 == r1
            else sign * (c0 + (rows[span] - r0) * (c1 - c0) / (r1 - r0))
        )
        border[span] = np.minimum(border[span], at)
    return sign * border
