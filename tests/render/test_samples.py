"""The committed sample pictures are those that the command makes."""

from __future__ import annotations

import csv
from collections import Counter
from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from poroscan.render.samples import Sample, draw_sample, main, samples, truth_rows, write_sample

FOLDER = Path(__file__).parents[2] / "sample_images"
BY_NAME = {s.name: s for s in samples()}


def _pixels(path: Path) -> np.ndarray:
    return np.asarray(Image.open(path)) if path.suffix != ".tif" else tifffile.imread(path)


def _truth() -> list[dict[str, str]]:
    with (FOLDER / "truth.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.mark.parametrize("name", ["lot_0412_1.tif", "lot_0426_3.jpg", "resin_filled.tif"])
def test_a_sample_is_remade_to_the_same_pixels(name: str, tmp_path: Path) -> None:
    sample = BY_NAME[name]
    write_sample(tmp_path, sample)
    remade, committed = (_pixels(root / sample.folder / name).astype(int) for root in (tmp_path, FOLDER))
    assert remade.shape == committed.shape
    # Another build of the numerical libraries may round a grey value the other way; nothing else may change.
    assert (remade != committed).mean() < 1e-3
    masks = Path("truth") / sample.folder / f"{Path(name).stem}_pores.png"
    assert (_pixels(tmp_path / masks) != _pixels(FOLDER / masks)).mean() < 1e-4


def test_committed_files_are_those_of_the_list() -> None:
    found = {str(p.relative_to(FOLDER).as_posix()) for f in ("batches", "awkward") for p in (FOLDER / f).rglob("*.*")}
    assert found == {s.key for s in samples()} | {"batches/sidecar.csv"}
    assert sum(p.stat().st_size for p in FOLDER.rglob("*") if p.is_file()) < 12e6


def test_three_lots_of_four_to_six_pictures() -> None:
    lots = Counter(s.folder for s in samples() if s.folder.startswith("batches/"))
    assert len(lots) == 3
    assert all(4 <= n <= 6 for n in lots.values())


def test_truth_table_agrees_with_the_masks() -> None:
    for row in _truth()[::7]:
        folder, stem = FOLDER / "truth" / row["folder"], Path(row["image"]).stem
        inside = tifffile.imread(folder / f"{stem}_particles.tif") == int(row["particle"])
        pores = _pixels(folder / f"{stem}_pores.png") > 0
        assert pores[inside].mean() == pytest.approx(float(row["porosity"]), abs=1e-6)


def test_truth_has_one_row_per_particle() -> None:
    sample = BY_NAME["touching.tif"]
    rows = truth_rows(sample, draw_sample(sample))
    committed = [r for r in _truth() if r["image"] == sample.name]
    assert [r["particle"] for r in rows] == [r["particle"] for r in committed] == ["1", "2", "3", "4"]
    assert [r["porosity"] for r in rows] == [r["porosity"] for r in committed]


def test_lots_differ_as_the_story_says() -> None:
    def mean(lot: str, column: str) -> float:
        return float(np.mean([float(r[column]) for r in _truth() if lot in r["folder"] and r["touches_frame"] == "0"]))

    assert mean("0412", "porosity") > mean("0419", "porosity") > mean("0426", "porosity")
    assert mean("0412", "skin_thickness_um") < mean("0419", "skin_thickness_um") < mean("0426", "skin_thickness_um")


def test_truncated_file_is_truncated() -> None:
    sample = BY_NAME["truncated.tif"]
    assert sample.keep < 1
    with pytest.raises(Exception):  # noqa: B017 - whichever error the reader raises on a cut file
        tifffile.imread(FOLDER / sample.key)


def test_command_writes_every_picture(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    few: tuple[Sample, ...] = (BY_NAME["dense.tif"], BY_NAME["lot_0426_3.jpg"])
    monkeypatch.setattr("poroscan.render.samples.samples", lambda: few)
    assert main([str(tmp_path / "out")]) == 0
    assert (_pixels(tmp_path / "out/awkward/dense.tif") != _pixels(FOLDER / "awkward/dense.tif")).mean() < 1e-3
    assert (tmp_path / "out/batches/sidecar.csv").read_text() == "image,scale_bar_um\nlot_0426/lot_0426_3.jpg,100\n"
