from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from poroscan.cli.app import main


def _run(folder: Path, batches: dict[str, float], rng: np.random.Generator) -> Path:
    folder.mkdir()
    parts = []
    for name, mean in batches.items():
        images = np.repeat([f"{i}.tif" for i in range(5)], 4)
        parts.append(
            pd.DataFrame(
                {"batch": name, "image": images, "particle": "1", "view": "whole", "touches_frame": False,
                 "frame_weight": 1.0, "porosity": rng.normal(mean, 0.01, 20), "pore_d50_um": rng.normal(3, 0.1, 20)}
            )
        )  # fmt: skip
    pd.concat(parts).to_parquet(folder / "particles.parquet")
    return folder


QUANTITIES = ["--quantity", "porosity", "--quantity", "pore_d50_um"]


def test_batches_of_two_runs(tmp_path: Path, rng: np.random.Generator, capsys: pytest.CaptureFixture[str]) -> None:
    a, b = _run(tmp_path / "june", {"B1": 0.5}, rng), _run(tmp_path / "july", {"B1": 0.6, "=B2": 0.5}, rng)
    assert (
        main(["compare", str(a), str(b), *QUANTITIES, "--margin", "pore_d50_um=0.5", "--csv", str(tmp_path / "t.csv")])
        == 0
    )
    out = capsys.readouterr().out
    assert "Reference: june/B1" in out
    assert "same within the margin" in out
    assert "differs" in out
    assert len(pd.read_csv(tmp_path / "t.csv")) == 4


def test_json_and_reference(tmp_path: Path, rng: np.random.Generator, capsys: pytest.CaptureFixture[str]) -> None:
    a = _run(tmp_path / "a", {"B1": 0.5, "B2": 0.6, "B3": 0.7}, rng)
    assert main(["compare", str(a), *QUANTITIES, "--reference", "B2", "--batch", "B3", "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert data["batches"] == ["B2", "B3"]
    first = data["pairs"][0]
    assert first["difference"] == pytest.approx(0.1, abs=0.02)
    assert first["equivalent"] is None


@pytest.mark.parametrize(
    ("more", "message"),
    [
        (["--reference", "B9"], "no batch 'B9' in these runs; there are: B1, B2"),
        (["--quantity", "porousity"], "nearest: porosity"),
        (["--margin", "porosity=much"], "positive number in the unit of the column"),
        (["--batch", "B1"], "at least 2 batches"),
    ],
)
def test_wrong_use_is_one_line(
    tmp_path: Path, rng: np.random.Generator, capsys: pytest.CaptureFixture[str], more: list[str], message: str
) -> None:
    a = _run(tmp_path / "a", {"B1": 0.5, "B2": 0.6}, rng)
    assert main(["compare", str(a), *more]) == 2
    error = capsys.readouterr().err
    assert message in error
    assert error.count("\n") == 1


def test_not_a_run(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["compare", str(tmp_path)]) == 2
    assert "not a finished run" in capsys.readouterr().err


def test_a_run_given_twice(tmp_path: Path, rng: np.random.Generator, capsys: pytest.CaptureFixture[str]) -> None:
    a = _run(tmp_path / "a", {"B1": 0.5}, rng)
    assert main(["compare", str(a), str(tmp_path / "." / "a")]) == 2
    assert "is given twice; name each run once" in capsys.readouterr().err
