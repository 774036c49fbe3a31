"""Two-phase regions: the family of tie lines from one end to the other, traced by pseudo-arclength continuation.

Each tie line is a Newton solution in the logarithms of the fractions (:mod:`poroscan.demix.equilibrium`). The step is
measured in the fractions of both phases; a family ends at a plait point, on an edge of the triangle, or at a side of a
three-phase triangle.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from poroscan.demix.binary import ABSENT
from poroscan.demix.equilibrium import along_tangent, family_tangent, solve_phases
from poroscan.demix.global_scan import UNDERCUT, EnergyTable
from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture, excess, site_potentials

#: Separation of the two phases (in fractions) below which a plait point is taken as reached.
MERGED = 4e-3

_LONGEST_STEP = 0.012
_SHORTEST_STEP = 1e-9
_MOST_TIE_LINES = 3000
_EDGE_START = 1e-4  # over the size of the entering component


@dataclass(frozen=True)
class Trace:
    """Tie lines from a starting one onwards.

    Parameters
    ----------
    logs
        One array (3, 2) of logarithms per tie line; the starting one first.
    end
        ``"plait"``, ``"edge pn"``, ``"edge ps"``, ``"edge sn"``, ``"unstable"`` (a third phase undercuts the last one) or
        ``"lost"``.
    third
        Fractions of the undercutting phase, where the end is ``"unstable"``.
    """

    logs: tuple[FloatArray, ...]
    end: str
    third: FloatArray | None = None


def separation(logs: FloatArray) -> float:
    """Distance of two phases in the space of fractions."""
    phi = np.exp(logs)
    return float(np.linalg.norm(phi[:, 0] - phi[:, 1]))


def enter_from_edge(mixture: Mixture, gap: FloatArray, edge: str) -> FloatArray | None:
    """First tie line off an edge: the absent component enters as a trace, shared between the phases as they want it."""
    absent = ABSENT[edge]
    with np.errstate(invalid="ignore"):
        potentials = site_potentials(mixture, np.where(np.isinf(gap), -2000.0, gap))[absent]
    # both phases carry the same logarithm in `potentials`: what is left is the difference in the trace's surroundings
    preference = float((potentials[0] - potentials[1]) * mixture.sizes[absent])
    for share in (1.0, 1e-2, 1e-4):  # a gap that is all but closed ends within the first step
        amount = np.log(share * _EDGE_START / mixture.sizes[absent])
        logs = np.array(gap)
        logs[absent] = amount + np.minimum(0.0, [-preference, preference])
        start = np.exp(logs)
        heading = np.zeros((3, 2))
        heading[absent, int(start[absent, 1] > start[absent, 0])] = 1.0
        solved = solve_phases(mixture, logs, along_tangent(start, heading, 0.0))
        if solved is not None and separation(solved) > 0.5 * separation(gap):
            return solved
    return None


def trace(
    mixture: Mixture,
    start: FloatArray,
    heading: FloatArray,
    *,
    table: EnergyTable,
    gaps: Mapping[str, Sequence[FloatArray]],
) -> Trace:
    """Follow a family of tie lines.

    Parameters
    ----------
    mixture
        The mixture.
    start
        A tie line, logarithms (3, 2).
    heading
        Change of the fractions (3, 2) that tells which way to go.
    table
        Free energy over the triangle, for the stability of every tie line.
    gaps
        Miscibility gaps by edge, to end on.
    """
    found = [start]
    step = min(_LONGEST_STEP, 0.1 * separation(start), 2 * float(np.exp(start).max(axis=1).min()) + _SHORTEST_STEP)
    while len(found) < _MOST_TIE_LINES:
        logs = found[-1]
        third = undercutting_phase(mixture, logs, table)
        if third is not None:
            return Trace(tuple(found), "unstable", third)
        if separation(logs) < MERGED:
            return Trace(tuple(found), "plait")
        by_logs, tangent = family_tangent(mixture, logs)
        sign = np.sign((tangent * heading).sum())
        by_logs, tangent = by_logs * sign, tangent * sign
        edge = _arrived(mixture, logs, tangent, gaps)
        if edge is not None:
            return Trace((*found, edge[1]), f"edge {edge[0]}")
        moved = _advance(mixture, logs, (by_logs, tangent), min(step, _reach(logs, tangent)))
        if moved is None:
            return Trace(tuple(found), "lost")
        next_logs, used, easy = moved
        step = min(_LONGEST_STEP, used * (1.6 if easy else 1.0))
        heading = np.exp(next_logs) - np.exp(logs)
        found.append(next_logs)
    return Trace(tuple(found), "lost")


def undercutting_phase(mixture: Mixture, logs: FloatArray, table: EnergyTable) -> FloatArray | None:
    """Fractions of a phase under the plane through a tie line, or None where the tie line is stable."""
    with np.errstate(invalid="ignore"):
        plane = site_potentials(mixture, logs).mean(axis=1)
    if not np.isfinite(plane).all():  # on an edge: any amount of the absent component costs infinitely much
        return None
    least, where = table.undercut(plane[None])
    return table.phi[:, where[0]] if least[0] < -UNDERCUT else None


def _reach(logs: FloatArray, tangent: FloatArray) -> float:
    """Longest step that neither runs past a plait point nor through an edge."""
    phi = np.exp(logs)
    limit = 0.2 * separation(logs)
    most, fall = phi.max(axis=1), -np.take_along_axis(tangent, phi.argmax(axis=1)[:, None], axis=1)[:, 0]
    falling = fall > 0
    if falling.any():
        limit = min(limit, float((0.7 * most[falling] / fall[falling]).min()))
    return limit


def _advance(
    mixture: Mixture, logs: FloatArray, direction: tuple[FloatArray, FloatArray], step: float
) -> tuple[FloatArray, float, bool] | None:
    """Next tie line, the step it took, and whether it came at the first attempt."""
    by_logs, tangent = direction
    phi, apart = np.exp(logs), separation(logs)
    easy = True
    while step > _SHORTEST_STEP:
        linear = phi + step * tangent
        gentle = (linear > 0.2 * phi) & (linear < 5 * phi) & (phi > 1e-3)
        guess = np.where(gentle, np.log(np.where(gentle, linear, 1.0)), logs + np.clip(step * by_logs, -60, 60))
        solved = solve_phases(mixture, np.minimum(guess, 0.0), along_tangent(phi, tangent, step))
        if solved is not None and _follows(np.exp(solved) - phi, step, separation(solved) / apart):
            return solved, step, easy
        step, easy = 0.5 * step, False
    return None


def _follows(moved: FloatArray, step: float, ratio: float) -> bool:
    """A step on the same family: about as long as asked for, and not onto the trivial solution of two equal phases."""
    return bool(np.linalg.norm(moved) < 1.5 * step and ratio > 0.5)


def _arrived(
    mixture: Mixture, logs: FloatArray, tangent: FloatArray, gaps: Mapping[str, Sequence[FloatArray]]
) -> tuple[str, FloatArray] | None:
    """The edge and its gap, once the component absent there has all but left both phases."""
    phi = np.exp(logs)
    for edge, absent in ABSENT.items():
        leaving = tangent[absent, phi[absent].argmax()] < 0
        if leaving and phi[absent].max() < 0.3 * _EDGE_START / mixture.sizes[absent]:
            for gap in gaps[edge]:
                for candidate in (gap, gap[:, ::-1]):
                    if np.abs(np.exp(candidate) - phi).max() < 0.01:
                        return edge, candidate
    return None


def tie_energy_above(mixture: Mixture, logs: FloatArray, third: FloatArray) -> float:
    """Height of a phase (fractions, shape (3,)) above the plane through a tie line; negative where it undercuts."""
    with np.errstate(invalid="ignore"):
        plane = site_potentials(mixture, logs).mean(axis=1)
    if not np.isfinite(plane).all():
        return np.inf
    column = third[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        ideal = np.where(column > 0, column * np.log(column), 0.0) / mixture.sizes[:, None]
    return float(ideal.sum() + excess(mixture, column)[0][0] - plane @ third)
