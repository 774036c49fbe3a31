"""Run files and the store of an atlas: what goes in comes out, and what is damaged is refused."""

from __future__ import annotations

import hashlib
import json
import shutil
from dataclasses import replace

import numpy as np
import pytest
from made_particles import made_run

from poroscan.atlas.admission import SLOW, outcome_of
from poroscan.atlas.run_file import LEVELS, MARGIN, crop_to_particle, load_run, run_to_bytes, save_run
from poroscan.atlas.space import NAMES
from poroscan.atlas.store import load_atlas, run_table, verify, write_atlas
from poroscan.atlas.table import runs_to_bytes
from poroscan.errors import StoreError


def test_a_run_comes_back_within_half_a_step(tmp_path, rng) -> None:
    run = made_run("a", "spinodal", rng)
    save_run(tmp_path / "a.npz", run)
    back = load_run(tmp_path / "a.npz")
    assert np.abs(back.field - run.field).max() <= 0.5 / LEVELS + 1e-6
    assert (back.name, back.regime, back.parameters) == (run.name, run.regime, dict(run.parameters))
    assert [p.name for p in tmp_path.iterdir()] == ["a.npz"]


def test_equal_runs_give_equal_bytes_and_the_hash_is_checked(tmp_path, rng) -> None:
    run = made_run("a", "delayed", rng)
    assert run_to_bytes(run) == run_to_bytes(replace(run))
    save_run(tmp_path / "a.npz", run)
    digest = hashlib.sha256((tmp_path / "a.npz").read_bytes()).hexdigest()
    assert load_run(tmp_path / "a.npz", sha256=digest).name == "a"
    with pytest.raises(StoreError, match="SHA-256 differs"):
        load_run(tmp_path / "a.npz", sha256="0" * 64)


@pytest.mark.parametrize("damage", [b"", b"PK\x03\x04 nothing", None])
def test_damaged_files_are_one_clear_error(tmp_path, rng, damage) -> None:
    path = tmp_path / "a.npz"
    save_run(path, made_run("a", "delayed", rng))
    path.write_bytes(path.read_bytes()[:-40] if damage is None else damage)
    with pytest.raises(StoreError, match="not a run of an atlas, or damaged"):
        load_run(path)


def test_a_field_with_nan_is_not_saved(tmp_path, rng) -> None:
    run = made_run("a", "delayed", rng)
    bad = run.field.copy()
    bad[0, 0] = np.nan
    with pytest.raises(ValueError, match="field must be finite"):
        save_run(tmp_path / "a.npz", replace(run, field=bad))
    assert not list(tmp_path.iterdir())


def test_crop_leaves_a_margin_and_passes_over_stray_cells() -> None:
    field = np.zeros((60, 70))
    field[20:40, 25:50] = 1.0
    field[3, 3] = 1.0  # one stray cell of noise
    assert crop_to_particle(field, 0.5).shape == (20 + 2 * MARGIN, 25 + 2 * MARGIN)
    with pytest.raises(ValueError, match="no cell above 2"):
        crop_to_particle(field, 2)


def test_a_delayed_run_without_a_dense_skin_is_slow(rng) -> None:
    columns = ("exchange_time", "skin_polymer", "demixed")
    run = replace(made_run("a", "delayed", rng), source="simulation", path_columns=columns)
    thin = np.array([[0.0, 0.2, 0.0], [0.2, 0.3, 0.1], [0.4, 0.8, 0.9]], dtype=np.float32)
    dense = thin.copy()
    dense[1, 1] = 0.6
    assert outcome_of(replace(run, path=thin)) == SLOW
    assert outcome_of(replace(run, path=dense)) == "delayed"
    assert outcome_of(replace(run, path=thin, source="user")) == "delayed"
    assert outcome_of(replace(run, path=thin, regime="spinodal")) == "spinodal"


def test_an_atlas_comes_back(tiny_folder, tiny_atlas) -> None:
    assert tiny_atlas.counts() == dict.fromkeys(tiny_atlas.counts(), 10)
    assert len(tiny_atlas.views) == 50
    run = tiny_atlas.run("flat-spinodal-3")
    assert run.regime == "spinodal"
    assert run.field.shape == (112, 112)
    assert verify(tiny_folder) == 3
    with pytest.raises(StoreError, match="no field of a run named 'other'"):
        tiny_atlas.run("other")


def test_nothing_is_overwritten(tiny_folder, tiny_atlas) -> None:
    before = (tiny_folder / "atlas.json").read_bytes()
    with pytest.raises(StoreError, match=r"holds an atlas already.*nothing was overwritten"):
        write_atlas(tiny_folder, tiny_atlas.runs, tiny_atlas.views, fields={}, about={})
    assert (tiny_folder / "atlas.json").read_bytes() == before


def _copy(tiny_folder, tmp_path):
    target = tmp_path / "copy"
    shutil.copytree(tiny_folder, target)
    return target


def _rehash(folder) -> None:
    """Give atlas.json the hashes of what lies there, so that the check after the hash is reached."""
    head = json.loads((folder / "atlas.json").read_text())
    head["sha256"] = {n: hashlib.sha256((folder / n).read_bytes()).hexdigest() for n in head["sha256"]}
    (folder / "atlas.json").write_text(json.dumps(head))


def test_bad_atlases_are_refused(tiny_folder, tiny_atlas, tmp_path) -> None:
    with pytest.raises(StoreError, match="holds no atlas"):
        load_atlas(tmp_path)
    folder = _copy(tiny_folder, tmp_path)
    data = bytearray((folder / "views.parquet").read_bytes())
    data[100] ^= 1
    (folder / "views.parquet").write_bytes(bytes(data))
    with pytest.raises(StoreError, match=r"views\.parquet.*SHA-256 differs"):
        load_atlas(folder)
    (folder / "runs.parquet").unlink()
    with pytest.raises(StoreError, match=r"runs\.parquet: cannot be read"):
        load_atlas(folder)


def test_another_format_and_a_damaged_head_are_refused(tiny_folder, tmp_path) -> None:
    folder = _copy(tiny_folder, tmp_path)
    head = json.loads((folder / "atlas.json").read_text())
    (folder / "atlas.json").write_text(json.dumps({**head, "format": 99}))
    with pytest.raises(StoreError, match="format 99, but this version reads 1"):
        load_atlas(folder)
    (folder / "atlas.json").write_text("{")
    with pytest.raises(StoreError, match="is damaged"):
        load_atlas(folder)


def test_missing_columns_unknown_labels_and_a_missing_regime_are_refused(tiny_folder, tiny_atlas, tmp_path) -> None:
    import pyarrow.parquet as pq

    folder = _copy(tiny_folder, tmp_path)
    pq.write_table(pq.read_table(folder / "views.parquet").drop_columns(["texture_porosity"]), folder / "views.parquet")
    _rehash(folder)
    with pytest.raises(StoreError, match="column 'texture_porosity' is missing"):
        load_atlas(folder)
    runs = tiny_atlas.runs
    for regime, message in (
        ("foam", "regime 'foam' is not of the list"),
        ("delayed", "no run of the regime 'undemixed'"),
    ):
        changed = tuple(regime if r == "undemixed" else r for r in runs.regime)
        table = replace(runs, regime=changed)
        (folder / "runs.parquet").write_bytes(runs_to_bytes(table))
        _rehash(folder)
        with pytest.raises(StoreError, match=message):
            load_atlas(folder)


def test_unknown_parameters_stay_unknown(rng) -> None:
    table = run_table([("own", replace(made_run("a", "delayed", rng), parameters={"polymer": 0.2}))], NAMES)
    assert table.parameters[0, NAMES.index("polymer")] == 0.2
    assert np.isnan(table.parameters[0, 1:]).all()
