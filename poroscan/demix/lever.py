"""Lever rule of a phase diagram: how much of the polymer-lean phase a composition would give."""

from __future__ import annotations

from poroscan.demix.classify import classify
from poroscan.demix.phase_diagram import PhaseDiagram


class Lever:
    """Amount of polymer-lean phase at any composition, by the place of the composition in a diagram.

    Parameters
    ----------
    diagram
        Phase diagram of the mixture.
    """

    def __init__(self, diagram: PhaseDiagram) -> None:
        self._diagram = diagram

    def lean_fraction(self, phi_n: float, phi_p: float) -> float:
        """Volume fraction of polymer-lean phase that a composition splits into; NaN outside every gap.

        Inside a three-phase triangle it is what is not the most polymer-rich phase. A mean over noisy cells that lies slightly
        outside the composition triangle counts as the nearest composition on its edge.
        """
        p = min(max(phi_p, 0.0), 1.0)
        n = min(max(phi_n, 0.0), 1.0 - p)
        return 1.0 - float(classify(self._diagram, phi_n=n, phi_p=p).lever)
