from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from poroscan.cli.render import command
from poroscan.errors import InputError, SettingsError, StoreError
from poroscan.render.bodies import make_body
from poroscan.render.job import settings_from
from poroscan.render.reading import read_masks


@pytest.fixture
def masks(tmp_path: Path) -> Path:
    body = make_body("sponge", radius=40.0, rng=0, skin=4.0)
    np.savez(tmp_path / "bead.npz", pores=body.pores, particle=body.particle)
    return tmp_path / "bead.npz"


def test_command_writes_picture_masks_and_truth(
    masks: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out = tmp_path / "out"
    assert command(masks, out, seed=3, pixel_size=0.5, bar="banner", change=["dose=120", "banner_text=10 kV|SE"]) == 0
    printed = [Path(line) for line in capsys.readouterr().out.splitlines()]
    names = ["bead.tif", "bead_particles.tif", "bead_pores.png", "bead_truth.csv"]
    assert [p.name for p in printed] == names
    with np.load(masks) as given:
        assert np.array_equal(tifffile.imread(out / "bead_particles.tif") > 0, given["particle"])
        assert np.array_equal(np.asarray(Image.open(out / "bead_pores.png")) > 0, given["pores"])
        porosity = given["pores"].sum() / given["particle"].sum()
        assert tifffile.imread(out / "bead.tif").shape[0] > given["pores"].shape[0]
    with (out / "bead_truth.csv").open(encoding="utf-8", newline="") as file:
        (row,) = csv.DictReader(file)
    assert float(row["porosity"]) == pytest.approx(porosity)
    assert float(row["equivalent_diameter_um"]) == pytest.approx(40.0, rel=0.01)


def test_same_seed_same_bytes(masks: Path, tmp_path: Path) -> None:
    for name in ("a", "b"):
        command(masks, tmp_path / name, seed=5, quiet=True)
    command(masks, tmp_path / "c", seed=6, quiet=True)
    first, second, other = ((tmp_path / n / "bead.tif").read_bytes() for n in "abc")
    assert first == second != other


def test_three_grey_picture_is_surroundings_polymer_pore(tmp_path: Path) -> None:
    image = np.zeros((20, 20), dtype=np.uint8)
    image[5:15, 5:15] = 128
    image[8:10, 8:10] = 255
    Image.fromarray(image).save(tmp_path / "m.png")
    masks = read_masks(tmp_path / "m.png")
    assert (masks.particle.sum(), masks.pores.sum()) == (100, 4)


def test_two_valued_array_is_a_pore_mask_and_a_field_is_none(tmp_path: Path) -> None:
    np.save(tmp_path / "two.npy", np.eye(4, dtype=bool))
    assert read_masks(tmp_path / "two.npy").pores.sum() == 4
    np.save(tmp_path / "field.npy", np.linspace(0, 1, 16).reshape(4, 4))
    assert read_masks(tmp_path / "field.npy") is None


def test_simulated_field_is_pictured_by_its_polymer_fraction(masks: Path, tmp_path: Path) -> None:
    with np.load(masks) as given:
        pores, particle = given["pores"], given["particle"]
    rng = np.random.default_rng(0)
    polymer = np.where(particle & ~pores, 0.8, 0.1) + 0.02 * rng.standard_normal(pores.shape)
    np.savez(tmp_path / "sim.npz", polymer=polymer, spacing_um=0.25)
    assert command(tmp_path / "sim.npz", tmp_path / "out", bar="burnt", quiet=True) == 0
    found = np.asarray(Image.open(tmp_path / "out/sim_pores.png")) > 0
    assert (found != pores).mean() < 0.01
    with tifffile.TiffFile(tmp_path / "out/sim.tif") as file:
        assert 'PhysicalSizeX="0.25"' in (file.ome_metadata or "")


def test_no_length_is_invented(masks: Path, tmp_path: Path) -> None:
    command(masks, tmp_path / "out", quiet=True)
    with tifffile.TiffFile(tmp_path / "out/bead.tif") as file:
        assert not file.is_ome
    assert "_um" not in (tmp_path / "out/bead_truth.csv").read_text()
    with pytest.raises(SettingsError, match="a scale bar needs a pixel size; give --pixel-size"):
        command(masks, tmp_path / "out", bar="burnt", quiet=True)


def test_volume_is_cut_and_gives_the_depth(tmp_path: Path) -> None:
    pores = np.zeros((9, 12, 12), dtype=bool)
    pores[2:7, 3:9, 3:9] = True
    np.savez(tmp_path / "v.npz", pores=pores)
    masks = read_masks(tmp_path / "v.npz")
    assert masks.depth is not None
    assert masks.depth[5, 5] == 3  # plane 4 of 2…6
    assert read_masks(tmp_path / "v.npz", plane=0).pores.sum() == 0
    with pytest.raises(InputError, match=r"v.npz has no plane 9; give one from 0 to 8"):
        read_masks(tmp_path / "v.npz", plane=9)


@pytest.mark.parametrize(
    ("name", "content", "message"),
    [
        ("gone.npy", None, "gone.npy is not there"),
        ("a.txt", b"x", r"a.txt ends in .txt; give one of .npz"),
        ("b.npy", b"x", "b.npy cannot be read"),
        ("c.png", b"x", "c.png cannot be read"),
        ("d.npz", b"x", "d.npz cannot be read"),
        ("e.tif", b"x", "e.tif cannot be read"),
    ],
)
def test_unreadable_input_is_one_line(tmp_path: Path, name: str, content: bytes | None, message: str) -> None:
    if content is not None:
        (tmp_path / name).write_bytes(content)
    with pytest.raises(InputError, match=message):
        read_masks(tmp_path / name)


def test_arrays_that_are_no_masks_are_refused(tmp_path: Path) -> None:
    np.save(tmp_path / "o.npy", np.array([{"a": 1}]), allow_pickle=True)
    with pytest.raises(InputError, match="cannot be read"):
        read_masks(tmp_path / "o.npy")
    np.save(tmp_path / "n.npy", np.array([[np.nan, 1.0, 2.0]]))
    with pytest.raises(InputError, match="not finite"):
        read_masks(tmp_path / "n.npy")
    np.savez(tmp_path / "s.npz", pores=np.zeros((3, 3), bool), particle=np.zeros((3, 4), bool))
    with pytest.raises(InputError, match=r"pores of shape \(3, 3\)"):
        read_masks(tmp_path / "s.npz")
    np.savez(tmp_path / "t.npz", pores=np.zeros((3, 3), bool), particle=np.zeros((3, 3)))
    with pytest.raises(InputError, match="has a particle of float64 values; give a bool mask or particle numbers"):
        read_masks(tmp_path / "t.npz")


@pytest.mark.parametrize(
    ("name", "changes", "message"),
    [
        ("secondary", {"dose": "many"}, "dose is 'many'; give a number"),
        ("secondary", {"shine": "1"}, "unknown render settings"),
        ("secondary", {"blur": "-1"}, "^blur must be at least 0"),
        ("x", {}, "unknown look"),
    ],
)
def test_wrong_settings_are_one_line(name: str, changes: dict[str, str], message: str) -> None:
    with pytest.raises(SettingsError, match=message):
        settings_from(name, changes)


def test_wrong_options_are_one_line(masks: Path, tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match="has no '='"):
        command(masks, tmp_path, change=["dose"])
    with pytest.raises(SettingsError, match="--scale is 'inch'"):
        command(masks, tmp_path, scale="inch")


def test_a_file_in_place_of_the_folder_is_one_line(masks: Path, tmp_path: Path) -> None:
    file = tmp_path / "taken"
    file.write_text("x", encoding="utf-8")
    with pytest.raises(StoreError, match=r"taken: cannot be written .*; give another folder"):
        command(masks, file)
