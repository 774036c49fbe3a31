"""Straight paths through the phase diagram: where they cross the binodal and the spinodal.

Two paths matter in practice. The mixing line joins the dope and the bath: every mixture of the two lies on it. The exchange
line keeps the polymer fraction of the dope while non-solvent replaces solvent: the start of what a drop does in a bath.
Neither is the true path of a composition inside a drop, which the simulation gives.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from poroscan.demix.classify import STABLE, UNSTABLE, Classification, classify
from poroscan.demix.interaction import FloatArray
from poroscan.demix.phase_diagram import PhaseDiagram

_SAMPLES = 2001
_BISECTIONS = 40


@dataclass(frozen=True)
class Crossing:
    """Where a straight path crosses a boundary.

    Parameters
    ----------
    along
        0 at the start of the path, 1 at its end.
    phi
        Fractions (n, s, p) there.
    boundary
        ``"binodal"`` or ``"spinodal"``.
    entering
        True where the path goes from the more to the less stable side.
    side
        +1 where it is crossed on the polymer-rich side of the plait point, −1 on the polymer-lean side.
    """

    along: float
    phi: FloatArray
    boundary: Literal["binodal", "spinodal"]
    entering: bool
    side: int


def line_crossings(diagram: PhaseDiagram, start: FloatArray, end: FloatArray) -> tuple[Crossing, ...]:
    """Crossings of the straight path between two compositions, in their order along it.

    Parameters
    ----------
    diagram
        Phase diagram of the mixture.
    start, end
        Fractions (n, s, p) of the two ends.

    Raises
    ------
    ValueError
        Fractions that are negative or do not add up to 1.
    """
    start, end = np.asarray(start, dtype=float), np.asarray(end, dtype=float)
    for name, phi in (("start", start), ("end", end)):
        if phi.shape != (3,) or abs(phi.sum() - 1) > 1e-6:
            raise ValueError(f"{name} must be three volume fractions (n, s, p) that add up to 1, got {phi.tolist()}")
    along = np.linspace(0, 1, _SAMPLES)
    states = _at(diagram, start, end, along)
    crossings = [
        *_crossings(diagram, start, end, along, states, "binodal"),
        *_crossings(diagram, start, end, along, states, "spinodal"),
    ]
    return tuple(sorted(crossings, key=lambda crossing: crossing.along))


def _at(diagram: PhaseDiagram, start: FloatArray, end: FloatArray, along: FloatArray) -> Classification:
    phi = start[:, None] + (end - start)[:, None] * along
    return classify(diagram, phi_n=phi[0], phi_p=phi[2])


def _beyond(states: Classification, boundary: str) -> np.ndarray:
    """True past the boundary; the spinodal lies inside the binodal, so what is unstable is past both."""
    return states.state == UNSTABLE if boundary == "spinodal" else states.state != STABLE


def _crossings(
    diagram: PhaseDiagram,
    start: FloatArray,
    end: FloatArray,
    along: FloatArray,
    states: Classification,
    boundary: Literal["binodal", "spinodal"],
) -> list[Crossing]:
    past = _beyond(states, boundary)
    index = np.nonzero(past[1:] != past[:-1])[0]
    if not index.size:
        return []
    low, high, before = along[index], along[index + 1], past[index]
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        same = _beyond(_at(diagram, start, end, middle), boundary) == before
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    just_inside = np.where(before, low, high)
    sides = _at(diagram, start, end, just_inside).side
    return [
        Crossing(float(t), start + (end - start) * t, boundary, not was_past, int(side))
        for t, was_past, side in zip(0.5 * (low + high), before, sides, strict=True)
    ]
