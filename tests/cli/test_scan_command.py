from __future__ import annotations

import json
from pathlib import Path

import pytest
from drawn_particles import draw_particle, write_png

from poroscan.cli.app import main


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    write_png(tmp_path / "pictures" / "a.png", draw_particle())
    return tmp_path / "pictures"


def _scan(folder: Path, run: Path, *more: str) -> int:
    return main(["scan", str(folder), "--out", str(run), "--workers", "0", *more])


def test_data_on_stdout_talk_on_stderr(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert _scan(folder, tmp_path / "run") == 0
    captured = capsys.readouterr()
    assert captured.out == f"{tmp_path / 'run' / 'report.html'}\n"
    assert captured.err == "1 picture, 1 particle measured\n"
    assert _scan(folder, tmp_path / "run", "--quiet") == 0
    assert capsys.readouterr() == ("", "")
    assert _scan(folder, tmp_path / "run", "--json") == 0
    summary = json.loads(capsys.readouterr().out)
    assert (summary["images"], summary["kept"], summary["exit_code"]) == (1, 1, 0)


def test_report_is_written_again_from_the_run(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert _scan(folder, tmp_path / "run", "--quiet") == 0
    path = tmp_path / "run" / "report.html"
    before = path.read_bytes()
    path.unlink()
    assert main(["report", str(tmp_path / "run")]) == 0
    assert path.read_bytes() == before
    assert capsys.readouterr().out == f"{path}\n"


def test_report_of_an_unfinished_run_is_refused(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert _scan(folder, tmp_path / "run", "--quiet") == 0
    run_file = tmp_path / "run" / "run.json"
    run_file.write_text(run_file.read_text().replace('"finished"', '"unfinished"'))
    assert main(["report", str(tmp_path / "run")]) == 2
    assert "is not finished; give the scan command again" in capsys.readouterr().err


def test_recipe_and_options_reach_the_run(folder: Path, tmp_path: Path) -> None:
    recipe = tmp_path / "r.toml"
    recipe.write_text("seed = 3\n[measure]\nradial_bins = 10\n")
    code = _scan(folder, tmp_path / "run", "--recipe", str(recipe), "--pixel-size", "0.25", "--batch-name", "lot 7")
    assert code == 0
    content = json.loads((tmp_path / "run" / "run.json").read_text())
    assert content["seed"] == 3
    assert content["recipe"]["measure"]["radial_bins"] == 10
    assert content["recipe"]["intake"]["pixel_size_um"] == 0.25
    assert content["inputs"][0]["batch"] == "lot 7"
