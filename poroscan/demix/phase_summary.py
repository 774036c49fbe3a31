"""What a phase diagram says about a formulation: a summary as plain values, and the same in words."""

from __future__ import annotations

from typing import Any

import numpy as np

from poroscan.demix.classify import STATE_WORDS, classify
from poroscan.demix.equilibrium import potential_gap
from poroscan.demix.formulation import Composition, Formulation
from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixing_line import Crossing, line_crossings
from poroscan.demix.mixture import params_in_words
from poroscan.demix.phase_diagram import PhaseDiagram
from poroscan.demix.region import Region

_LN10 = float(np.log(10.0))
_KEYS = ("nonsolvent", "solvent", "polymer")


def summarise(diagram: PhaseDiagram, formulation: Formulation, *, tie_lines: int = 9) -> dict[str, Any]:
    """Summary of a phase diagram and of the place of dope and bath in it, as plain values.

    Parameters
    ----------
    diagram
        Phase diagram of the formulation's mixture.
    formulation
        The formulation.
    tie_lines
        Number of tie lines listed per two-phase region.

    Raises
    ------
    ValueError
        Fewer than two tie lines asked for.
    """
    if tie_lines < 2:
        raise ValueError(f"tie_lines must be at least 2, got {tie_lines}")
    dope, bath = as_array(formulation.dope), as_array(formulation.bath)
    exchanged = np.array([dope[0] + dope[1], 0.0, dope[2]])
    return {
        "formulation": {k: v for k, v in formulation.describe().items() if k != "simulation"}
        | {"mixture": params_in_words(formulation.mixture)},
        "binodal_area": round(diagram.binodal_area, 5),
        "spinodal_area": round(diagram.spinodal_area, 5),
        "plait_points": [{**_named(plait.phi), "stable": plait.stable} for plait in diagram.plaits],
        "two_phase_regions": [_region(diagram, region, tie_lines) for region in diagram.regions],
        "three_phase_triangles": [
            {"phases": [_named(phase) for phase in triangle.phases], "largest_potential_gap": triangle.residual}
            for triangle in diagram.triangles
        ],
        "dope": _place(diagram, dope),
        "bath": _place(diagram, bath),
        "mixing_line": [_crossing(c) for c in line_crossings(diagram, dope, bath)],
        "exchange_line": [_crossing(c) for c in line_crossings(diagram, dope, exchanged)],
        "notes": notes(diagram, formulation),
    }


def as_array(composition: Composition) -> FloatArray:
    """Fractions in the order n, s, p, adding up to 1 exactly."""
    values = np.array([composition.nonsolvent, composition.solvent, composition.polymer])
    return values / values.sum()


def notes(diagram: PhaseDiagram, formulation: Formulation) -> list[str]:
    """What a reader must know about this diagram, in sentences."""
    said = []
    if not diagram.regions:
        said.append("No gap: the three components mix in every proportion, so nothing demixes.")
    elif not len(diagram.stable_plaits):
        said.append(
            "No plait point: the two-phase region runs from edge to edge, so no path leads from the polymer-rich to the "
            "polymer-lean side without crossing it."
        )
    if diagram.triangles:
        said.append(
            f"{len(diagram.triangles)} three-phase triangle(s): a composition inside parts into three phases, and a pair of "
            "phases there is not the equilibrium state."
        )
    if any("sn" in end for region in diagram.regions for end in region.ends):
        said.append(
            "Solvent and non-solvent do not mix in every proportion: drop and bath exchange little, and demixing may be late "
            "or absent. Raising chi_sn further widens the zone in which demixing starts by nucleation; it need not shrink the "
            "unstable area."
        )
    if formulation.bath.polymer == 0 and formulation.bath.solvent == 0:
        said.append("The bath is pure non-solvent: it lies on a corner of the triangle.")
    return said


def _named(phi: FloatArray) -> dict[str, float]:
    return {key: float(value) for key, value in zip(_KEYS, phi, strict=True)}


def _region(diagram: PhaseDiagram, region: Region, count: int) -> dict[str, Any]:
    lines = [_tie_line(diagram, region.logs[k]) for k in chosen_tie_lines(region, count)]
    return {"from": region.ends[0], "to": region.ends[1], "area": round(region.area, 5), "tie_lines": lines}


def _tie_line(diagram: PhaseDiagram, logs: FloatArray) -> dict[str, Any]:
    rich, lean = np.exp(logs).T
    on_edge = not np.isfinite(logs).all()
    return {
        "rich": _named(rich),
        "lean": _named(lean),
        "log10_lean_polymer": None if np.isinf(logs[2, 1]) else float(logs[2, 1]) / _LN10,
        "largest_potential_gap": None if on_edge else potential_gap(diagram.mixture, logs),
    }


def chosen_tie_lines(region: Region, count: int) -> list[int]:
    """Indices of tie lines that are evenly spread along the region."""
    middles = np.exp(region.logs).mean(axis=2)
    length = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(middles, axis=0), axis=1))])
    wanted = np.linspace(0, length[-1], count)
    return sorted({int(np.argmin(np.abs(length - w))) for w in wanted})


def _place(diagram: PhaseDiagram, phi: FloatArray) -> dict[str, Any]:
    found = classify(diagram, phi_n=phi[0], phi_p=phi[2])
    return {**_named(phi), "state": STATE_WORDS[int(found.state)]}


def _crossing(crossing: Crossing) -> dict[str, Any]:
    return {
        "along": crossing.along,
        **_named(crossing.phi),
        "boundary": crossing.boundary,
        "entering": crossing.entering,
        "side": "polymer-rich" if crossing.side > 0 else "polymer-lean",
    }


def in_words(summary: dict[str, Any]) -> str:
    """The summary as a text table."""
    lines = [summary["formulation"]["name"], ""]
    mixture = summary["formulation"]["mixture"]
    lines.append(
        "Per site: " + ", ".join(f"{k} = {v:g}" if isinstance(v, float) else f"{k} = {v}" for k, v in mixture.items())
    )
    lines.append(
        f"Share of the composition triangle: two or three phases {summary['binodal_area']:.4f}, "
        f"unstable (inside the spinodal) {summary['spinodal_area']:.4f}"
    )
    for plait in summary["plait_points"]:
        kind = "Plait point" if plait["stable"] else "Plait point hidden in a larger gap"
        lines.append(f"{kind}: {_fractions(plait)}")
    for number, region in enumerate(summary["two_phase_regions"], start=1):
        lines += ["", *_region_lines(number, region)]
    for triangle in summary["three_phase_triangles"]:
        lines += ["", "Three-phase triangle"]
        lines += [f"  {_fractions(phase)}" for phase in triangle["phases"]]
    if any(isinstance(v, str) for v in mixture.values()):
        lines.insert(3, "u is the solvent's share of the liquid, solvent / (solvent + non-solvent)")
    lines += ["", f"Dope: {_fractions(summary['dope'])}: {summary['dope']['state']}"]
    lines.append(f"Bath: {_fractions(summary['bath'])}: {summary['bath']['state']}")
    lines += ["", "Mixing line (dope to bath)", *_crossing_lines(summary["mixing_line"], "of bath")]
    exchange = _crossing_lines(summary["exchange_line"], "of the solvent replaced")
    lines += ["", "Exchange line (non-solvent replaces solvent, polymer fraction kept)", *exchange]
    if summary["notes"]:
        lines += ["", *summary["notes"]]
    return "\n".join(lines)


def _fractions(named: dict[str, Any]) -> str:
    return f"polymer {named['polymer']:.5f}, solvent {named['solvent']:.5f}, non-solvent {named['nonsolvent']:.5f}"


def _region_lines(number: int, region: dict[str, Any]) -> list[str]:
    head = f"Two-phase region {number} (from {region['from']} to {region['to']}), volume fractions"
    columns = "  rich: polymer   solvent  non-solv.   lean: polymer   solvent  non-solv.   log10 polymer"
    rows = []
    for line in region["tie_lines"]:
        rich, lean, log = line["rich"], line["lean"], line["log10_lean_polymer"]
        rows.append(
            f"  {rich['polymer']:13.6f} {rich['solvent']:9.6f} {rich['nonsolvent']:10.6f}"
            f"   {lean['polymer']:13.6g} {lean['solvent']:9.6f} {lean['nonsolvent']:10.6f}"
            f"   {'none' if log is None else f'{log:.4f}':>13}"
        )
    return [head, columns, *rows]


def _crossing_lines(crossings: list[dict[str, Any]], measure: str) -> list[str]:
    if not crossings:
        return ["  crosses neither binodal nor spinodal"]
    return [
        f"  {'enters' if c['entering'] else 'leaves'} the {c['boundary']} at {100 * c['along']:.2f} % {measure}, on the "
        f"{c['side']} side: {_fractions(c)}"
        for c in crossings
    ]
