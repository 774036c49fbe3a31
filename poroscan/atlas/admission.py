"""Which runs may teach a match.

A simulated drop is small. Structure takes some hundred units of time to grow whatever the size of the drop, so that at a radius of 84
cells a weakly driven run can demix later than T_late = 0.1 R²/D although nothing held it back: no skin has formed, and in a larger
drop of the same formulation the same demixing counts as instantaneous (onsets of growth fall as 1/R², those behind a skin
stay; docs/regimes.md). Such runs are ``slow``. Two more kinds show no structure that anybody could cut: drops so ``dilute`` that there
is no material, and ``unfinished`` ones, undemixed by the rule but caught at the moment when pores appear. All are kept in the
build folder and left out of the atlas.
"""

from __future__ import annotations

import numpy as np

from poroscan.atlas.run_file import AtlasRun
from poroscan.intake.field_sections import midway

#: Polymer fraction that the densest shell must have when a delayed run demixes: mostly polymer is a dense skin.
DENSE_SKIN = 0.5
SLOW = "slow"
#: Mean polymer fraction of what counts as material, below which there is none.
_LEAST_MATERIAL = 0.25
#: Porosity of an undemixed particle's own field above which pores have begun to appear.
_BEGUN = 0.02


def outcome_of(run: AtlasRun) -> str:
    """The run's regime, or ``slow`` for a delayed one without a dense skin; a user's own label stays."""
    if run.regime != "delayed" or run.source != "simulation" or not len(run.path):
        return run.regime
    column = run.path_columns.index
    late = run.path[:, column("demixed")] > 0
    first = int(np.argmax(late)) if late.any() else len(run.path) - 1
    return run.regime if float(run.path[first, column("skin_polymer")]) >= DENSE_SKIN else SLOW


def teaches(run: AtlasRun, *, porosity: float) -> bool:
    """Whether a run belongs into an atlas.

    Parameters
    ----------
    run
        The run; a user's own always does.
    porosity
        Porosity of its clean field.
    """
    if run.source != "simulation":
        return True
    material = run.field[run.field > midway(run.field)]
    unfinished = run.regime == "undemixed" and porosity > _BEGUN
    return outcome_of(run) != SLOW and float(material.mean()) >= _LEAST_MATERIAL and not unfinished
