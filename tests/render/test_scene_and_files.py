from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from poroscan.render import render_section
from poroscan.render.bodies import STRUCTURES, fill, make_body
from poroscan.render.lettering import add_banner, burn_bar, choose_bar
from poroscan.render.outlines import Outline
from poroscan.render.scene import compose, scatter
from poroscan.render.writing import write_jpeg, write_masks, write_tiff


@pytest.mark.parametrize("structure", sorted(STRUCTURES))
def test_every_structure_makes_a_body(structure: str, rng: np.random.Generator) -> None:
    body = make_body(structure, radius=70.0, rng=rng, skin=6.0)
    assert not (body.pores & ~body.particle).any()
    assert 2 * np.sqrt(body.particle.sum() / np.pi) == pytest.approx(140, rel=0.005)
    assert body.pores.any() == (structure != "dense")
    assert body.known["skin_thickness_px"] == 6.0


def test_closed_cells_of_a_body_are_whole_and_behind_the_skin(rng: np.random.Generator) -> None:
    body = make_body("closed_cells", radius=90.0, rng=rng, skin=12.0, diameter=14.0, spread=1.0, roughness=0.0)
    distance = np.hypot(*(np.indices(body.particle.shape) - np.array(body.particle.shape)[:, None, None] // 2))
    assert distance[body.pores].max() < 90 - 12 + 1.5
    assert body.known["pore_d50_px"] == pytest.approx(14.0)


def test_unknown_structure_and_missing_outline_are_refused() -> None:
    with pytest.raises(ValueError, match="unknown structure 'wood'; known: dense"):
        make_body("wood", radius=20.0, rng=0)
    with pytest.raises(ValueError, match="'fingers' needs an outline"):
        fill("fingers", shape=(40, 40), outline=None, rng=0)
    with pytest.raises(TypeError, match="wet"):
        make_body("sponge", radius=20.0, rng=0, wet=1.0)


def test_edge_view_is_cut_by_the_frame(rng: np.random.Generator) -> None:
    body = fill("sponge", shape=(120, 160), outline=Outline(260.0, 80.0, 220.0), rng=rng, skin=10.0)
    assert body.particle[-1].all()
    assert not body.particle[0].any()
    assert body.pores[-1].any()  # the frame is no outline: no skin along it


def test_scattered_bodies_stay_apart_and_inside(rng: np.random.Generator) -> None:
    bodies = [make_body("dense", radius=30.0, rng=rng) for _ in range(4)]
    scene = compose((220, 300), bodies, centres=scatter((220, 300), bodies, rng=rng))
    assert np.unique(scene.labels).tolist() == [0, 1, 2, 3, 4]
    border = np.concatenate([scene.labels[0], scene.labels[-1], scene.labels[:, 0], scene.labels[:, -1]])
    assert not border.any()
    for number, body in enumerate(bodies, start=1):
        assert (scene.labels == number).sum() == body.particle.sum()


def test_overlap_stays_with_the_first_and_the_frame_cuts() -> None:
    bodies = [make_body("dense", radius=20.0, rng=0, roughness=0.0) for _ in range(2)]
    scene = compose((60, 60), bodies, centres=[(30.0, 20.0), (30.0, 55.0)])
    assert (scene.labels == 1).sum() == bodies[0].particle.sum()
    assert 0 < (scene.labels == 2).sum() < bodies[1].particle.sum() / 1.5


def test_too_many_bodies_are_refused() -> None:
    bodies = [make_body("dense", radius=30.0, rng=0) for _ in range(9)]
    with pytest.raises(ValueError, match="9 particles do not fit into a picture of 100×100 pixels"):
        scatter((100, 100), bodies, rng=0)
    with pytest.raises(ValueError, match="one place per body"):
        compose((50, 50), bodies, centres=[(1.0, 1.0)])


@pytest.mark.parametrize(
    ("pixel_size", "um", "label"), [(0.5, 50.0, "50 µm"), (0.0021, 0.2, "200 nm"), (12.0, 2000.0, "2 mm")]
)
def test_bar_has_a_round_length(pixel_size: float, um: float, label: str) -> None:
    bar = choose_bar(900, pixel_size_um=pixel_size)
    assert (bar.length_um, bar.label) == (um, label)
    assert abs(bar.length_px - um / pixel_size) <= 0.5


def test_burnt_bar_is_as_long_as_it_says() -> None:
    grey = np.full((500, 700), 90, dtype=np.uint8)
    bar = choose_bar(700, pixel_size_um=0.37)
    longest = _longest_white_run(burn_bar(grey, pixel_size_um=0.37))
    assert longest == bar.length_px
    assert (grey == 90).all()


def test_banner_ruler_is_as_long_as_it_says() -> None:
    grey = np.full((500, 700), 90, dtype=np.uint8)
    with_banner = add_banner(grey, pixel_size_um=0.37, words=("10 kV", "x" * 500))
    assert np.array_equal(with_banner[:500], grey)
    assert _longest_white_run(with_banner[502:]) == choose_bar(700, pixel_size_um=0.37, share=0.25).length_px


def _longest_white_run(image: np.ndarray) -> int:
    best = 0
    for row in image == 255:
        edges = np.flatnonzero(np.diff(np.concatenate([[0], row.astype(int), [0]])))
        best = max(best, int(np.max(edges[1::2] - edges[::2], initial=0)))
    return best


@pytest.fixture
def picture(rng: np.random.Generator) -> np.ndarray:
    return rng.integers(0, 256, size=(40, 50), dtype=np.uint8)


def test_ome_tiff_keeps_pixels_and_scale(tmp_path: Path, picture: np.ndarray) -> None:
    write_tiff(tmp_path / "a.tif", picture, pixel_size_um=0.123)
    with tifffile.TiffFile(tmp_path / "a.tif") as file:
        assert np.array_equal(file.asarray(), picture)
        assert file.is_ome
        assert 'PhysicalSizeX="0.123" PhysicalSizeXUnit="&#181;m"' in (file.ome_metadata or "")


def test_resolution_tags_are_pixels_per_centimetre(tmp_path: Path, picture: np.ndarray) -> None:
    write_tiff(tmp_path / "a.tif", picture, pixel_size_um=0.25, scale="resolution")
    with tifffile.TiffFile(tmp_path / "a.tif") as file:
        number, base = file.pages[0].tags["XResolution"].value
        assert number / base == pytest.approx(40000, rel=1e-6)
        assert int(file.pages[0].tags["ResolutionUnit"].value) == 3
        assert not file.is_ome


def test_same_picture_same_bytes(tmp_path: Path, picture: np.ndarray) -> None:
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        write_tiff(tmp_path / name / "x.tif", picture, pixel_size_um=0.5)
        write_jpeg(tmp_path / name / "x.jpg", picture)
    for kind in ("tif", "jpg"):
        assert (tmp_path / f"a/x.{kind}").read_bytes() == (tmp_path / f"b/x.{kind}").read_bytes()
    with pytest.raises(ValueError, match="scale must be one of ome, resolution, none, not 'inch'"):
        write_tiff(tmp_path / "x.tif", picture, pixel_size_um=0.5, scale="inch")  # type: ignore[arg-type]


def test_masks_are_written_exactly(tmp_path: Path) -> None:
    body = make_body("sponge", radius=40.0, rng=0)
    rendered = render_section(body.pores, body.particle, rng=0)
    particles, pores = write_masks(tmp_path, "x", rendered)
    assert np.array_equal(tifffile.imread(particles), rendered.labels)
    assert np.array_equal(np.asarray(Image.open(pores)) > 0, rendered.pores)
