"""Where compositions lie in the phase diagram: stable, metastable on which side, or inside the spinodal."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import fractions, scaled_curvature
from poroscan.demix.phase_diagram import PhaseDiagram

#: States, as stored in ``Classification.state``.
STABLE, METASTABLE_LEAN, METASTABLE_RICH, UNSTABLE = 0, 1, 2, 3
STATE_WORDS = {
    STABLE: "one phase",
    METASTABLE_LEAN: "metastable, polymer-lean side (polymer-rich drops nucleate)",
    METASTABLE_RICH: "metastable, polymer-rich side (polymer-lean drops nucleate)",
    UNSTABLE: "inside the spinodal (demixes by itself)",
}

_CHUNK = 4096


@dataclass(frozen=True)
class Classification:
    """Place of compositions in the phase diagram; every array has the shape of the compositions.

    Parameters
    ----------
    state
        ``STABLE`` (0), ``METASTABLE_LEAN`` (1), ``METASTABLE_RICH`` (2) or ``UNSTABLE`` (3).
    side
        +1 on the polymer-rich side, −1 on the polymer-lean side, 0 in a mixture without any gap. Inside a gap the sides part
        half-way between the two spinodal crossings of the tie line (a line that ends in the plait point); outside, a
        composition belongs to the nearer branch of the binodal.
    lever
        Share of the polymer-rich phase at equilibrium (three phases: of the richest); NaN in one phase.
    region
        Index of the two-phase region; −1 in one phase, −2 in a three-phase triangle.
    """

    state: npt.NDArray[np.int8]
    side: npt.NDArray[np.int8]
    lever: FloatArray
    region: npt.NDArray[np.int16]


def classify(diagram: PhaseDiagram, *, phi_n: npt.ArrayLike, phi_p: npt.ArrayLike) -> Classification:
    """Place of compositions in a phase diagram.

    Parameters
    ----------
    diagram
        Phase diagram of the mixture.
    phi_n, phi_p
        Volume fractions of non-solvent and polymer, of any shape.

    Raises
    ------
    ValueError
        Fractions that are negative or sum to more than 1.
    """
    phi = fractions(phi_n, phi_p)
    shape = phi.shape[1:]
    flat = phi.reshape(3, -1)
    region = np.full(flat.shape[1], -1, dtype=np.int16)
    lever = np.full(flat.shape[1], np.nan)
    side = _nearest_branch(diagram, flat)
    for index, here in enumerate(diagram.regions):
        position, share = here.locate(flat)
        inside = np.isfinite(position) & (region == -1)
        region[inside], lever[inside] = index, share[inside]
        middle = np.interp(position[inside], np.arange(len(here.logs)), here.spinodal_levers.mean(axis=1))
        side[inside] = np.where(share[inside] > middle, 1, -1)
    for triangle in diagram.triangles:
        amounts = triangle.amounts(flat)
        inside = (amounts >= 0).all(axis=0)
        region[inside], lever[inside] = -2, amounts[0, inside]
        side[inside] = np.where(amounts[0, inside] >= amounts[1:, inside].max(axis=0), 1, -1)
    state = np.where(region == -1, STABLE, np.where(side > 0, METASTABLE_RICH, METASTABLE_LEAN))
    state = np.where(scaled_curvature(diagram.mixture, flat)[0] < 0, UNSTABLE, state).astype(np.int8)
    return Classification(state.reshape(shape), side.reshape(shape), lever.reshape(shape), region.reshape(shape))


def _nearest_branch(diagram: PhaseDiagram, phi: FloatArray) -> npt.NDArray[np.int8]:
    """+1 where the nearest point of the binodal belongs to a polymer-rich phase, −1 where to a lean one."""
    side = np.zeros(phi.shape[1], dtype=np.int8)
    if not diagram.regions:
        return side
    rich = np.concatenate([region.rich for region in diagram.regions])[:, [0, 2]]
    lean = np.concatenate([region.lean for region in diagram.regions])[:, [0, 2]]
    points = phi[[0, 2]].T
    for start in range(0, len(points), _CHUNK):
        chunk = points[start : start + _CHUNK]
        to_rich = _least_distance(chunk, rich)
        side[start : start + _CHUNK] = np.where(to_rich < _least_distance(chunk, lean), 1, -1)
    return side


def _least_distance(points: FloatArray, branch: FloatArray) -> FloatArray:
    """Squared distance to the nearest of the branch's points."""
    return np.asarray(((points[:, :1] - branch[:, 0]) ** 2 + (points[:, 1:] - branch[:, 1]) ** 2).min(axis=1))
