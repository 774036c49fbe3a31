"""The ternary phase diagram: every two-phase region with its tie lines, plait points, three-phase triangles, spinodal.

How nothing is missed: every miscibility gap of the three binary edges starts a family of tie lines; each tie line is tested
against the free energy of the whole triangle; where a third phase undercuts it the three-phase triangle is solved for and
its other sides start families of their own; and last, every chord of the lower convex hull of the free energy must lie in a
region found, or it starts one (closed loops that touch no edge). The method is described in docs/phase_diagram.md.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from poroscan.demix.equilibrium import fixed_fraction, potential_gap, solve_phases
from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import COMPONENTS, Mixture
from poroscan.demix.region import Region
from poroscan.demix.region_search import find_regions
from poroscan.demix.spinodal import Spinodal, find_spinodal, plait_near
from poroscan.demix.three_phase import Triangle
from poroscan.errors import SimulationError

#: A solution of the plait equations this near to the end of a family of tie lines is that end.
_NEAR = 0.03
_SAME = 1e-6


@dataclass(frozen=True)
class TieLine:
    """Two coexisting phases.

    Parameters
    ----------
    rich, lean
        Fractions (n, s, p) of the polymer-rich and the polymer-lean phase.
    log_rich, log_lean
        Their natural logarithms, which stay exact where a fraction is too small for a float.
    residual
        Largest difference of the molecular chemical potentials between the phases, kT.
    """

    rich: FloatArray
    lean: FloatArray
    log_rich: FloatArray
    log_lean: FloatArray
    residual: float


@dataclass(frozen=True)
class PlaitPoint:
    """Critical point of a two-phase region: fractions (n, s, p), and whether it is the end of a stable region."""

    phi: FloatArray
    stable: bool


@dataclass(frozen=True)
class PhaseDiagram:
    """Phase diagram of one mixture.

    Parameters
    ----------
    mixture
        The mixture it belongs to.
    regions
        Two-phase regions.
    triangles
        Three-phase triangles.
    plaits
        Plait points, stable ones first; the unstable ones lie inside a larger gap and are never seen.
    spinodal
        Curves and area of the unstable region.
    """

    mixture: Mixture
    regions: tuple[Region, ...]
    triangles: tuple[Triangle, ...]
    plaits: tuple[PlaitPoint, ...]
    spinodal: Spinodal

    @property
    def binodal_area(self) -> float:
        """Area in which the equilibrium state has two or three phases, over the area of the triangle."""
        return sum(region.area for region in self.regions) + sum(triangle.area for triangle in self.triangles)

    @property
    def spinodal_area(self) -> float:
        """Area in which every composition is unstable, over the area of the triangle."""
        return self.spinodal.area

    @property
    def stable_plaits(self) -> FloatArray:
        """Plait points of stable regions, shape (count, 3)."""
        return np.array([plait.phi for plait in self.plaits if plait.stable]).reshape(-1, 3)

    def tie_line_at(
        self,
        component: Literal["n", "s", "p"],
        value: float,
        *,
        phase: Literal["rich", "lean"] = "rich",
        region: int = 0,
    ) -> TieLine:
        """The tie line on which one phase has a given fraction of one component.

        Parameters
        ----------
        component
            ``"n"``, ``"s"`` or ``"p"``.
        value
            Its volume fraction in the phase.
        phase
            The phase meant.
        region
            Index into ``regions``.

        Raises
        ------
        ValueError
            No tie line of the region has it.
        SimulationError
            The tie line could not be polished.
        """
        if component not in COMPONENTS:
            raise ValueError(f"component must be one of n, s, p, got {component!r}")
        if phase not in ("rich", "lean"):
            raise ValueError(f"phase must be rich or lean, got {phase!r}")
        if not self.regions:
            raise ValueError("the mixture has no two-phase region")
        here, row, column = self.regions[region], COMPONENTS.index(component), ("rich", "lean").index(phase)
        along = np.exp(here.logs[:, row, column])
        found = np.nonzero((along[:-1] - value) * (along[1:] - value) <= 0)[0]
        if not found.size:
            raise ValueError(
                f"no tie line of region {region} has phi_{component} = {value:g} in its polymer-{phase} phase; there it "
                f"runs from {along.min():.4g} to {along.max():.4g}"
            )
        guess = here.between(int(found[0]), float((value - along[found[0]]) / np.diff(along)[found[0]]))
        solved = solve_phases(self.mixture, guess, fixed_fraction(row, column, value))
        if solved is None:
            raise SimulationError(f"the tie line at phi_{component} = {value:g} could not be solved for")
        return tie_line(self.mixture, solved)


def tie_line(mixture: Mixture, logs: FloatArray) -> TieLine:
    """Tie line from the logarithms (3, 2) of its phases, polymer-rich first."""
    phi = np.exp(logs)
    return TieLine(phi[:, 0], phi[:, 1], logs[:, 0], logs[:, 1], potential_gap(mixture, logs))


def find_phase_diagram(mixture: Mixture) -> PhaseDiagram:
    """Phase diagram of a mixture.

    Parameters
    ----------
    mixture
        The mixture.

    Raises
    ------
    SimulationError
        An interaction parameter is not a number somewhere in the triangle, or a family of tie lines could not be followed
        to its end; no part of the diagram is returned then.
    """
    regions, triangles = find_regions(mixture)
    spinodal = find_spinodal(mixture)
    regions = tuple(_with_plaits(mixture, region, spinodal.plaits) for region in regions)
    ends = [plait for region in regions for plait in (region.first_plait, region.last_plait) if plait is not None]
    others = [phi for phi in spinodal.plaits if not any(np.abs(phi - end).max() < _SAME for end in ends)]
    plaits = [PlaitPoint(phi, stable=True) for phi in ends] + [PlaitPoint(phi, stable=False) for phi in others]
    return PhaseDiagram(mixture, regions, triangles, tuple(plaits), spinodal)


def _with_plaits(mixture: Mixture, region: Region, plaits: FloatArray) -> Region:
    """The region with the plait point at those of its ends at which the two phases become one.

    Where the plait equations have no solution inside the triangle, the phases become one in the critical point of an edge.
    """
    found: list[FloatArray | None] = [None, None]
    names = list(region.ends)
    for side, logs in region.merged_sides:
        middle = np.exp(logs).mean(axis=1)
        near = [phi for phi in plaits if np.abs(phi - middle).max() < _NEAR]
        exact = min(near, key=lambda phi: float(np.abs(phi - middle).max())) if near else plait_near(mixture, middle)
        if exact is not None and np.abs(exact - middle).max() < _NEAR:
            found[side] = exact
        else:
            names[side] = "critical edge"
    return region.with_plaits(found[0], found[1], ends=(names[0], names[1]))
