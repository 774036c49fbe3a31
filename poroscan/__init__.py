"""poroscan: pore structure of porous polymer particles, from SEM cross-sections to a report.

Rooms
-----
section      Picture, Section, PixelSize: what is handed from room to room
quantities   the catalogue of every reported quantity
errors       what a user can mend
intake       reading pictures and fields, pixel size, banner, image quality
segment      outline and pores
measure      every quantity, with its interval
demix        phase diagram and phase-field simulation of a particle
atlas        library of simulated particles and the match against it
render       SEM-like pictures with known truth
qc           limits, statistics, charts, comparison
report       the report page
batch        from a folder to a run
cli          the commands

Importing the package is cheap: names are loaded when first used.
"""

from __future__ import annotations

import importlib
from typing import Any

__version__ = "0.1.0"

#: Public name -> module that defines it.
_PUBLIC = {
    "Picture": "poroscan.section",
    "PixelSize": "poroscan.section",
    "Section": "poroscan.section",
    "PoroscanError": "poroscan.errors",
    "IntakeSettings": "poroscan.intake",
    "load_picture": "poroscan.intake",
    "list_inputs": "poroscan.intake",
    "read_field": "poroscan.intake",
    "section_of_field": "poroscan.intake",
    "section_of_array": "poroscan.intake",
    "Formulation": "poroscan.demix.formulation",
    "load_formulation": "poroscan.demix.formulation",
    "Mixture": "poroscan.demix.mixture",
    "find_phase_diagram": "poroscan.demix.phase_diagram",
    "SimulationSettings": "poroscan.demix.simulation_settings",
    "simulate": "poroscan.demix.particle",
    "RenderSettings": "poroscan.render.settings",
    "render_section": "poroscan.render.sem",
    "load_atlas": "poroscan.atlas.store",
    "load_packaged": "poroscan.atlas.store",
    "Matcher": "poroscan.atlas.matching",
}

__all__ = ["__version__", *_PUBLIC]


def __getattr__(name: str) -> Any:
    try:
        module = _PUBLIC[name]
    except KeyError:
        raise AttributeError(f"module 'poroscan' has no attribute {name!r}") from None
    return getattr(importlib.import_module(module), name)


def __dir__() -> list[str]:
    return sorted(__all__)
