"""``poroscan match`` and ``poroscan atlas`` on the tiny atlas."""

from __future__ import annotations

import json

import numpy as np
import pytest
from made_particles import particle

from poroscan.atlas.jobs import build_settings, pinned_values
from poroscan.cli.app import main
from poroscan.errors import SettingsError


@pytest.fixture
def field(tmp_path, rng):
    path = tmp_path / "drawn.npy"
    np.save(path, particle("lean_nucleation", rng))
    return path


def test_match_prints_a_table(tiny_folder, field, capsys) -> None:
    assert main(["match", str(field), "--atlas", str(tiny_folder), "--wanted", "undemixed"]) == 0
    out, err = capsys.readouterr()
    assert "drawn.npy 1" in out
    assert "lean_nucleation" in out
    assert "looks like flat-" in out
    assert "not a measurement" in err


def test_match_prints_json(tiny_folder, field, capsys) -> None:
    assert main(["match", str(field), str(field), "--atlas", str(tiny_folder), "--json", "--quiet"]) == 0
    out, err = capsys.readouterr()
    data = json.loads(out)
    assert err == ""
    assert len(data["particles"]) == 2
    assert sum(data["particles"][0]["probabilities"].values()) == pytest.approx(1)
    assert data["batches"][0]["particles"] == 2


def test_match_refuses_what_it_cannot_read(tiny_folder, field, tmp_path, capsys) -> None:
    assert main(["match", str(tmp_path / "none.txt"), "--atlas", str(tiny_folder)]) == 2
    assert "neither a run folder nor the file of a field" in capsys.readouterr().err
    assert main(["match", str(field), "--atlas", str(tiny_folder), "--wanted", "foam"]) == 2
    assert "give one of undemixed" in capsys.readouterr().err
    assert main(["match", str(field), "--atlas", str(tmp_path)]) == 2
    assert "holds no atlas" in capsys.readouterr().err
    bad = tmp_path / "bad.npy"
    bad.write_bytes(b"nothing")
    assert main(["match", str(bad), str(field), "--atlas", str(tiny_folder)]) == 3
    captured = capsys.readouterr()
    assert "bad.npy" in captured.err
    assert "drawn.npy 1" in captured.out


def test_show_writes_a_page_that_stands_alone(tiny_folder, tmp_path, capsys) -> None:
    target = tmp_path / "page.html"
    assert main(["atlas", "show", str(tiny_folder), "--out", str(target)]) == 0
    page = target.read_text()
    assert page.count("<symbol") == 50
    assert "http" not in page.replace("http-equiv", "")
    assert "no demixing (10)" in page


def test_check_prints_accuracy(tiny_folder, capsys) -> None:
    assert main(["atlas", "check", str(tiny_folder), "--foreign", "0", "--quiet"]) == 0
    out = capsys.readouterr().out
    assert "| whole particles, clean fields | 50 | 50 |" in out
    assert "50 runs (10 undemixed" in out


def test_add_writes_a_new_atlas_and_leaves_the_old(tiny_folder, field, tmp_path, capsys) -> None:
    before = (tiny_folder / "atlas.json").read_bytes()
    out = tmp_path / "more"
    assert main(["atlas", "add", str(tiny_folder), str(field), "--label", "lean_nucleation", "--out", str(out)]) == 0
    assert "lean_nucleation       11" in capsys.readouterr().out
    assert (tiny_folder / "atlas.json").read_bytes() == before
    assert main(["match", str(field), "--atlas", str(out)]) == 0
    assert "looks like own-drawn (lean_nucleation)" in capsys.readouterr().out
    assert main(["atlas", "add", str(tiny_folder), str(field), "--label", "delayed", "--out", str(out)]) == 2
    assert "nothing was overwritten" in capsys.readouterr().err


def test_add_refuses_bad_input(tiny_folder, field, tmp_path, capsys) -> None:
    out = ["--out", str(tmp_path / "x")]
    assert main(["atlas", "add", str(tiny_folder), str(field), "--label", "foam", *out]) == 2
    assert "--label is 'foam'" in capsys.readouterr().err
    assert main(["atlas", "add", str(tiny_folder), str(field), *out]) == 2
    assert "--label" in capsys.readouterr().err
    loud = tmp_path / "loud.npy"
    np.save(loud, 300 * np.load(field))
    assert main(["atlas", "add", str(tiny_folder), str(loud), "--label", "delayed", *out]) == 3
    assert "give the polymer fraction" in capsys.readouterr().err
    assert not (tmp_path / "x").exists()
    assert main(["atlas", "grow"]) == 2
    assert "'grow' is no action" in capsys.readouterr().err


def test_pins_and_settings(tmp_path) -> None:
    assert pinned_values(None, ["chi_pn=2.5", "kappa=0.8"]) == {"chi_pn": 2.5, "kappa": 0.8}
    with pytest.raises(SettingsError, match="'x' is no axis"):
        pinned_values(None, ["x=1"])
    with pytest.raises(SettingsError, match="'much' is no number"):
        pinned_values(None, ["chi_pn=much"])
    assert build_settings(cells=448, dimensions=2).radius >= 150
    assert build_settings(cells=144, dimensions=3).radius >= 50
