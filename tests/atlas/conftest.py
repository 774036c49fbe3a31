"""A tiny atlas of drawn particles, made once."""

from __future__ import annotations

import numpy as np
import pytest
from made_particles import made_run

from poroscan.atlas.matching import Matcher
from poroscan.atlas.run_file import run_to_bytes
from poroscan.atlas.space import NAMES
from poroscan.atlas.store import Atlas, load_atlas, run_table, write_atlas
from poroscan.atlas.table import view_table
from poroscan.atlas.views import describe_clean
from poroscan.demix.regime import REGIMES

PER_REGIME = 10


@pytest.fixture(scope="session")
def tiny_folder(tmp_path_factory: pytest.TempPathFactory):
    """Folder of an atlas with ten drawn particles of each regime, clean views only."""
    rng = np.random.default_rng(5)
    runs = [made_run(f"flat-{r}-{i}", r, rng) for r in REGIMES for i in range(PER_REGIME)]
    rows = []
    for index, run in enumerate(runs):
        seen = describe_clean(run.field)
        rows.append(
            (index, {"kind": "clean", "look": "", "diameter_px": seen.diameter_px, "cut": 0.0, "values": seen.values})
        )
    folder = tmp_path_factory.mktemp("atlas") / "tiny"
    fields = {"flat": [(run.name, run_to_bytes(run)) for run in runs]}
    write_atlas(
        folder, run_table([("flat", r) for r in runs], NAMES), view_table(rows), fields=fields, about={"seed": 5}
    )
    return folder


@pytest.fixture(scope="session")
def tiny_atlas(tiny_folder) -> Atlas:
    return load_atlas(tiny_folder)


@pytest.fixture(scope="session")
def tiny_matcher(tiny_atlas: Atlas) -> Matcher:
    return Matcher(tiny_atlas)
