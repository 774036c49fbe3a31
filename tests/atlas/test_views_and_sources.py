"""From fields to descriptors: outlines, rendered views, run folders, files of fields."""

from __future__ import annotations

import json
import math

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from made_particles import SIDE, disc, particle

from poroscan.atlas.describe import CUTS, ViewPlan, cuts_of, describe_folder, describe_run, view_rows
from poroscan.atlas.foreign import TEXTURES, foreign_views
from poroscan.atlas.run_file import AtlasRun, save_run
from poroscan.atlas.sources import is_field, is_run, particle_of_field, particles_of_run
from poroscan.atlas.views import clean_section, describe_clean, masks, picture_of
from poroscan.batch.tables import curve_table
from poroscan.errors import InputError, StoreError
from poroscan.measure import measure_section
from poroscan.measure.descriptors import descriptors
from poroscan.section import PixelSize


def test_masks_of_a_disc_with_round_pores() -> None:
    rows, columns = np.indices((SIDE, SIDE))
    field = np.where(disc(40), 0.7, 0.02)
    for r, c in ((45, 45), (60, 70), (70, 45)):
        field[np.hypot(rows - r, columns - c) < 6] = 0.05
    pores, whole = masks(field)
    assert np.count_nonzero(whole) == pytest.approx(math.pi * 40**2, rel=0.03)
    assert np.count_nonzero(pores) == pytest.approx(3 * math.pi * 36, rel=0.12)
    finer, finer_whole = masks(field, scale=2.0)
    assert np.count_nonzero(finer_whole) == pytest.approx(4 * math.pi * 40**2, rel=0.03)
    assert np.count_nonzero(finer) == pytest.approx(12 * math.pi * 36, rel=0.12)


def test_beads_keep_their_outline(rng) -> None:
    """Separate beads are one particle: the outline holds nearly all polymer."""
    rows, columns = np.indices((SIDE, SIDE))
    field = np.full((SIDE, SIDE), 0.02)
    for r in range(12, SIDE - 8, 11):
        for c in range(12, SIDE - 8, 11):
            if np.hypot(r - 56, c - 56) < 44:
                field[np.hypot(rows - r, columns - c) < 3] = 0.8
    pores, whole = masks(field)
    polymer = field > 0.4
    assert np.count_nonzero(whole & polymer) > 0.95 * np.count_nonzero(polymer)
    assert np.count_nonzero(pores) > 0.5 * np.count_nonzero(whole)


def test_volumes_are_cut_first() -> None:
    with pytest.raises(ValueError, match="must be two-dimensional"):
        masks(np.zeros((4, 4, 4)))
    rows, columns, planes = np.indices((40, 40, 40)) - 19.5
    ball = (np.sqrt(rows**2 + columns**2 + planes**2) < 18).astype(np.float32)
    cuts = dict(cuts_of(ball))
    assert tuple(cuts) == CUTS
    for cut, section in cuts.items():
        assert np.count_nonzero(section) == pytest.approx(math.pi * (18**2 - (cut * 20) ** 2), rel=0.08)


def test_a_rendered_view_shows_the_particle_and_its_porosity(rng) -> None:
    field = particle("lean_nucleation", rng)
    truth = clean_section(field)
    share = np.count_nonzero(truth.pores) / np.count_nonzero(truth.particle)
    run = AtlasRun(
        "a",
        {},
        "lean_nucleation",
        {},
        field.astype(np.float32),
        (),
        np.zeros((0, 0)),
        (),
        np.zeros((0, 0)),
        {},
        0,
        "0",
        "user",
    )
    rows = list(describe_run(run, ViewPlan(wholes=2, interiors=1)))
    assert rows == list(describe_run(run, ViewPlan(wholes=2, interiors=1)))
    assert {r["kind"] for r in rows} <= {"clean", "whole", "interior"}
    seen = [r["values"]["texture_porosity"] for r in rows if r["kind"] == "whole"]
    assert seen
    assert np.mean(seen) == pytest.approx(share, abs=0.05)
    assert rows[0]["values"]["texture_porosity"] == pytest.approx(share, abs=1e-6)


def test_an_interior_picture_lies_inside(rng) -> None:
    field = np.where(disc(46), 0.8, 0.02)
    picture, look = picture_of(field, kind="interior", diameter_px=220, rng=rng)
    assert min(picture.grey.shape) > 60
    assert look in picture.name
    whole, _ = picture_of(field, kind="whole", diameter_px=220, rng=rng)
    assert min(whole.grey.shape) > 220


def test_described_folders_go_on_where_they_stopped(tmp_path, rng) -> None:
    (tmp_path / "runs").mkdir()
    for name in ("r0", "r1"):
        run = AtlasRun(
            name,
            {},
            "delayed",
            {},
            particle("delayed", rng).astype(np.float32),
            (),
            np.zeros((0, 0)),
            (),
            np.zeros((0, 0)),
            {},
            0,
            "0",
            "user",
        )
        save_run(tmp_path / "runs" / f"{name}.npz", run)
    plan, seen = ViewPlan(wholes=0, interiors=0), []
    assert describe_folder(tmp_path, plan, progress=seen.append) == 2
    assert seen == ["r0", "r1"]
    assert describe_folder(tmp_path, plan) == 0
    assert view_rows(tmp_path, "r1")[0]["kind"] == "clean"
    assert view_rows(tmp_path, "other") == []
    with pytest.raises(ValueError, match="wholes must be at least 0"):
        ViewPlan(wholes=-1)


def test_a_run_folder_gives_the_descriptors_that_were_measured(tmp_path, rng) -> None:
    """Through micrometres and back: the tables of a run hold what a match needs."""
    section = clean_section(particle("lean_nucleation", rng))
    measured = measure_section(section, rng=0)
    size = PixelSize(0.37, "option")
    row = {"batch": "b", "image": "i", "particle": "1", "view": "whole", "pixel_size_um": size.um}
    pq.write_table(pa.Table.from_pylist([{**row, **measured.record.row(size)}]), tmp_path / "particles.parquet")
    pq.write_table(curve_table(measured.curves, keys=("b", "i", "1"), pixel_size=size), tmp_path / "curves.parquet")
    (tmp_path / "run.json").write_text(json.dumps({}))
    assert is_run(tmp_path)
    (found,) = particles_of_run(tmp_path)
    wanted = descriptors(measured.record, measured.curves)
    assert found.view == "whole"
    for name, value in wanted.items():
        assert found.values[name] == pytest.approx(value, rel=1e-6, nan_ok=True), name


def test_a_run_without_a_column_or_a_table_is_refused(tmp_path) -> None:
    (tmp_path / "run.json").write_text("{}")
    with pytest.raises(StoreError, match=r"cannot be read.*scan the folder again"):
        list(particles_of_run(tmp_path))
    pq.write_table(pa.table({"batch": ["b"], "image": ["i"], "particle": ["1"]}), tmp_path / "particles.parquet")
    curves = {n: pa.array([], pa.string()) for n in ("batch", "image", "particle", "curve")}
    pq.write_table(pa.table(curves | {n: pa.array([], pa.float64()) for n in "xy"}), tmp_path / "curves.parquet")
    with pytest.raises(StoreError, match=r"the column '.*' is missing"):
        list(particles_of_run(tmp_path))


def test_files_of_fields(tmp_path, rng) -> None:
    field = particle("spinodal", rng)
    np.save(tmp_path / "a.npy", field)
    assert is_field(tmp_path / "a.npy")
    assert not is_field(tmp_path / "a.txt")
    found = particle_of_field(tmp_path / "a.npy")
    assert found.view == "whole"
    assert found.values == pytest.approx(dict(describe_clean(field).values), nan_ok=True)
    np.save(tmp_path / "flat.npy", np.zeros((20, 20)))
    with pytest.raises(InputError, match=r"flat\.npy"):
        particle_of_field(tmp_path / "flat.npy")


def test_foreign_textures_are_what_they_say(rng) -> None:
    for make in TEXTURES.values():
        field = make(rng)
        assert field.shape == (256, 256)
        assert 0.1 < field.mean() < 0.95
    names = {name for name, _ in foreign_views(1, kind="interior", seed=1)}
    assert names <= set(TEXTURES)
    assert len(names) >= 4
