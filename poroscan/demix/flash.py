"""Flash: into which phases, and how much of each, does a feed of given composition part?"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from poroscan.demix.binary import ABSENT, EDGES, edge_gaps
from poroscan.demix.binodal import separation
from poroscan.demix.equilibrium import potential_gap, solve_phases, through_feed
from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import excess, fractions, ideal_energy, scaled_curvature, site_potentials
from poroscan.demix.phase_diagram import PhaseDiagram
from poroscan.demix.region import Region
from poroscan.demix.spinodal import composition
from poroscan.errors import SimulationError

#: How far a one-phase answer may be undercut on a coarse grid before a missed region is suspected, kT per site.
_MISSED = 1e-8
_ON_EDGE = 1e-12
_ROUNDING = 1e-9
_SLACK = 0.02  # of a tie line: how far the interpolated binodal may be off
_TRIVIAL = 1e-5  # separation below which two phases are one


@dataclass(frozen=True)
class Flash:
    """Equilibrium state of a feed.

    Parameters
    ----------
    feed
        Fractions (n, s, p).
    phases
        Fractions of the phases, shape (count, 3); polymer-richest first.
    log_phases
        Their natural logarithms.
    amounts
        Volume fraction of the feed that each phase takes, shape (count,); they add up to 1.
    homogeneous
        What the feed would be if it stayed one phase: ``"stable"``, ``"metastable"`` (demixes by nucleation) or
        ``"unstable"`` (demixes by itself, inside the spinodal).
    residual
        Largest difference of molecular chemical potentials between the phases, kT.
    """

    feed: FloatArray
    phases: FloatArray
    log_phases: FloatArray
    amounts: FloatArray
    homogeneous: Literal["stable", "metastable", "unstable"]
    residual: float


def flash(diagram: PhaseDiagram, phi_n: float, phi_p: float) -> Flash:
    """Phases and amounts of a feed.

    Parameters
    ----------
    diagram
        Phase diagram of the mixture.
    phi_n, phi_p
        Volume fractions of non-solvent and polymer; the rest is solvent.

    Raises
    ------
    ValueError
        Fractions that are negative or sum to more than 1, or a feed on a corner of the triangle.
    SimulationError
        The phases could not be polished, or the answer is not the state of least free energy.
    """
    feed = fractions(phi_n, phi_p)
    if feed.shape != (3,):
        raise ValueError("phi_n and phi_p must be single numbers; classify takes arrays")
    if feed.max() > 1 - _ON_EDGE:
        raise ValueError(
            f"feed (phi_n={feed[0]:g}, phi_s={feed[1]:g}, phi_p={feed[2]:g}) lies on a corner of the composition triangle: "
            "a pure component cannot demix; give at least two components"
        )
    logs = _coexisting(diagram, feed)
    if logs is None:
        _refuse_undercut(diagram, feed)
        with np.errstate(divide="ignore"):
            return _result(diagram, feed, np.log(feed)[:, None])
    return _result(diagram, feed, logs)


def _coexisting(diagram: PhaseDiagram, feed: FloatArray) -> FloatArray | None:
    """Logarithms of the coexisting phases, shape (3, count), or None for one phase."""
    if feed.min() < _ON_EDGE:
        return _on_edge(diagram, feed)
    for triangle in diagram.triangles:
        if (triangle.amounts(feed) >= 0).all():
            return triangle.logs
    for region in diagram.regions:
        position, lever = (float(found[0]) for found in region.locate(feed[:, None], slack=_SLACK))
        if np.isfinite(position):
            solved = solve_phases(diagram.mixture, _guess(region, position), through_feed(feed[0], feed[2]))
            if solved is None or separation(solved) < _TRIVIAL:
                if not 0 <= lever <= 1:
                    continue
                raise SimulationError(f"the tie line through the feed {feed.round(6).tolist()} could not be solved for")
            if _lies_between(feed, solved):
                return solved
    return None


def _lies_between(feed: FloatArray, logs: FloatArray) -> bool:
    """True where the feed lies between the phases of the tie line through it, and not beyond one of them."""
    first, last = np.exp(logs).T
    j = int(
        np.abs(logs[:, 0] - logs[:, 1]).argmax()
    )  # a trace in one phase tells best: it differs by more than rounding
    return 0 <= float((feed[j] - last[j]) / (first[j] - last[j])) <= 1


def _guess(region: Region, position: float) -> FloatArray:
    index = min(int(position), len(region.logs) - 2)
    guess = region.between(index, position - index)
    return np.maximum(guess, -5000.0)


def _on_edge(diagram: PhaseDiagram, feed: FloatArray) -> FloatArray | None:
    """Coexisting phases of a feed without one of the components."""
    edge = next(name for name, absent in ABSENT.items() if feed[absent] < _ON_EDGE)
    second = EDGES[edge][1]
    for gap in edge_gaps(diagram.mixture, edge):
        if np.exp(gap[second]).min() < feed[second] < np.exp(gap[second]).max():
            return gap
    return None


def _result(diagram: PhaseDiagram, feed: FloatArray, logs: FloatArray) -> Flash:
    logs = logs[:, np.argsort(-logs[2], kind="stable")]
    phases = np.exp(logs)
    amounts = np.linalg.lstsq(np.vstack([phases, np.ones(phases.shape[1])]), np.append(feed, 1.0))[0]
    if amounts.min() < -_ROUNDING:
        raise SimulationError(f"the phases found for the feed {feed.round(6).tolist()} do not add up to it")
    amounts = np.maximum(amounts, 0.0)  # a feed on the binodal itself: rounding only
    if logs.shape[1] == 1:
        residual = 0.0
    else:
        with np.errstate(invalid="ignore"):
            residual = potential_gap(diagram.mixture, logs) if np.isfinite(logs).all() else _edge_gap(diagram, logs)
    unstable = scaled_curvature(diagram.mixture, feed[:, None])[0][0] < 0
    alone: Literal["stable", "metastable"] = "stable" if logs.shape[1] == 1 else "metastable"
    return Flash(feed, phases.T, logs.T, amounts, "unstable" if unstable else alone, residual)


def _edge_gap(diagram: PhaseDiagram, logs: FloatArray) -> float:
    """Difference of potentials of the two components that are present."""
    potentials = site_potentials(diagram.mixture, logs) * diagram.mixture.sizes[:, None]
    present = np.isfinite(logs).all(axis=1)
    return float(np.abs(np.diff(potentials[present], axis=1)).max())


def _refuse_undercut(diagram: PhaseDiagram, feed: FloatArray) -> None:
    """A one-phase answer must lie nowhere above the free energy of the triangle."""
    if feed.min() < _ON_EDGE:
        return
    plane = site_potentials(diagram.mixture, np.log(feed)[:, None])[:, 0]
    share, polymer = (
        np.linspace(0, 1, 101),
        np.concatenate([[0], np.geomspace(1e-6, 0.01, 20), np.linspace(0.02, 1, 99)]),
    )
    phi = composition(share[:, None], polymer[None, :]).reshape(3, -1)
    height = ideal_energy(diagram.mixture, phi) + excess(diagram.mixture, phi)[0] - plane @ phi
    if height.min() < -_MISSED:
        raise SimulationError(
            f"the feed {feed.round(6).tolist()} was found to be one phase, but {phi[:, height.argmin()].round(4).tolist()} "
            "has less free energy: the phase diagram misses a region"
        )
