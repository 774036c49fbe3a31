"""Trends of common practice, over five seeds: what makes demixing instantaneous and what takes it away.

Oracles 5.1–5.4: raising χ_pn widens the gap; raising χ_sn beyond about 1.5 makes drop and bath exchange little. The trends are
properties of the simulated path, never truth labels.
"""

from __future__ import annotations

import itertools
import math

import pytest
from solver_cases import formulation

from poroscan.demix.particle import simulate
from poroscan.demix.phase_diagram import find_phase_diagram

GRID = {"cells": 96, "radius": 34.0, "end_time": 0.5, "record_every": 0.01}


def _onsets(seeds, **chemistry):
    recipe = formulation(**chemistry, **GRID)
    diagram = find_phase_diagram(recipe.mixture)
    readings = [simulate(recipe, seed=seed, diagram=diagram).reading for seed in seeds]
    return [math.inf if math.isnan(r.onset) else r.onset for r in readings]


@pytest.mark.slow
def test_demixing_comes_sooner_with_chi_pn():
    series = [_onsets(range(5), pn=pn, sn=0.5, dope=0.3) for pn in (1.2, 1.7, 2.2, 2.8)]
    monotone = sum(all(a >= b for a, b in itertools.pairwise(onsets)) for onsets in zip(*series, strict=True))
    assert monotone >= 4
    assert min(series[0]) > 0.3
    assert max(series[-1]) < 0.2


@pytest.mark.slow
def test_demixing_is_lost_when_solvent_and_nonsolvent_do_not_mix():
    series = [_onsets(range(5), pn=2.5, sn=sn, dope=0.3) for sn in (0.3, 1.0, 1.5, 2.2)]
    monotone = sum(all(a <= b for a, b in itertools.pairwise(onsets)) for onsets in zip(*series, strict=True))
    assert monotone >= 4
    assert max(series[0]) < 0.2
    assert all(math.isinf(onset) for onset in series[-1])
