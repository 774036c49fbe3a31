"""``poroscan simulate``: what it writes, and what it refuses."""

from __future__ import annotations

import csv
import json

import numpy as np
import pytest

from poroscan.cli.app import main

RECIPE = """
name = "sponge"
[polymer]
name = "polymer"
chain_length = 20
[solvent]
name = "solvent"
chain_length = 1
[nonsolvent]
name = "water"
chain_length = 1
[interactions]
convention = "per_site"
chi_pn = 2.5
chi_ps = 0.5
chi_sn = 0.3
[dope]
polymer = 0.3
solvent = 0.7
[bath]
nonsolvent = 1.0
[simulation]
cells = 72
radius = 26.0
end_time = 0.25
record_every = 0.01
"""


@pytest.fixture
def recipe(tmp_path):
    path = tmp_path / "recipe.toml"
    path.write_text(RECIPE)
    return path


def test_writes_everything_that_repeats_it(recipe, tmp_path, capsys):
    out = tmp_path / "run"
    assert main(["simulate", str(recipe), "--out", str(out), "--seed", "3", "--cell-um", "0.5", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert {p.name for p in out.iterdir()} == {
        "fields.npz",
        "path.csv",
        "simulation.json",
        "composition.png",
        "particle.csv",
    }
    with np.load(out / "fields.npz", allow_pickle=False) as data:
        record = json.loads(str(data["record"]))
        assert np.isfinite(data["polymer"]).all()
        assert list(data["snapshot_times"]) == [0.0, 0.02, 0.05, 0.1, 0.2]
        assert data["snapshot_0_polymer"].shape == (72, 72)
    assert record == told == json.loads((out / "simulation.json").read_text())
    assert record["seed"] == 3
    assert record["formulation"]["mixture"]["chi_pn"] == 2.5
    rows = list(csv.DictReader((out / "path.csv").read_text().splitlines()))
    assert float(rows[-1]["exchange_time"]) == pytest.approx(0.25, abs=0.01)
    (row,) = csv.DictReader((out / "particle.csv").read_text().splitlines())
    assert 0 < float(row["porosity"]) < 1
    assert float(row["equivalent_diameter_um"]) == pytest.approx(0.5 * float(row["equivalent_diameter_px"]))
    from matplotlib.image import imread

    assert imread(out / "composition.png").shape[1] > 1000


def test_refuses_with_one_line(recipe, tmp_path, capsys):
    thin = tmp_path / "thin.toml"
    thin.write_text(RECIPE + "kappa_polymer = 0.05\nkappa_nonsolvent = 0.05\n")
    assert main(["simulate", str(thin), "--out", str(tmp_path / "x")]) == 2
    assert "too thin for the grid" in capsys.readouterr().err
    big = tmp_path / "big.toml"
    big.write_text(RECIPE.replace("radius = 26.0", "radius = 60.0"))
    assert main(["simulate", str(big), "--out", str(tmp_path / "x")]) == 2
    assert "does not fit into a box" in capsys.readouterr().err
    assert not (tmp_path / "x" / "fields.npz").exists()
