"""How the pores hang together: Euler density, connected, open and closed pores.

The Euler number of a plane pore pattern is the number of its pieces less the number of holes in them (in space: pieces less tunnels
plus cavities). Its density is taken from the 2 × 2 (2 × 2 × 2) neighbourhoods that lie wholly inside the outline, each of
which stands for one pixel: frame and outline add nothing. It is the mean of the two digital numbers (pores joined by edges only,
pores joined by corners too), which for smooth boundaries differ from the true one with opposite signs.

Overlapping discs have corners where digital Euler numbers do not converge to the true one, however fine the grid (Hörrmann and
Svane, Local digital algorithms applied to Boolean models): judge those by their neighbours, not by theory.

References
----------
Gray, IEEE Trans. Comput. C-20 (1971) 551 (bit quads); Serra, Image Analysis and Mathematical Morphology (1982); Ohser and Mücklich,
Statistical Analysis of Microstructures in Materials Science (2000).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt

from poroscan.measure.bodies import beside_outline, pieces
from poroscan.measure.part import Part
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.tally import label_counts, label_sums
from poroscan.measure.uncertainty import block_ratio, estimate_of
from poroscan.quantities import Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]
Int32 = npt.NDArray[np.int32]


def euler_density(phase: BoolArray, inside: BoolArray, *, pixel_size: float) -> float:
    """Euler number of a phase per area (2-D, 1/length²) or volume (3-D, 1/length³); NaN where no neighbourhood lies inside.

    Parameters
    ----------
    phase, inside
        bool arrays of one shape: the phase, and where neighbourhoods count (the particle).
    pixel_size
        Length of a pixel edge.

    Raises
    ------
    ValueError
        If the shapes differ or the arrays are not 2-D or 3-D.
    """
    if phase.shape != inside.shape or phase.ndim not in (2, 3):
        raise ValueError(f"phase and inside must be 2-D or 3-D of one shape, not {phase.shape} and {inside.shape}")
    sums, cells = euler_sums(phase, inside)
    total = float(cells.sum())
    return math.nan if total == 0 else float(sums.sum()) / total / pixel_size**phase.ndim


def euler_sums(phase: BoolArray, inside: BoolArray, *, blocks: Int32 | None = None) -> tuple[Float, Float]:
    """Euler contributions and neighbourhoods by block (of the first pixel of each), pixel units."""
    n = 1 if blocks is None else int(blocks.max(initial=0)) + 1
    shape = (1, *phase.shape) if phase.ndim == 2 else phase.shape
    code = np.zeros((1, 1, 1), dtype=np.int32) if blocks is None else np.ascontiguousarray(blocks).reshape(shape)
    state = (phase.view(np.uint8) + 2 * inside.view(np.uint8)).reshape(shape)
    table = _PLANE if phase.ndim == 2 else _SPACE
    sums, cells = _euler(state, code, blocks is not None, table, n)
    return sums, cells.astype(np.float64)


def _plane_table() -> Float:
    """Contribution of each 2 × 2 neighbourhood: one phase pixel +1/4, three −1/4; both digital numbers' diagonal terms cancel."""
    count = np.array([bin(code).count("1") for code in range(16)])
    return np.asarray(np.select([count == 1, count == 3], [0.25, -0.25], 0.0))


def _space_table() -> Float:
    """Contribution of each 2 × 2 × 2 neighbourhood: mean over the phase with 6 and the phase with 26 neighbours.

    With 6 neighbours: vertices/8 − edges/4 + faces/2 − cubes. With 26 neighbours the phase is the complement of a background
    with 6, which has the same Euler number in space.
    """
    six = np.array([_cell_complex(code) for code in range(256)])
    return np.asarray((six + six[::-1]) / 2.0)


def _cell_complex(code: int) -> float:
    cube = np.array([code >> bit & 1 for bit in range(8)], dtype=bool).reshape(2, 2, 2)
    edges = sum(int((cube.take(0, axis=a) & cube.take(1, axis=a)).sum()) for a in range(3))
    faces = sum(int(cube.take(i, axis=a).all()) for a in range(3) for i in (0, 1))
    return float(cube.sum()) / 8.0 - edges / 4.0 + faces / 2.0 - float(cube.all())


_PLANE = _plane_table()
_SPACE = _space_table()


@numba.njit(cache=True)
def _euler(state, code, coded, table, n):  # type: ignore[no-untyped-def]
    planes, rows, columns = state.shape
    deep = 2 if planes > 1 or table.size == 256 else 1
    sums, cells = np.zeros(n), np.zeros(n, dtype=np.int64)
    for z in range(planes - deep + 1):
        for y in range(rows - 1):
            for x in range(columns - 1):
                bits, inside, k = 0, True, 0
                for dz in range(deep):
                    for dy in range(2):
                        for dx in range(2):
                            s = state[z + dz, y + dy, x + dx]
                            inside = inside and s >= 2
                            bits |= (s & 1) << k
                            k += 1
                if inside:
                    block = code[z, y, x] if coded else 0
                    sums[block] += table[bits]
                    cells[block] += 1
    return sums, cells


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Euler density; connected, open and closed porosity."""
    sums, cells = euler_sums(section.pores, section.particle, blocks=shared.blocks)
    base = "euler_density" if section.ndim == 2 else "euler_density_3d"
    estimates = {base: estimate_of(block_ratio(sums[1:], cells[1:], inflation=shared.block_inflation))}
    largest = _largest_piece(shared.piece_sizes)
    estimates["connected_fraction"] = Estimate(largest / shared.n_pores if shared.n_pores else math.nan)
    estimates["connected_porosity"] = Estimate(largest / shared.n_particle)
    n_walls = shared.n_particle - shared.n_pores
    labels, n = pieces(shared.walls, diagonal=False)
    wall = _largest_piece(label_counts(labels, number=n + 1))
    estimates["wall_connected_fraction"] = Estimate(wall / n_walls if n_walls else math.nan)
    del labels
    estimates |= _open_and_closed(section, shared)
    return Part(estimates, flags=_piece_flags(section))


def _open_and_closed(section: Section, shared: Shared) -> dict[str, Estimate]:
    if section.view != "whole" or section.touches_frame:
        return {"open_porosity": Estimate(math.nan), "closed_porosity": Estimate(math.nan)}
    opened = shared.open_pieces[shared.pieces]
    area, pores = shared.block_pixels, shared.block_pores
    through = label_sums(shared.blocks, opened, number=shared.n_blocks)[1:]
    return {
        name: estimate_of(block_ratio(hits, area, inflation=shared.block_inflation, scale="logit"), scale="logit")
        for name, hits in (("open_porosity", through), ("closed_porosity", pores - through))
    }


def open_pieces(labels: Int32, n: int, particle: BoolArray) -> BoolArray:
    """Which pieces 0…n reach the outline (0, no piece, is False)."""
    found = np.zeros(n + 1, dtype=bool)
    found[labels[beside_outline(particle)]] = True
    found[0] = False
    return found


def _largest_piece(sizes: npt.NDArray[np.int64]) -> int:
    return int(sizes[1:].max(initial=0))


def _piece_flags(section: Section) -> tuple[str, ...]:
    if section.view == "interior":
        return ()
    return ("several_pieces",) if pieces(section.particle, diagonal=True)[1] > 1 else ()
