from __future__ import annotations

import json
import shutil
from pathlib import Path

import imagecodecs
import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
import tifffile
from drawn_particles import draw_particle, write_png

from poroscan.batch import image
from poroscan.batch.recipe import make_recipe
from poroscan.batch.scan import scan_folder
from poroscan.errors import SettingsError, StoreError
from poroscan.report.regime import REGIME_WORDS

TABLES = (
    "particles.csv", "particles.parquet", "pores.parquet", "curves.parquet", "batches.csv", "limits.csv", "dictionary.csv",
    "summary.json", "report.html", "report.pdf", "run.json",
)  # fmt: skip
SETTINGS = {"intake": {"pixel_size_um": 0.5}, "measure": {"bootstrap_replicates": 20}}  # quick
RECIPE = make_recipe(SETTINGS)


def tables(run: Path) -> dict[str, bytes]:
    return {name: (run / name).read_bytes() for name in TABLES}


def test_a_folder_becomes_a_run(folder: Path, tmp_path: Path) -> None:
    outcome = scan_folder(folder, tmp_path / "run", RECIPE)
    assert (outcome.exit_code, outcome.images, outcome.particles, outcome.problems) == (0, 3, 3, ())
    table = pd.read_csv(tmp_path / "run" / "particles.csv")
    assert list(table["batch"]) == ["one", "one", "two"]
    # the drawn disc has radius 48 px, and half a micrometre per pixel
    assert table["equivalent_diameter_um"].to_numpy() == pytest.approx(48.0, rel=0.03)
    assert set(table["regime"]) <= set(REGIME_WORDS)
    assert not table["flags"].str.contains("no_atlas").any()
    batches = pd.read_csv(tmp_path / "run" / "batches.csv")
    assert batches["porosity"][0] == pytest.approx(table["porosity"][:2].mean())
    pores = pq.read_table(tmp_path / "run" / "pores.parquet").to_pandas()
    assert set(pores["image"]) <= {"a.png", "b.png", "c.png"}
    report = (tmp_path / "run" / "report.html").read_text(encoding="utf-8")
    assert "a.png" in report
    assert not list((tmp_path / "run").rglob(".new*"))


def test_csv_and_parquet_agree(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    text = pd.read_csv(tmp_path / "run" / "particles.csv", dtype={"particle": str})
    exact = pq.read_table(tmp_path / "run" / "particles.parquet").to_pandas()
    assert list(text.columns) == list(exact.columns)
    numbers = exact.select_dtypes("number").columns
    np.testing.assert_allclose(text[numbers].to_numpy(float), exact[numbers].to_numpy(float), rtol=1e-9)


def test_pictures_of_a_run(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    place = tmp_path / "run" / "images" / "one__a.png"
    assert imagecodecs.png_decode((place / "overlay.png").read_bytes()).shape[:2] == (120, 130)
    with tifffile.TiffFile(place / "labels.ome.tif") as file:
        planes = file.asarray()
        assert 'PhysicalSizeX="0.5"' in (file.ome_metadata or "")
    assert planes.shape == (2, 120, 130)
    row = pd.read_csv(tmp_path / "run" / "particles.csv").iloc[0]
    assert (planes[0] == 1).sum() == row["area_px2"]
    assert (planes[1] == 1).sum() / (planes[0] == 1).sum() == pytest.approx(row["porosity"])


def test_second_scan_keeps_everything_and_ends_in_the_same_bytes(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    before = tables(tmp_path / "run")
    outcome = scan_folder(folder, tmp_path / "run", RECIPE)
    assert outcome.kept == 3
    assert tables(tmp_path / "run") == before


def test_neither_place_nor_processes_change_a_byte(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    elsewhere = tmp_path / "else where"
    shutil.copytree(folder, elsewhere / "pictures")
    scan_folder(elsewhere / "pictures", elsewhere / "run", RECIPE, workers=2)
    assert tables(elsewhere / "run") == tables(tmp_path / "run")
    assert (elsewhere / "run" / "report.html").read_bytes() == (tmp_path / "run" / "report.html").read_bytes()


def test_run_json_holds_one_line_per_input(folder: Path, tmp_path: Path) -> None:
    (folder / "one" / "bad.tif").write_bytes(b"II*\x00 and nothing more")
    outcome = scan_folder(folder, tmp_path / "run", RECIPE)
    assert outcome.exit_code == 3
    text = (tmp_path / "run" / "run.json").read_text(encoding="utf-8")
    content = json.loads(text)
    assert [e["outcome"] for e in content["inputs"]] == ["measured", "measured", "unreadable", "measured"]
    assert all(len(e["sha256"]) == 64 for e in content["inputs"])
    assert sum('"sha256":' in line for line in text.splitlines()) == 4
    assert content["recipe"]["intake"]["pixel_size_um"] == 0.5
    assert str(tmp_path) not in text
    assert len(outcome.problems) == 1
    assert outcome.problems[0].startswith("one/bad.tif: ")


def test_another_recipe_is_refused_until_fresh_is_asked_for(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    before = tables(tmp_path / "run")
    other = make_recipe({"seed": 1} | SETTINGS)
    with pytest.raises(SettingsError, match=r"begun with another recipe \(seed: 0 -> 1\).*--fresh"):
        scan_folder(folder, tmp_path / "run", other)
    assert tables(tmp_path / "run") == before
    assert scan_folder(folder, tmp_path / "run", other, fresh=True).kept == 0
    assert json.loads((tmp_path / "run" / "run.json").read_text())["seed"] == 1


def test_another_folder_is_refused(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    write_png(tmp_path / "other" / "x.png", draw_particle(seed=9))
    with pytest.raises(SettingsError, match="holds results of 3 pictures that this folder does not have"):
        scan_folder(tmp_path / "other", tmp_path / "run", RECIPE)


def test_another_version_is_refused(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    path = tmp_path / "run" / "run.json"
    path.write_text(path.read_text().replace('"version": "', '"version": "9.', 1))
    with pytest.raises(StoreError, match=r"written by version 9\..*; give another --out, or --fresh"):
        scan_folder(folder, tmp_path / "run", RECIPE)


def test_run_folder_among_the_pictures_is_not_measured(folder: Path) -> None:
    scan_folder(folder, folder / "run", RECIPE)
    assert scan_folder(folder, folder / "run", RECIPE).images == 3
    with pytest.raises(SettingsError, match="the run folder is the folder of pictures"):
        scan_folder(folder, folder, RECIPE)


def test_changed_picture_alone_is_measured_again(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    write_png(folder / "one" / "a.png", draw_particle(seed=7))
    assert scan_folder(folder, tmp_path / "run", RECIPE).kept == 2


def test_picture_gone_bad_does_not_take_its_results_with_it(folder: Path, tmp_path: Path) -> None:
    scan_folder(folder, tmp_path / "run", RECIPE)
    (folder / "one" / "a.png").write_bytes(b"")
    assert scan_folder(folder, tmp_path / "run", RECIPE).exit_code == 3
    assert (tmp_path / "run" / "earlier" / "one__a.png" / "labels.ome.tif").exists()


def test_picture_without_a_particle_has_a_row_and_a_line(folder: Path, tmp_path: Path) -> None:
    rng = np.random.default_rng(1)
    write_png(folder / "one" / "empty.png", rng.normal(60, 3, (90, 100)).astype(np.uint8))
    recipe = make_recipe({"segment": {"view": "whole"}})
    outcome = scan_folder(folder, tmp_path / "run", recipe)
    table = pd.read_csv(tmp_path / "run" / "particles.csv")
    row = table[table["image"] == "empty.png"].iloc[0]
    assert "no_particle" in row["flags"].split()
    assert np.isnan(row["porosity"])
    assert outcome.counts == {"measured": 3, "no_particle": 1}
    assert any(line.startswith("one/empty.png: no particle") for line in outcome.problems)


def test_defect_costs_one_picture(folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    real = image.measure_section
    seen: list[int] = []

    def broken(*args: object, **kwargs: object) -> object:
        seen.append(1)
        if len(seen) == 2:
            raise ZeroDivisionError("no such block")
        return real(*args, **kwargs)

    monkeypatch.setattr(image, "measure_section", broken)
    outcome = scan_folder(folder, tmp_path / "run", RECIPE)
    assert outcome.counts == {"failed": 1, "measured": 2}
    assert "one/b.png: ZeroDivisionError: no such block; this is a defect" in outcome.problems[0]
    table = pd.read_csv(tmp_path / "run" / "particles.csv")
    assert table.loc[table["image"] == "b.png", "flags"].item() == "failed"
    assert "no such block" in (tmp_path / "run" / "images" / "one__b.png" / "traceback.txt").read_text()
    assert "Traceback" not in (tmp_path / "run" / "run.json").read_text()
    monkeypatch.undo()
    assert scan_folder(folder, tmp_path / "run", RECIPE).kept == 2  # what failed is tried again


def test_masks_beside_the_picture_replace_what_would_be_found(folder: Path, tmp_path: Path) -> None:
    mask = np.zeros((120, 130), dtype=np.uint8)
    mask[55:65, 60:70] = 255
    write_png(folder / "two" / "c_pores.png", mask)
    scan_folder(folder, tmp_path / "run", RECIPE)
    row = pd.read_csv(tmp_path / "run" / "particles.csv").iloc[2]
    assert row["porosity"] * row["area_px2"] == pytest.approx(100)
    write_png(folder / "two" / "c_pores.png", mask[:50])
    outcome = scan_folder(folder, tmp_path / "run", RECIPE)
    assert outcome.kept == 2
    assert "two/c.png: c_pores.png" in outcome.problems[0]
    assert "130 × 50 pixels, its picture 130 × 120" in outcome.problems[0]


def test_seed_follows_content_and_recipe_only() -> None:
    assert image.image_seed(0, "ab") == image.image_seed(0, "ab")
    assert len({image.image_seed(s, t) for s in (0, 1) for t in ("ab", "cd", None)}) == 6


def test_batch_name_for_pictures_directly_in_the_folder(tmp_path: Path) -> None:
    write_png(tmp_path / "p" / "a.png", draw_particle())
    scan_folder(tmp_path / "p", tmp_path / "run", make_recipe({"batch_name": "=lot 7"}))
    assert "\n'=lot 7,a.png,1," in (tmp_path / "run" / "particles.csv").read_text()
    assert pq.read_table(tmp_path / "run" / "particles.parquet")["batch"].to_pylist() == ["=lot 7"]
