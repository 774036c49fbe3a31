"""Fractions that are fractions: what little noise left below 0 is exchanged with neighbouring cells, for fields handed out.

The solver steps with the fields as they are; this repair touches only copies that become results. It clips nothing: a
cell that lacks an amount d of a component takes it from its neighbours, in proportion to what they hold, and gives them as
much of the component that it holds most of. Every cell still adds up to 1, every component keeps its total. Traces are
taken from traces as far as they go, so that walls and pores keep their shape.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from numba import njit

FloatArray = npt.NDArray[np.floating]

#: Cells that hold at most this much of a component are asked first, within this reach; then all.
_TRACE = 0.2
_REACH = 4


@dataclass(frozen=True, eq=False)
class Repaired:
    """Fields without negative fractions.

    Parameters
    ----------
    polymer, nonsolvent
        Fractions in [0, 1], and so is 1 − polymer − nonsolvent; shape and precision of the fields given.
    share
        Volume exchanged over the volume of the box; 0 where nothing was negative.
    """

    polymer: FloatArray
    nonsolvent: FloatArray
    share: float


def repair_fractions(polymer: FloatArray, nonsolvent: FloatArray) -> Repaired:
    """Exchange deficits with neighbouring cells until polymer, non-solvent and solvent are in [0, 1] everywhere.

    The neighbourhood is the 3 × 3 (× 3) cells around the one that lacks something, periodic, and grows while it holds too
    little: first up to four cells away among cells with at most 0.2 of the component, then among all. Cells are taken in order, so that the result is the same bits for the same fields. Fields of single precision are
    rounded towards the inside of the triangle (1e-7).

    Parameters
    ----------
    polymer, nonsolvent
        Fractions, 2-D or 3-D; solvent makes up the rest.

    Raises
    ------
    ValueError
        If the fields differ in shape or are not finite, or a component is negative in total.
    """
    if polymer.shape != nonsolvent.shape or polymer.ndim not in (2, 3):
        raise ValueError(
            f"polymer and nonsolvent must have one 2-D or 3-D shape, not {polymer.shape} and {nonsolvent.shape}"
        )
    if not (np.isfinite(polymer).all() and np.isfinite(nonsolvent).all()):
        raise ValueError("polymer and nonsolvent must be finite; a field that is not cannot be repaired")
    p, n = polymer.astype(float), nonsolvent.astype(float)
    parts = np.stack([p, n, 1 - p - n])
    if parts.min() >= 0:
        return Repaired(polymer, nonsolvent, 0.0)
    shape = parts.shape if polymer.ndim == 3 else (3, 1, *polymer.shape)
    moved = _exchange(parts.reshape(shape))
    if moved < 0:
        raise ValueError(
            "polymer, nonsolvent and solvent must be positive in total; a component that is not cannot be repaired"
        )
    polymer, nonsolvent = _inside(parts[0].astype(polymer.dtype), parts[1].astype(nonsolvent.dtype))
    return Repaired(polymer, nonsolvent, float(moved / polymer.size))


def _inside(p: FloatArray, n: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Round the larger of the two down by single units of its last place where rounding made the sum exceed 1."""
    while (over := 1 - p - n < 0).any():
        for a, larger in ((p, over & (p >= n)), (n, over & (p < n))):
            a[larger] = np.nextafter(a[larger], a.dtype.type(0))
    return p, n


# mypy: disable-error-code="no-untyped-def"
@njit(cache=True, error_model="numpy")
def _exchange(parts):
    """Repair (3, planes, rows, columns) in place; the amount exchanged, or −1 where the box holds too little."""
    moved = 0.0
    _, depth, height, width = parts.shape
    for z in range(depth):
        for y in range(height):
            for x in range(width):
                for a in range(3):
                    if parts[a, z, y, x] < 0:
                        amount = -parts[a, z, y, x]
                        reach, most = 1, _TRACE
                        while not _take(parts, a, z, y, x, amount, reach, most):
                            reach += 1
                            if most == _TRACE:
                                if reach > _REACH:
                                    reach, most = 1, np.inf
                            elif 2 * reach - 1 >= max(depth, height, width):
                                return -1.0
                        moved += amount
    return moved


@njit(cache=True, error_model="numpy")
def _take(parts, a, z, y, x, amount, reach, most):
    """Take an amount of component a from cells within reach, for the fullest component of the cell; False if they hold too little."""
    _, depth, height, width = parts.shape
    # each cell of a small periodic box once, however far the reach
    z_0, z_1 = z - min(reach, (depth - 1) // 2), z + min(reach, depth // 2) + 1
    y_0, y_1 = y - min(reach, (height - 1) // 2), y + min(reach, height // 2) + 1
    x_0, x_1 = x - min(reach, (width - 1) // 2), x + min(reach, width // 2) + 1
    held = 0.0
    for k in range(z_0, z_1):
        for j in range(y_0, y_1):
            for i in range(x_0, x_1):
                here = parts[a, k % depth, j % height, i % width]
                if 0 < here <= most:
                    held += here
    if held < amount:
        return False
    b = 0
    for c in range(1, 3):
        if parts[c, z, y, x] > parts[b, z, y, x]:
            b = c
    ratio = amount / held
    for k in range(z_0, z_1):
        for j in range(y_0, y_1):
            for i in range(x_0, x_1):
                here = parts[a, k % depth, j % height, i % width]
                if 0 < here <= most:
                    parts[a, k % depth, j % height, i % width] = here - ratio * here
                    parts[b, k % depth, j % height, i % width] += ratio * here
    parts[a, z, y, x] = 0.0
    parts[b, z, y, x] -= amount
    return True
