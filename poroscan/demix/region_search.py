"""Finds every two-phase region and three-phase triangle of a mixture."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from poroscan.demix.binary import EDGES, edge_gaps
from poroscan.demix.binodal import (
    MERGED,
    Trace,
    enter_from_edge,
    separation,
    tie_energy_above,
    trace,
    undercutting_phase,
)
from poroscan.demix.equilibrium import family_tangent, solve_phases, through_feed
from poroscan.demix.global_scan import EnergyTable, hull_chords, tabulate
from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture
from poroscan.demix.region import Region, make_region
from poroscan.demix.three_phase import SIDES, Triangle, find_triangle
from poroscan.errors import SimulationError

_SAME = 1e-4
_LEAST_LOG = -20.0
_MERGING = 0.05
_ON_EDGE = 1e-6
_ATTEMPTS = 6
_TRIES = 8
_NEAR_SIDE = 0.15


@dataclass
class _Search:
    """What has been found so far, and the starting points still open."""

    mixture: Mixture
    table: EnergyTable
    gaps: dict[str, tuple[FloatArray, ...]]
    regions: list[Region] = field(default_factory=list)
    triangles: list[Triangle] = field(default_factory=list)
    open_gaps: list[tuple[str, FloatArray]] = field(default_factory=list)
    open_sides: list[tuple[FloatArray, FloatArray]] = field(default_factory=list)  # (pair of logs, logs of third phase)


def find_regions(mixture: Mixture) -> tuple[tuple[Region, ...], tuple[Triangle, ...]]:
    """Every two-phase region and three-phase triangle.

    Raises
    ------
    SimulationError
        A family of tie lines could not be followed to its end.
    """
    gaps = {edge: edge_gaps(mixture, edge) for edge in EDGES}
    search = _Search(mixture, tabulate(mixture), gaps)
    search.open_gaps = [(edge, gap) for edge, found in gaps.items() for gap in found]
    while search.open_gaps or search.open_sides:
        if search.open_gaps:
            _from_gap(search, *search.open_gaps.pop(0))
        else:
            _from_side(search, *search.open_sides.pop(0))
    _from_hull(search)
    return tuple(search.regions), tuple(search.triangles)


def _from_gap(search: _Search, edge: str, gap: FloatArray) -> None:
    start = enter_from_edge(search.mixture, gap, edge)
    if start is None:
        raise _lost(search.mixture, f"at the {edge} edge")
    ahead = np.exp(start) - np.exp(gap)
    followed = trace(search.mixture, start, ahead, table=search.table, gaps=search.gaps)
    logs, end = _closed(search, Trace((gap, *followed.logs), followed.end, followed.third))
    search.regions.append(make_region(search.mixture, logs, (f"edge {edge}", end)))


def _from_side(search: _Search, pair: FloatArray, third: FloatArray) -> None:
    away = np.exp(pair).mean(axis=1) - np.exp(third)
    followed = trace(search.mixture, pair, np.column_stack([away, away]), table=search.table, gaps=search.gaps)
    logs, end = _closed(search, followed)
    search.regions.append(make_region(search.mixture, logs, ("triangle", end)))


def _from_hull(search: _Search) -> None:
    """Regions that touch no edge and no triangle: chords of the convex hull outside everything found."""
    for chord in hull_chords(search.mixture, search.table):
        middle = chord.mean(axis=0)
        if middle.min() < _ON_EDGE or _is_covered(search, middle[:, None]):
            continue
        with np.errstate(divide="ignore"):
            logs = np.maximum(np.log(chord.T), _LEAST_LOG)
        pair = solve_phases(search.mixture, logs, through_feed(middle[0], middle[2]))
        if pair is None or separation(pair) < MERGED:
            continue
        if undercutting_phase(search.mixture, pair, search.table) is not None:
            continue
        if _is_covered(search, np.exp(pair) @ np.array([[0.5], [0.5]])):
            continue
        _both_ways(search, pair)


def _both_ways(search: _Search, pair: FloatArray) -> None:
    tangent = family_tangent(search.mixture, pair)[1]
    halves = []
    for sign in (-1, 1):
        followed = trace(search.mixture, pair, sign * tangent, table=search.table, gaps=search.gaps)
        halves.append(_closed(search, followed))
    (back, first), (forth, last) = halves
    search.regions.append(make_region(search.mixture, [*back[:0:-1], *forth], (first, last)))
    while search.open_sides:
        _from_side(search, *search.open_sides.pop(0))


def _is_covered(search: _Search, phi: FloatArray) -> bool:
    if any((triangle.amounts(phi) > -1e-3).all() for triangle in search.triangles):
        return True
    return any(np.isfinite(region.locate(phi)[0]).all() for region in search.regions)


def _closed(search: _Search, followed: Trace) -> tuple[list[FloatArray], str]:
    """Tie lines up to the true end of a trace, and the name of that end; keeps the list of open starts."""
    logs = list(followed.logs)
    if followed.end == "unstable":
        return _ended_at_triangle(search, followed)
    if followed.end.startswith("edge"):
        _strike_gap(search, followed.end.removeprefix("edge "), logs[-1])
    elif followed.end == "lost":
        if separation(logs[-1]) > _MERGING:
            raise _lost(search.mixture, f"near phi_n, phi_s, phi_p = {np.exp(logs[-1]).mean(axis=1).round(4).tolist()}")
        return logs, "plait"
    return logs, followed.end


def _strike_gap(search: _Search, edge: str, reached: FloatArray) -> None:
    """A gap that a family has run into needs no start of its own."""
    phi = np.exp(reached)
    search.open_gaps = [
        (name, gap)
        for name, gap in search.open_gaps
        if name != edge or min(np.abs(np.exp(gap) - phi).max(), np.abs(np.exp(gap)[:, ::-1] - phi).max()) > _SAME
    ]


def _ended_at_triangle(search: _Search, followed: Trace) -> tuple[list[FloatArray], str]:
    """Cut a trace where it meets a side of the triangle that undercuts it."""
    last = followed.logs[-1]
    triangle = _triangle_met(search, followed)
    if not any(known.is_same(triangle) for known in search.triangles):
        search.triangles.append(triangle)
        search.open_sides += [(triangle.logs[:, list(side)], triangle.logs[:, 3 - sum(side)]) for side in SIDES]
    side, other = _side_met(triangle, last)
    corner = np.exp(triangle.logs[:, other])
    kept = [logs for logs in followed.logs if tie_energy_above(search.mixture, logs, corner) > 1e-13]
    pair = triangle.logs[:, side]
    search.open_sides = [(logs, _) for logs, _ in search.open_sides if not _same_pair(logs, pair)]
    return [*kept, pair], "triangle"


def _triangle_met(search: _Search, followed: Trace) -> Triangle:
    """The triangle whose third phase undercuts the last tie line: one known already, or a new one.

    The guess for a new one is the undercutting phase with one of the last tie lines; a rough guess can lead astray, so the
    tie lines are tried backwards.
    """
    last = followed.logs[-1]
    for known in search.triangles:
        side, other = _side_met(known, last)
        near = np.abs(np.exp(known.logs[:, side]) - np.exp(last)).max() < _NEAR_SIDE
        if near and tie_energy_above(search.mixture, last, np.exp(known.logs[:, other])) < 0:
            return known
    for pair in followed.logs[: -_TRIES - 1 : -1]:
        triangle = _stable_triangle(search, pair, followed.third)
        if triangle is not None:
            return triangle
    raise _lost(search.mixture, f"where a third phase appears near {np.exp(last).mean(axis=1).round(4).tolist()}")


def _stable_triangle(search: _Search, pair: FloatArray, third: FloatArray | None) -> Triangle | None:
    """Triangle of a tie line and a phase that undercuts it; where a fourth phase undercuts that, it takes its place."""
    for _ in range(_ATTEMPTS):
        triangle = None if third is None else find_triangle(search.mixture, pair, third)
        if triangle is None:
            return None
        third = undercutting_phase(search.mixture, triangle.logs, search.table)
        if third is None:
            return triangle
        pair = triangle.logs[:, _side_met(triangle, pair)[0]]
    return None


def _side_met(triangle: Triangle, logs: FloatArray) -> tuple[list[int], int]:
    """The triangle's side nearest to a tie line, in the tie line's order of phases, and its opposite corner."""
    phi, corners = np.exp(logs), np.exp(triangle.logs)
    ordered = [[i, j] for i in range(3) for j in range(3) if i != j]
    side = min(ordered, key=lambda pair: float(np.abs(corners[:, pair] - phi).max()))
    return side, 3 - sum(side)


def _same_pair(a: FloatArray, b: FloatArray) -> bool:
    first, second = np.exp(a), np.exp(b)
    return bool(min(np.abs(first - second).max(), np.abs(first - second[:, ::-1]).max()) < _SAME)


def _lost(mixture: Mixture, where: str) -> SimulationError:
    return SimulationError(
        f"the phase diagram could not be completed: a family of tie lines was lost {where} ({mixture}); "
        "check the interaction parameters, or report them if they are meant"
    )
