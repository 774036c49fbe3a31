"""Local thickness: at every point the diameter of the largest disc (ball) inside the phase that covers the point.

Exact on the pixel grid. With d²(p) the squared distance from pixel p to the nearest pixel outside the phase (an integer),
the disc of p holds the pixels x with |x − p|² < d²(p), all of them inside the phase, and the local thickness at x is

    τ(x) = 2 · max {d(p) : |x − p| < d(p)} − 1        pixels.

The 1 is twice the half pixel between the centre of an outside pixel and the boundary itself: a strip of w pixels has thickness w
where w is odd and w − 1 where it is even, because then no pixel lies on its midline.

Algorithm, in time that hardly depends on the sizes:

1. exact squared distance transform;
2. drop every disc that lies inside the disc of a nearby pixel. Whether the pixels of one disc all lie in another depends on the two
   radii and the step between the centres only, so a table by squared radius answers it exactly (Rémy and Thiel 2005). What is
   left are the maximal discs: 3 per cent of the pixels of coarse structures, 20 of fine ones;
3. sort these by radius (counting sort on the integer d²) and paint them, largest first. A pixel keeps the first value it gets. One bit
   per pixel says what is still unpainted, in bricks of 8 × 8 (8 × 8 × 8) pixels with their counts, gathered in blocks of 8 bricks, so
   that a disc steps over painted regions: its cost is near the number of pixels that it paints.

References
----------
Hildebrand and Rüegsegger, J. Microsc. 185 (1997) 67 (definition). Rémy and Thiel, Image Vis. Comput. 23 (2005) 167 (exact medial axis by
look-up tables). Felzenszwalb and Huttenlocher, Theory of Computing 8 (2012) 415 (distance transform).
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt

from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.squared_distance import squared_distance
from poroscan.measure.uncertainty import BlockEstimate, block_quantile, block_ratio, estimate_of, threshold_sd
from poroscan.quantities import Curve, Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float32 = npt.NDArray[np.float32]
Int32 = npt.NDArray[np.int32]

#: Steps to the pixels whose discs are tried as containers: up to this many pixels along each axis.
_REACH = {2: 3, 3: 2}
#: Discs below this squared radius try only the nearest neighbours: there the rest finds next to nothing.
_SMALL_STEP = 64
#: Discs up to this squared radius have their bits in a table.
_SMALL = 400


def local_thickness(phase: BoolArray, *, pixel_size: float) -> Float32:
    """Local thickness of every point of a phase.

    Parameters
    ----------
    phase
        bool array, 2-D or 3-D, True in the phase. The border of the array is the frame of the picture: it bounds nothing,
        and a disc may reach beyond it.
    pixel_size
        Length of a pixel edge (1.0 for pixels).

    Returns
    -------
    float32 array of the same shape, in the unit of ``pixel_size``: 0 outside the phase, inf inside where the array holds nothing
    but the phase.

    Raises
    ------
    ValueError
        If ``phase`` is not a 2-D or 3-D bool array, or ``pixel_size`` is not positive.
    """
    if not pixel_size > 0:
        raise ValueError(f"pixel_size must be a positive length per pixel, not {pixel_size!r}")
    squared = squared_thickness(phase)
    thickness = np.sqrt(np.maximum(squared, 0), dtype=np.float32)
    thickness *= np.float32(2.0 * pixel_size)
    thickness -= np.float32(pixel_size) * phase
    if squared.size and phase.all():
        thickness[...] = np.inf
    return thickness


def squared_thickness(phase: BoolArray) -> Int32:
    """Squared radius (distance to the nearest pixel outside) of the largest disc that covers each pixel, exact.

    Parameters
    ----------
    phase
        bool array, 2-D or 3-D.

    Returns
    -------
    int32 array; 0 outside the phase, and -1 everywhere where no pixel lies outside.

    Raises
    ------
    ValueError
        If ``phase`` is not a 2-D or 3-D bool array.
    """
    if not isinstance(phase, np.ndarray) or phase.dtype != np.bool_ or phase.ndim not in (2, 3):
        raise ValueError(
            f"phase must be a 2-D or 3-D bool array (use array.astype(bool)), not {getattr(phase, 'dtype', type(phase))} "
            f"of shape {np.shape(phase)}"
        )
    if phase.size == 0 or not phase.any():
        return np.zeros(phase.shape, dtype=np.int32)
    if phase.all():
        return np.full(phase.shape, -1, dtype=np.int32)
    squared = squared_distance(phase).reshape((1, *phase.shape) if phase.ndim == 2 else phase.shape)
    largest = int(squared.max())
    steps, kinds, shapes = _steps(phase.ndim)
    discs = _undominated(squared, containment_tables(largest, steps=shapes), steps, kinds)
    order = _largest_first(squared.ravel(), discs, largest)
    root = np.sqrt(np.arange(largest + 1)).astype(np.int32)
    _paint(squared, order, squared.ravel()[order], root, _disc_words(min(largest, _SMALL), root))
    return squared.reshape(phase.shape)


@dataclass(frozen=True, eq=False)
class ThicknessTable:
    """Pixels by block and local thickness.

    Parameters
    ----------
    diameters
        Distinct local thicknesses in pixels, ascending.
    counts
        Pixels of each block (0…n) that have each of them.
    ndim
        2 or 3.
    """

    diameters: npt.NDArray[np.float64]
    counts: npt.NDArray[np.float64]
    ndim: int

    @property
    def totals(self) -> npt.NDArray[np.float64]:
        """Pixels of each thickness, all blocks together."""
        return np.asarray(self.counts.sum(axis=0))


def thickness_table(phase: BoolArray, *, blocks: Int32 | None = None) -> ThicknessTable:
    """Histogram of the local thickness of a phase by block; empty where the phase is empty or nothing bounds it."""
    n = 1 if blocks is None else int(blocks.max(initial=0)) + 1
    squared = squared_thickness(phase)
    found = np.bincount(squared[phase]) if phase.any() and not phase.all() else np.zeros(0, dtype=np.int64)
    values = np.flatnonzero(found)
    rank = np.zeros(found.size, dtype=np.int32)
    rank[values] = np.arange(values.size)
    code = rank[squared[phase]] if values.size else np.zeros(0, dtype=np.int32)
    if blocks is not None and values.size:
        code = code + blocks[phase] * np.int32(values.size)
    counts = np.bincount(code, minlength=n * values.size).reshape(n, values.size)
    return ThicknessTable(2.0 * np.sqrt(values) - 1.0, counts.astype(np.float64), phase.ndim)


def containment_tables(largest: int, *, steps: Int32) -> Int32:
    """Tables that tell whether one digital disc lies inside another.

    Parameters
    ----------
    largest
        Largest squared radius.
    steps
        Steps between the two centres, int32 array (n, 2) or (n, 3), coordinates not negative and in descending order; signs
        and order of the coordinates do not matter.

    Returns
    -------
    int32 array (n, largest + 1). The entry of step v at d² is the largest |x − v|² over the pixels |x|² < d². The disc of d²
    lies inside the disc of d'² at that step exactly where d'² exceeds the entry.

    References
    ----------
    Rémy and Thiel, Image Vis. Comput. 23 (2005) 167.
    """
    padded = np.zeros((len(steps), 3), dtype=np.int32)
    padded[:, : steps.shape[1]] = steps
    table: Int32 = _containment(np.int64(largest), padded, steps.shape[1])
    return table


def _steps(ndim: int) -> tuple[Int32, Int32, Int32]:
    """Steps (plane, row, column), nearest first; the kind of each; and the kinds (descending, without signs)."""
    reach = range(-_REACH[ndim], _REACH[ndim] + 1)
    # A multiple of a shorter step adds nothing: a disc that lies in the farther one lies in the nearer one too.
    steps = [v for v in itertools.product(reach, repeat=ndim) if any(v) and np.gcd.reduce(v) == 1]
    steps.sort(key=lambda v: sum(c * c for c in v))
    shapes = [tuple(sorted(map(abs, v), reverse=True)) for v in steps]
    kinds = list(dict.fromkeys(shapes))
    full = np.zeros((len(steps), 3), dtype=np.int32)
    full[:, 3 - ndim :] = steps
    return full, np.array([kinds.index(v) for v in shapes], dtype=np.int32), np.array(kinds, dtype=np.int32)


@numba.njit(cache=True)
def _containment(largest, steps, ndim):  # type: ignore[no-untyped-def]
    reach = int(np.sqrt(largest)) + 1
    table = np.full((steps.shape[0], largest + 1), -1, dtype=np.int32)
    # Only pixels m = −x with m ≥ 0 count, since they are farthest from v ≥ 0: |x − v|² = |m|² + 2 m·v + |v|². The product is
    # largest where m is in the same order as v.
    for a in range(reach + 1):
        for b in range(a + 1):
            for c in range((b if ndim == 3 else 0) + 1):
                n = a * a + b * b + c * c
                if n >= largest:
                    break
                for k in range(steps.shape[0]):
                    p, q, r = steps[k]
                    far = n + 2 * (a * p + b * q + c * r) + p * p + q * q + r * r
                    table[k, n + 1] = max(table[k, n + 1], far)
    for k in range(steps.shape[0]):
        for n in range(1, largest + 1):
            table[k, n] = max(table[k, n], table[k, n - 1])
    return table


@numba.njit(cache=True)
def _undominated(squared, table, steps, kinds):  # type: ignore[no-untyped-def]
    planes, rows, columns = squared.shape
    found = np.empty(squared.size, dtype=np.int32)
    n = 0
    for z in range(planes):
        for y in range(rows):
            for x in range(columns):
                d = squared[z, y, x]
                if d > 0 and not _inside_another(squared, table, steps, kinds, z, y, x, d):
                    found[n] = (z * rows + y) * columns + x
                    n += 1
    return found[:n].copy()


@numba.njit(cache=True)
def _inside_another(squared, table, steps, kinds, z, y, x, d):  # type: ignore[no-untyped-def]
    planes, rows, columns = squared.shape
    for i in range(steps.shape[0]):
        w, v, u = z + steps[i, 0], y + steps[i, 1], x + steps[i, 2]
        if steps[i, 0] ** 2 + steps[i, 1] ** 2 + steps[i, 2] ** 2 > 3 and d < _SMALL_STEP:
            return False
        if w < 0 or w >= planes or v < 0 or v >= rows or u < 0 or u >= columns:
            continue
        other = squared[w, v, u]
        if other > d and other > table[kinds[i], d]:
            return True
    return False


@numba.njit(cache=True)
def _largest_first(squared, discs, largest):  # type: ignore[no-untyped-def]
    start = np.zeros(largest + 2, dtype=np.int64)
    for i in discs:
        start[largest - squared[i] + 1] += 1
    for k in range(1, largest + 2):
        start[k] += start[k - 1]
    order = np.empty_like(discs)
    for i in discs:
        k = largest - squared[i]
        order[start[k]] = i
        start[k] += 1
    return order


@numba.njit(cache=True)
def _unpainted(out, thick):  # type: ignore[no-untyped-def]
    """Bits of the unpainted pixels, in bricks; how many each brick has; how many bricks of each block have any."""
    planes, rows, columns = out.shape
    bz, by, bx = (planes - 1) // thick + 1, (rows - 1) // 8 + 1, (columns - 1) // 8 + 1
    bits = np.zeros((bz, by, bx, thick), dtype=np.uint64)
    left = np.zeros((bz, by, bx), dtype=np.int32)
    blocks = np.zeros(((bz - 1) // 8 + 1, (by - 1) // 8 + 1, (bx - 1) // 8 + 1), dtype=np.int32)
    for z in range(planes):
        for y in range(rows):
            for x in range(columns):
                if out[z, y, x] > 0:
                    bits[z // thick, y // 8, x // 8, z % thick] |= np.uint64(1) << np.uint64(8 * (y % 8) + x % 8)
                    left[z // thick, y // 8, x // 8] += 1
    for z in range(bz):
        for y in range(by):
            for x in range(bx):
                if left[z, y, x] > 0:
                    blocks[z // 8, y // 8, x // 8] += 1
    return bits, left, blocks


@numba.njit(cache=True)
def _disc_words(largest, root):  # type: ignore[no-untyped-def]
    """Bits of the pixels |x|² ≤ rest in the 8 × 8 brick whose first pixel lies at (row, column) from the centre, all small discs."""
    reach = root[largest]
    side = 2 * reach + 8
    words = np.zeros((largest + 1, side, side), dtype=np.uint64)
    for rest in range(largest + 1):
        for a in range(side):
            for j in range(8):
                rest_row = rest - (a - reach - 7 + j) ** 2
                if rest_row < 0:
                    continue
                half = root[rest_row]
                for b in range(side):
                    first, last = max(0, -half - (b - reach - 7)), min(7, half - (b - reach - 7))
                    if first <= last:
                        row = (2 << last) - (1 << first)
                        words[rest, a, b] |= np.uint64(row) << np.uint64(8 * j)
    return words


@numba.njit(cache=True)
def _paint(out, centres, sizes, root, words):  # type: ignore[no-untyped-def]
    planes, rows, columns = out.shape
    thick = 8 if planes > 1 else 1
    bits, left, blocks = _unpainted(out, thick)
    for i in range(centres.size):
        x = centres[i] % columns
        y = centres[i] // columns % rows
        z = centres[i] // (columns * rows)
        d = sizes[i]
        r = root[d - 1]
        z0, z1 = max(0, z - r) // thick, min(planes - 1, z + r) // thick
        y0, y1 = max(0, y - r) // 8, min(rows - 1, y + r) // 8
        x0, x1 = max(0, x - r) // 8, min(columns - 1, x + r) // 8
        for cz in range(z0 // 8, z1 // 8 + 1):
            for cy in range(y0 // 8, y1 // 8 + 1):
                for cx in range(x0 // 8, x1 // 8 + 1):
                    if blocks[cz, cy, cx] == 0:
                        continue
                    for u in range(max(z0, 8 * cz), min(z1, 8 * cz + 7) + 1):
                        nz = max(0, u * thick - z, z - u * thick - thick + 1)
                        for v in range(max(y0, 8 * cy), min(y1, 8 * cy + 7) + 1):
                            ny = max(0, 8 * v - y, y - 8 * v - 7)
                            for w in range(max(x0, 8 * cx), min(x1, 8 * cx + 7) + 1):
                                nx = max(0, 8 * w - x, x - 8 * w - 7)
                                if left[u, v, w] == 0 or nz * nz + ny * ny + nx * nx >= d:
                                    continue
                                left[u, v, w] -= _paint_brick(out, bits, u, v, w, z, y, x, d, root, words)
                                if left[u, v, w] == 0:
                                    blocks[cz, cy, cx] -= 1


@numba.njit(cache=True)
def _paint_brick(out, bits, u, v, w, z, y, x, d, root, words):  # type: ignore[no-untyped-def]
    """Paint the unpainted pixels of one brick that lie in the disc; returns their number."""
    thick = bits.shape[3]
    y0, x0 = 8 * v - y, 8 * w - x
    n = 0
    nearest_y = max(0, y0, -y0 - 7)
    nearest_x = max(0, x0, -x0 - 7)
    in_plane = nearest_y * nearest_y + nearest_x * nearest_x
    small = d <= words.shape[0]
    shift = words.shape[1] // 2 + 3
    for k in range(thick):
        word = bits[u, v, w, k]
        dz = u * thick + k - z
        rest = d - 1 - dz * dz
        if word == 0 or rest < in_plane:
            continue
        if small:
            fresh = word & words[rest, y0 + shift, x0 + shift]
        else:
            fresh = word & _disc_word(rest, y0, x0, root)
        if fresh == 0:
            continue
        bits[u, v, w, k] = word ^ fresh
        for j in range(8):
            row = (fresh >> np.uint64(8 * j)) & np.uint64(255)
            m = 0
            while row != 0:
                if row & np.uint64(1):
                    out[u * thick + k, 8 * v + j, 8 * w + m] = d
                    n += 1
                row >>= np.uint64(1)
                m += 1
    return n


@numba.njit(cache=True)
def _disc_word(rest, y0, x0, root):  # type: ignore[no-untyped-def]
    word = np.uint64(0)
    for j in range(8):
        rest_row = rest - (y0 + j) * (y0 + j)
        if rest_row >= 0:
            half = root[rest_row]
            first, last = max(0, -half - x0), min(7, half - x0)
            if first <= last:
                word |= np.uint64((2 << last) - (1 << first)) << np.uint64(8 * j)
    return word


#: Values over which a pixel of thickness is spread for intervals.
_SPREAD = 5
_STATISTICS = ("d10", "d50", "d90", "span", "mean", "d50_number", "mean_number", "max")


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Local thickness of pores and walls; curves local_thickness_pores and local_thickness_walls."""
    estimates: dict[str, Estimate] = {}
    curves = []
    sd = _threshold(section, shared)
    for base, name, table in (("thickness", "pores", shared.pore_thickness), ("wall", "walls", shared.wall_thickness)):
        if table.totals.sum() == 0:
            estimates |= dict(undefined([f"{base}_{statistic}" for statistic in _STATISTICS]).estimates)
            continue
        estimates |= {f"{base}_{k}": e for k, e in _statistics(table, shared.block_inflation, sd).items()}
        curves.append(_curve(f"local_thickness_{name}", table))
    return Part(estimates, tuple(curves))


def _statistics(table: ThicknessTable, inflation: float, median_sd: float | None) -> dict[str, Estimate]:
    d, counts = table.diameters, table.counts
    block, column = np.nonzero(counts)
    weight = counts[block, column]
    out: dict[str, Estimate] = {}
    for name, q in (("d10", 0.1), ("d50", 0.5), ("d90", 0.9)):
        result = _quantile(d[column], weight, block, q=q, inflation=inflation)
        out[name] = estimate_of(result, threshold=median_sd if name == "d50" else None, scale="log")
    out["span"] = Estimate((out["d90"].value - out["d10"].value) / out["d50"].value)
    mean = block_ratio((counts @ d)[1:], counts.sum(axis=1)[1:], inflation=inflation, scale="log")
    out["mean"] = estimate_of(mean, scale="log")
    each = d**-table.ndim
    median = _quantile(d[column], weight * each[column], block, q=0.5, inflation=inflation)
    out["d50_number"] = estimate_of(median, scale="log")
    mean = block_ratio((counts @ (d * each))[1:], (counts @ each)[1:], inflation=inflation, scale="log")
    out["mean_number"] = estimate_of(mean, scale="log")
    out["max"] = Estimate(float(d[-1]))
    return out


def _quantile(
    d: npt.NDArray[np.float64],
    weight: npt.NDArray[np.float64],
    block: npt.NDArray[np.int64],
    *,
    q: float,
    inflation: float,
) -> BlockEstimate:
    """Quantile with its interval. Thicknesses on the grid are few distinct values, known to half a pixel; the interval is that of
    values spread over a pixel, moved to the quantile itself, since steps of the distribution would hide its slope."""
    value = block_quantile(d, weight, block, q=q).value
    spread = (np.arange(_SPREAD) + 0.5) / _SPREAD - 0.5
    wide = block_quantile(
        np.add.outer(spread, d).ravel(),
        np.tile(weight / _SPREAD, _SPREAD),
        np.tile(block, _SPREAD),
        q=q,
        inflation=inflation,
    )
    low, high = max(value + wide.low - wide.value, 0.0), value + wide.high - wide.value
    return replace(wide, value=value, low=low, high=high)


def _threshold(section: Section, shared: Shared) -> float | None:
    """Threshold component of a thickness, to first order: a boundary of S_V (L_A) per volume (area) that moves by δ changes the
    porosity by δ · S_V (δ · L_A) and every diameter by 2 δ."""
    low, high, crossings = section.pores_low, section.pores_high, shared.crossings.mean_per_length
    if low is None or high is None or not crossings > 0:
        return None
    porosity_sd = threshold_sd(*(np.count_nonzero(pores) / shared.n_particle for pores in (low, high)))
    return 2.0 * porosity_sd / (crossings * (math.pi / 2.0 if section.ndim == 2 else 2.0))


def _curve(name: str, table: ThicknessTable) -> Curve:
    """Share of the phase where the local thickness is at most x, on 64 even steps."""
    x = np.linspace(0.0, math.ceil(float(table.diameters[-1])), 65)
    share = np.concatenate([[0.0], np.cumsum(table.totals) / table.totals.sum()])
    unknown = np.full(x.size, np.nan)
    return Curve(name, x, share[np.searchsorted(table.diameters, x, side="right")], unknown, unknown)
