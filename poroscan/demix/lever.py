"""Lever rule on the tie lines of a phase diagram: how much of the polymer-lean phase a composition would give."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from poroscan.demix.phase_diagram import PhaseDiagram

FloatArray = npt.NDArray[np.float64]


class Lever:
    """Amount of polymer-lean phase at any composition, interpolated between the tie lines of a diagram.

    Parameters
    ----------
    diagram
        Phase diagram of the mixture.
    """

    def __init__(self, diagram: PhaseDiagram) -> None:
        # (tie lines, 2 phases, (non-solvent, polymer)); regions run along tie lines that never cross
        self._regions = [np.exp(region.logs)[:, [0, 2], :].transpose(0, 2, 1) for region in diagram.regions]
        self._triangles = [triangle.phases[:, [0, 2]] for triangle in diagram.triangles]

    def lean_fraction(self, phi_n: float, phi_p: float) -> float:
        """Volume fraction of polymer-lean phase that a composition splits into; NaN outside every gap.

        Inside a three-phase triangle it is what is not the most polymer-rich phase.
        """
        point = np.array([phi_n, phi_p])
        for ends in self._regions:
            share = _on_tie_lines(ends, point)
            if not math.isnan(share):
                return share
        for corners in self._triangles:
            weights = np.linalg.solve(np.vstack([corners.T, np.ones(3)]), np.append(point, 1.0))
            if weights.min() >= 0:
                return float(1 - weights[np.argmax(corners[:, 1])])
        return math.nan


def _on_tie_lines(ends: FloatArray, point: FloatArray) -> float:
    along = ends[:, 1] - ends[:, 0]
    to_point = point - ends[:, 0]
    side = along[:, 0] * to_point[:, 1] - along[:, 1] * to_point[:, 0]
    for k in np.nonzero(side[:-1] * side[1:] <= 0)[0]:
        gap = side[k] - side[k + 1]
        w = 0.0 if gap == 0 else side[k] / gap
        rich, lean = (1 - w) * ends[k] + w * ends[k + 1]
        length = float((lean - rich) @ (lean - rich))
        share = float((point - rich) @ (lean - rich)) / length if length > 0 else math.nan
        if 0 <= share <= 1:
            return share
    return math.nan
