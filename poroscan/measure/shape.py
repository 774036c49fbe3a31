"""Shape of plane outlines after ISO 9276-6, each number with the name of its definition.

With area A, perimeter P, largest and smallest Feret diameters x_max and x_min, convex hull of area A_h and perimeter P_h:

    circularity (root)   C  = sqrt(4 π A / P²)         form factor (squared)   FF = 4 π A / P²
    roundness            4 A / (π x_max²)              compactness             sqrt(4 A / π) / x_max
    aspect ratio         x_min / x_max                 ellipse ratio           minor / major axis of equal second moments
    solidity             A / A_h                       convexity               P_h / P

The root and the squared circularity are both called "circularity" in print: a unit square has 0.886 in one and 0.785 in the other.

Polygons are exact. Of pixel masks, P is Crofton's with 8 directions; Feret diameters and P_h belong to the convex hull of the midpoints of
the pixel edges; solidity counts the pixel centres in the hull of the pixel centres (Pick's theorem), so that a digital disc and
a digital rectangle have solidity 1.

References
----------
ISO 9276-6:2008; Wadell, J. Geol. 40 (1932) 443; Crofton 1868; Pick 1899; Andrew, Inf. Process. Lett. 9 (1979) 216 (hull).
"""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt

from poroscan.measure.bodies import pieces
from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.surface import count_crossings
from poroscan.quantities import Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]
Int64 = npt.NDArray[np.int64]

#: A particle below this many pixels across gets no shape.
LEAST_DIAMETER_PX = 10.0


@dataclass(frozen=True)
class Shape:
    """Shape of one plane outline; lengths and the area in the unit of the points or of ``pixel_size``."""

    area: float
    perimeter: float
    feret_max: float
    feret_min: float
    circularity: float
    form_factor: float
    roundness: float
    compactness: float
    aspect_ratio: float
    ellipse_ratio: float
    solidity: float
    convexity: float


_BASES = tuple(name for name in Shape.__dataclass_fields__ if name != "area")


def polygon_shape(points: npt.ArrayLike) -> Shape:
    """Exact shape of a simple polygon.

    Parameters
    ----------
    points
        Array (n, 2) of corners in order (either sense), not closed.

    Raises
    ------
    ValueError
        If there are fewer than three corners, a coordinate is not finite, or the area is zero.
    """
    p = np.asarray(points, dtype=np.float64)
    if p.ndim != 2 or p.shape[1] != 2 or p.shape[0] < 3 or not np.isfinite(p).all():
        raise ValueError(f"points must be at least 3 finite corners, shape (n, 2), not shape {p.shape}")
    p = p - p.mean(axis=0)
    q = np.roll(p, -1, axis=0)
    cross = p[:, 0] * q[:, 1] - q[:, 0] * p[:, 1]
    area = float(cross.sum()) / 2.0
    if area == 0.0:
        raise ValueError("points must enclose an area; these lie on a line or cross themselves")
    centre = ((p + q) * cross[:, None]).sum(axis=0) / (6.0 * area)
    second = np.einsum("i,ij,ik->jk", cross, p + q, p + q) + np.einsum("i,ij,ik->jk", cross, p, p)
    second = (second + np.einsum("i,ij,ik->jk", cross, q, q)) / (24.0 * area) - np.outer(centre, centre)
    hull = convex_hull(p)
    perimeter = float(np.hypot(*(q - p).T).sum())
    moments = np.linalg.eigvalsh(second)
    return _shape(abs(area), perimeter, hull, abs(_area(hull)), math.sqrt(max(moments[0], 0.0) / moments[1]))


def mask_shape(mask: BoolArray, *, pixel_size: float) -> Shape:
    """Shape of the outline of a pixel mask; holes are filled first.

    Parameters
    ----------
    mask
        bool array, 2-D, not empty. The array border does not cut it: beyond lies the outside.
    pixel_size
        Length of a pixel edge.

    Raises
    ------
    ValueError
        If the mask is not a 2-D bool array or is empty.
    """
    if not isinstance(mask, np.ndarray) or mask.dtype != np.bool_ or mask.ndim != 2 or not mask.any():
        raise ValueError("mask must be a 2-D bool array with at least one True pixel (use array.astype(bool))")
    filled = _filled(np.pad(mask, 2))
    area = int(np.count_nonzero(filled))
    counts = count_crossings(filled, np.ones_like(filled))
    crossings = counts.crossings.sum(axis=1)
    perimeter = math.pi / 2.0 * float(counts.weights @ (crossings / counts.lengths))
    rows = np.flatnonzero(filled.any(axis=1))
    first = filled.argmax(axis=1)[rows]
    last = filled.shape[1] - 1 - filled[:, ::-1].argmax(axis=1)[rows]
    hull = hull_of_rows(rows.astype(np.int64), first.astype(np.int64), last.astype(np.int64))
    inside = pixels_in_hull(rows.astype(np.int64), first.astype(np.int64), last.astype(np.int64))
    return _shape(area, perimeter, hull, float(inside), _ellipse_ratio(filled), pixel_size=pixel_size)


def _shape(
    area: float, perimeter: float, hull: Float, hull_area: float, ellipse_ratio: float, *, pixel_size: float = 1.0
) -> Shape:
    largest, smallest = feret_diameters(hull)
    closed = np.roll(hull, -1, axis=0) - hull
    form_factor = 4.0 * math.pi * area / perimeter**2
    return Shape(
        area=area * pixel_size**2,
        perimeter=perimeter * pixel_size,
        feret_max=largest * pixel_size,
        feret_min=smallest * pixel_size,
        circularity=math.sqrt(form_factor),
        form_factor=form_factor,
        roundness=4.0 * area / (math.pi * largest**2),
        compactness=math.sqrt(4.0 * area / math.pi) / largest,
        aspect_ratio=smallest / largest,
        ellipse_ratio=ellipse_ratio,
        solidity=area / hull_area,
        convexity=float(np.hypot(*closed.T).sum()) / perimeter,
    )


def convex_hull(points: npt.ArrayLike) -> Float:
    """Corners of the convex hull of plane points, in order."""
    p = np.unique(np.asarray(points, dtype=np.float64), axis=0)
    hull: Float = _hull(p)
    return hull


def feret_diameters(hull: Float) -> tuple[float, float]:
    """Largest and smallest Feret diameter of a convex polygon."""
    largest, smallest = _ferets(np.asarray(hull, dtype=np.float64))
    return float(largest), float(smallest)


def hull_of_rows(rows: Int64, first: Int64, last: Int64) -> Float:
    """Convex hull (row, column) of the midpoints of the pixel edges, from the first and last pixel of each row."""
    hull: Float = _hull(_edge_midpoints(rows, first, last))
    return hull


@numba.njit(cache=True)
def _hull(p):  # type: ignore[no-untyped-def]
    """Andrew's monotone chain on points sorted by the first, then the second coordinate."""
    n = p.shape[0]
    out = np.empty((2 * n + 1, 2))
    k = 0
    for i in range(n):
        while k >= 2 and _turn(out[k - 2], out[k - 1], p[i]) <= 0:
            k -= 1
        out[k] = p[i]
        k += 1
    lower = k + 1
    for i in range(n - 2, -1, -1):
        while k >= lower and _turn(out[k - 2], out[k - 1], p[i]) <= 0:
            k -= 1
        out[k] = p[i]
        k += 1
    return out[: max(k - 1, 1)].copy()


@numba.njit(cache=True)
def _turn(a, b, c):  # type: ignore[no-untyped-def]
    return (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])


@numba.njit(cache=True)
def _ferets(hull):  # type: ignore[no-untyped-def]
    n = hull.shape[0]
    largest, smallest = 0.0, np.inf
    for i in range(n):
        j = (i + 1) % n
        ey, ex = hull[j, 0] - hull[i, 0], hull[j, 1] - hull[i, 1]
        edge = math.hypot(ey, ex)
        width = 0.0
        for k in range(n):
            py, px = hull[k, 0] - hull[i, 0], hull[k, 1] - hull[i, 1]
            largest = max(largest, math.hypot(py, px))
            if edge > 0:
                width = max(width, abs(ey * px - ex * py) / edge)
        if edge > 0:
            smallest = min(smallest, width)
    return largest, (smallest if smallest < np.inf else 0.0)


@numba.njit(cache=True)
def _edge_midpoints(rows, first, last):  # type: ignore[no-untyped-def]
    """First and last midpoint of each half row, sorted by row."""
    n = rows.size
    out = np.empty((4 * n + 2, 2))
    for i in range(n + 1):
        # Half row between row i − 1 and row i: what either of them reaches.
        above, below = max(i - 1, 0), min(i, n - 1)
        if i > 0 and i < n and rows[i] - rows[i - 1] > 1:
            above = i
        out[4 * i, 0] = out[4 * i + 1, 0] = rows[below] + (0.5 if i == n else -0.5)
        out[4 * i, 1] = min(first[above], first[below])
        out[4 * i + 1, 1] = max(last[above], last[below])
        if i < n:
            out[4 * i + 2, 0] = out[4 * i + 3, 0] = rows[i]
            out[4 * i + 2, 1] = first[i] - 0.5
            out[4 * i + 3, 1] = last[i] + 0.5
    return out


@numba.njit(cache=True)
def pixels_in_hull(rows, first, last):  # type: ignore[no-untyped-def]
    """Number of pixel centres in the convex hull of the pixel centres: area + border / 2 + 1 (Pick 1899)."""
    points = np.empty((2 * rows.size, 2))
    for i in range(rows.size):
        points[2 * i, 0] = points[2 * i + 1, 0] = rows[i]
        points[2 * i, 1] = first[i]
        points[2 * i + 1, 1] = last[i]
    hull = _hull(points)
    n = hull.shape[0]
    area, border = 0.0, 0
    for i in range(n):
        j = (i + 1) % n
        area += hull[i, 0] * hull[j, 1] - hull[j, 0] * hull[i, 1]
        a, b = abs(int(hull[j, 0] - hull[i, 0])), abs(int(hull[j, 1] - hull[i, 1]))
        while b:
            a, b = b, a % b
        border += a
    return int(abs(area) / 2.0 + border / 2.0 + 0.5) + 1


def _area(hull: Float) -> float:
    q = np.roll(hull, -1, axis=0)
    return float((hull[:, 0] * q[:, 1] - q[:, 0] * hull[:, 1]).sum()) / 2.0


def _filled(mask: BoolArray) -> BoolArray:
    """The mask with its holes filled; the array must have a margin."""
    labels, n = pieces(~mask, diagonal=False)
    return mask if n <= 1 else labels != labels[0, 0]


def _ellipse_ratio(mask: BoolArray) -> float:
    by_row, by_column = mask.sum(axis=1, dtype=np.float64), mask.sum(axis=0, dtype=np.float64)
    y, x = np.arange(by_row.size, dtype=np.float64), np.arange(by_column.size, dtype=np.float64)
    n = float(by_row.sum())
    my, mx = float(by_row @ y) / n, float(by_column @ x) / n
    # A pixel is a square, not a point: 1/12 along each axis.
    yy, xx = float(by_row @ (y - my) ** 2) / n + 1 / 12, float(by_column @ (x - mx) ** 2) / n + 1 / 12
    xy = float((y - my) @ (mask @ (x - mx))) / n
    spread = math.hypot(yy - xx, 2.0 * xy)
    return math.sqrt(max(yy + xx - spread, 0.0) / (yy + xx + spread))


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """ISO 9276-6 shape of the particle's outline; undefined where the outline is not wholly seen."""
    if section.ndim == 3:
        return Part()
    if section.view != "whole" or section.touches_frame:
        return undefined(_BASES)
    if shared.n_particle < math.pi / 4 * LEAST_DIAMETER_PX**2:
        return undefined(_BASES, "tiny_particle")
    values = asdict(mask_shape(section.particle, pixel_size=1.0))
    return Part({base: Estimate(values[base]) for base in _BASES})
