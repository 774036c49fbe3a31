"""Thermodynamics of demixing and the phase-field simulation of a particle.

mixture, interaction   Flory–Huggins free energy and its derivatives; parameters that depend on composition
molar, binary          the molar convention of the membrane literature; two components
spinodal               where a mixture is unstable; plait points
equilibrium            Newton's method for coexisting phases
binodal, three_phase   families of tie lines; triangles
global_scan, region,
region_search          the whole triangle: nothing missed, nothing metastable
phase_diagram          the diagram of a mixture
flash, classify,
mixing_line            where a composition lies, into what it parts, what a path crosses
formulation            components, dope and bath from a TOML file
published              interaction parameters of the literature, with their sources
phase_summary,
phase_tables, triangle words, files and the figure
particle, stepper, …   the phase-field simulation (see its own pages)
path, regime           what happened on the way, and the regime read from it

Importing the package is cheap: names are loaded when first used.
"""

from __future__ import annotations

import importlib
from typing import Any

#: Public name -> module that defines it.
_PUBLIC = {
    "ChiFunction": "poroscan.demix.interaction",
    "SharePolynomial": "poroscan.demix.interaction",
    "ShareRational": "poroscan.demix.interaction",
    "Mixture": "poroscan.demix.mixture",
    "mixture_from_molar": "poroscan.demix.molar",
    "PhaseDiagram": "poroscan.demix.phase_diagram",
    "find_phase_diagram": "poroscan.demix.phase_diagram",
    "Formulation": "poroscan.demix.formulation",
    "load_formulation": "poroscan.demix.formulation",
    "Composition": "poroscan.demix.formulation",
    "published_systems": "poroscan.demix.published",
    "Flash": "poroscan.demix.flash",
    "Classification": "poroscan.demix.classify",
    "line_crossings": "poroscan.demix.mixing_line",
}

__all__ = list(_PUBLIC)


def __getattr__(name: str) -> Any:
    try:
        module = _PUBLIC[name]
    except KeyError:
        raise AttributeError(f"module 'poroscan.demix' has no attribute {name!r}") from None
    return getattr(importlib.import_module(module), name)


def __dir__() -> list[str]:
    return sorted(__all__)
