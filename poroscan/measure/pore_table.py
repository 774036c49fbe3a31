"""One row per pore body: place, size, shape, and what it touches."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numba
import numpy as np
import numpy.typing as npt

from poroscan.measure.shape import _edge_midpoints, _ferets, _hull, pixels_in_hull
from poroscan.measure.surface import directions
from poroscan.quantities import PORE_COLUMNS
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Table = dict[str, npt.NDArray[Any]]


def empty_table(n: int = 0) -> Table:
    """A table of n pores with every declared column: NaN, 0 or False until it is filled."""
    table: Table = {}
    for name, column in PORE_COLUMNS.items():
        fill = np.nan if column.dtype.startswith("float") else 0
        table[name] = np.full(n, fill, dtype=column.dtype)
    return table


def select(table: Mapping[str, npt.NDArray[Any]], rows: npt.NDArray[np.bool_]) -> Table:
    """The rows of a table where ``rows`` is True."""
    return {name: column[rows] for name, column in table.items()}


def pore_table(section: Section, shared: Shared) -> Table:
    """Every pore body of a section, small ones included, with the columns of ``quantities.PORE_COLUMNS``, in pixels."""
    labels, n = shared.bodies
    table = empty_table(n)
    if n == 0:
        return table
    shape = (1, *labels.shape) if labels.ndim == 2 else labels.shape
    volume = labels.reshape(shape)
    sums, touches = _sums(volume, shared.pore_distance.reshape(shape), shared.depth.reshape(shape), n)
    area, (z, y, x) = sums[0], sums[1:4] / sums[0]
    origin = (0,) * (3 - len(section.origin)) + tuple(section.origin)
    table["pore"][:] = np.arange(1, n + 1)
    for name, value, shift in zip(("plane", "row", "col"), (z, y, x), origin, strict=True):
        table[f"centroid_{name}"][:] = value + shift
    table["area"][:] = area
    table["diameter"][:] = equivalent_diameter(area, ndim=labels.ndim)
    table["inscribed_diameter"][:] = 2.0 * sums[7]
    table["depth"][:] = np.where(np.isfinite(sums[8]), sums[8] / area, np.nan)
    table["touches_frame"][:] = touches
    table["open"][:] = _open(shared, labels, n)
    if labels.ndim == 2:
        _fill_shape(table, labels, sums, area)
    return table


def equivalent_diameter(size: npt.NDArray[np.float64], *, ndim: int) -> npt.NDArray[np.float64]:
    """Diameter of the circle of equal area or the sphere of equal volume."""
    return np.asarray(2.0 * np.sqrt(size / math.pi) if ndim == 2 else np.cbrt(6.0 * size / math.pi))


def _open(shared: Shared, labels: npt.NDArray[np.int32], n: int) -> npt.NDArray[np.bool_]:
    out = np.zeros(n + 1, dtype=bool)
    out[labels[shared.open_pieces[shared.pieces]]] = True
    return out[1:]


def _fill_shape(
    table: Table, labels: npt.NDArray[np.int32], sums: npt.NDArray[np.float64], area: npt.NDArray[np.float64]
) -> None:
    steps, weights = directions(2)
    share = math.pi / 2.0 * weights / np.hypot(steps[:, 1], steps[:, 2])
    perimeter = _perimeters(labels, steps, share, area.size)
    ferets, hull_pixels = _hulls(labels, area.size)
    yy = sums[4] / area - (sums[2] / area) ** 2 + 1 / 12
    xx = sums[5] / area - (sums[3] / area) ** 2 + 1 / 12
    # Rows grow downwards, so the covariance changes its sign on the screen.
    xy = -(sums[6] / area - sums[2] * sums[3] / area**2)
    spread = np.hypot(yy - xx, 2.0 * xy)
    table["perimeter"][:] = perimeter
    table["circularity"][:] = np.sqrt(4.0 * math.pi * area) / perimeter
    table["feret_max"][:], table["feret_min"][:] = ferets.T
    table["aspect_ratio"][:] = ferets[:, 1] / ferets[:, 0]
    table["ellipse_ratio"][:] = np.sqrt(np.maximum(yy + xx - spread, 0.0) / (yy + xx + spread))
    table["orientation_deg"][:] = np.degrees(0.5 * np.arctan2(2.0 * xy, xx - yy)) % 180.0
    table["solidity"][:] = area / hull_pixels


@numba.njit(cache=True)
def _sums(labels, distance, depth, n):  # type: ignore[no-untyped-def]
    """Pixels, first and second moments, deepest distance, sum of depths; whether the frame cuts it."""
    planes, rows, columns = labels.shape
    out = np.zeros((9, n))
    touches = np.zeros(n, dtype=np.bool_)
    for z in range(planes):
        for y in range(rows):
            for x in range(columns):
                i = labels[z, y, x] - 1
                if i < 0:
                    continue
                out[0, i] += 1
                out[1, i] += z
                out[2, i] += y
                out[3, i] += x
                out[4, i] += y * y
                out[5, i] += x * x
                out[6, i] += y * x
                out[7, i] = max(out[7, i], distance[z, y, x])
                out[8, i] += depth[z, y, x]
                edge = y == 0 or x == 0 or y == rows - 1 or x == columns - 1
                if edge or (planes > 1 and (z == 0 or z == planes - 1)):
                    touches[i] = True
    return out, touches


@numba.njit(cache=True)
def _perimeters(labels, steps, share, n):  # type: ignore[no-untyped-def]
    """Crofton perimeter of every label; a neighbouring label or the frame ends it."""
    rows, columns = labels.shape
    out = np.zeros(n)
    for y in range(rows):
        for x in range(columns):
            label = labels[y, x]
            if label == 0:
                continue
            for k in range(steps.shape[0]):
                for sign in (-1, 1):
                    v, u = y + sign * steps[k, 1], x + sign * steps[k, 2]
                    if v < 0 or v >= rows or u < 0 or u >= columns or labels[v, u] != label:
                        out[label - 1] += share[k]
    return out


@numba.njit(cache=True)
def _hulls(labels, n):  # type: ignore[no-untyped-def]
    """Feret diameters and pixels in the convex hull of every label."""
    rows, columns = labels.shape
    top, bottom = np.full(n, rows, dtype=np.int64), np.full(n, -1, dtype=np.int64)
    for y in range(rows):
        for x in range(columns):
            i = labels[y, x] - 1
            if i >= 0:
                top[i] = min(top[i], y)
                bottom[i] = y
    start = np.zeros(n + 1, dtype=np.int64)
    for i in range(n):
        start[i + 1] = start[i] + max(0, bottom[i] - top[i] + 1)
    first, last = np.full(start[n], columns, dtype=np.int64), np.full(start[n], -1, dtype=np.int64)
    for y in range(rows):
        for x in range(columns):
            i = labels[y, x] - 1
            if i >= 0:
                k = start[i] + y - top[i]
                first[k] = min(first[k], x)
                last[k] = x
    ferets, inside = np.empty((n, 2)), np.empty(n)
    for i in range(n):
        a, b = start[i], start[i + 1]
        line = np.arange(top[i], bottom[i] + 1)
        ferets[i, 0], ferets[i, 1] = _ferets(_hull(_edge_midpoints(line, first[a:b], last[a:b])))
        inside[i] = pixels_in_hull(line, first[a:b], last[a:b])
    return ferets, inside
