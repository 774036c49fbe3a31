from __future__ import annotations

import numpy as np
import pytest

from poroscan.render import LOOKS, RenderSettings, look, render_section
from poroscan.render.outlines import Outline
from poroscan.render.sem import first_harmonic
from poroscan.render.structures import paint_discs

SHAPE = (160, 200)
PARTICLE = Outline(80.0, 100.0, 60.0).mask(SHAPE)
HOLES = np.array([[60.0, 80.0], [80.0, 120.0], [105.0, 90.0]])
PORES = paint_discs(SHAPE, centres=HOLES, radii=np.array([9.0, 12.0, 7.0]))

#: Nothing but material contrast.
PLAIN = RenderSettings(
    edge=0.0, relief=0.0, face_texture=0.0, knife=0.0, ground_texture=0.0, shadow=0.0, blur=0.0, tilt=0.0, unevenness=0.0,
    dose=0.0, detector_noise=0.0, streaks=0.0, offset=0.0, pore_light=0.0,
)  # fmt: skip


def _plain(**changes: object) -> RenderSettings:
    from dataclasses import replace

    return replace(PLAIN, **changes)  # type: ignore[arg-type]


def test_without_faults_the_picture_is_three_greys() -> None:
    grey = render_section(PORES, PARTICLE, PLAIN, rng=0).grey
    assert set(np.unique(grey[PARTICLE & ~PORES])) == {round(255 * 0.56)}
    assert set(np.unique(grey[~PARTICLE])) == {round(255 * 0.16)}
    assert set(np.unique(grey[PORES])) == {round(255 * 0.03)}


def test_truth_is_counted_on_the_masks() -> None:
    rendered = render_section(PORES, PARTICLE, _plain(pixel_size_um=0.5), rng=0, known={1: {"skin_thickness_px": 4.0}})
    truth = rendered.truth[1]
    assert truth["porosity"] == PORES.sum() / PARTICLE.sum()
    assert truth["equivalent_diameter_um"] == pytest.approx(60.0, rel=2e-3)
    assert truth["skin_thickness_px"] == 4.0
    assert truth["touches_frame"] == 0
    assert np.array_equal(rendered.labels > 0, PARTICLE)
    assert np.array_equal(rendered.pores, PORES)


def test_edges_shine() -> None:
    grey = render_section(PORES, PARTICLE, _plain(edge=0.2), rng=0).grey
    assert grey[80, 100 - 60] > grey[80, 60] + 20


def test_pore_floors_darken_with_depth_over_width() -> None:
    flat = np.where(PORES, 4.0, 0.0)
    deep = np.where(PORES, 40.0, 0.0)
    settings = _plain(pore_light=0.8)
    shallow, dark = (render_section(PORES, PARTICLE, settings, rng=0, depth=d).grey for d in (flat, deep))
    assert shallow[PORES].mean() > dark[PORES].mean() + 40
    # Solid-angle share on the axis of a mouth of half-width 12 at depth 4.
    expected = 0.03 + 0.56 * 0.8 * (1 - 4 / np.hypot(4, 12))
    assert shallow[80, 120] / 255 == pytest.approx(expected, abs=0.02)


def test_pores_can_be_brighter_than_walls_or_filled() -> None:
    bright = render_section(PORES, PARTICLE, _plain(pores="bright"), rng=0).grey
    assert bright[PORES].min() > bright[PARTICLE & ~PORES].max()
    resin = render_section(PORES, PARTICLE, _plain(pores="resin", ground_kind="resin", resin=0.3), rng=0).grey
    assert set(np.unique(resin[PORES])) == set(np.unique(resin[~PARTICLE])) == {round(255 * 0.3)}


def test_shot_noise_has_the_variance_of_its_dose() -> None:
    dose = 200.0
    grey = render_section(PORES, PARTICLE, _plain(dose=dose), rng=1).grey
    face = (grey / 255)[PARTICLE & ~PORES]
    # Poisson of mean 0.56·dose, divided by dose; 1/12 of a grey level squared by rounding.
    assert face.var() == pytest.approx(0.56 / dose + 1 / 12 / 255**2, rel=0.05)
    assert face.mean() == pytest.approx(0.56, abs=0.003)


def test_tilt_brightens_towards_its_direction() -> None:
    grey = render_section(PORES, PARTICLE, _plain(tilt=0.4, tilt_deg=90.0), rng=0).grey.astype(int)
    assert grey[0, 0] > grey[-1, 0] + 5  # 90° is upwards on the screen
    assert grey[0, 0] == grey[0, -1]


def test_charging_bands_are_rows() -> None:
    plain = render_section(PORES, PARTICLE, PLAIN, rng=3).grey.astype(float)
    charged = render_section(PORES, PARTICLE, _plain(charging=0.3), rng=3).grey - plain
    assert charged.mean(axis=1).max() > 20
    assert charged.mean(axis=1).std() > 3 * charged.mean(axis=0).std()


def test_touching_particles_keep_their_numbers_and_show_a_seam() -> None:
    labels = np.zeros((60, 100), dtype=np.int32)
    labels[10:50, 10:50], labels[10:50, 50:90] = 1, 2
    rendered = render_section(np.zeros(labels.shape, dtype=bool), labels, PLAIN, rng=0)
    assert np.array_equal(rendered.labels, labels)
    assert rendered.grey[30, 50] < rendered.grey[30, 40] - 20


def test_banner_is_added_below_and_bar_burnt_in() -> None:
    banner = render_section(PORES, PARTICLE, _plain(bar="banner", banner_text=("10 kV",)), rng=0)
    assert banner.grey.shape[0] == SHAPE[0] + banner.banner_rows
    assert banner.banner_rows > 20
    assert banner.labels.shape == SHAPE
    burnt = render_section(PORES, PARTICLE, _plain(bar="burnt"), rng=0)
    assert burnt.banner_rows == 0
    assert (burnt.grey[-60:, -80:] == 255).any()


@pytest.mark.parametrize("name", sorted(LOOKS))
def test_every_look_gives_the_same_picture_for_the_same_seed(name: str) -> None:
    first, second = (render_section(PORES, PARTICLE, look(name), rng=7).grey for _ in range(2))
    assert np.array_equal(first, second)
    assert not np.array_equal(first, render_section(PORES, PARTICLE, look(name), rng=8).grey)


def test_first_harmonic_of_half_a_disc() -> None:
    # Upper half pore: porosity ½ + (2/π)·sin θ + …, so the amplitude over the mean is 4/π.
    disc = Outline(100.0, 100.0, 90.0).mask((201, 201))
    upper = disc & (np.indices(disc.shape)[0] < 100)
    amplitude, direction = first_harmonic(upper, disc, centre=(100.0, 100.0))
    assert amplitude == pytest.approx(4 / np.pi, rel=0.02)
    assert direction == pytest.approx(90.0, abs=0.5)


def test_wrong_arrays_are_refused() -> None:
    with pytest.raises(ValueError, match="pores lie outside particle"):
        render_section(~PARTICLE, PARTICLE, rng=0)
    with pytest.raises(ValueError, match="pores must be a bool array"):
        render_section(PORES.astype(int), PARTICLE, rng=0)  # type: ignore[arg-type]
    with pytest.raises(ValueError, match=r"pores has shape \(3, 3\)"):
        render_section(np.zeros((3, 3), dtype=bool), PARTICLE, rng=0)
    with pytest.raises(ValueError, match="non-negative integer particle numbers"):
        render_section(PORES, PARTICLE.astype(float), rng=0)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"polymer": 1.2}, "polymer must be at least 0 and at most 1, not 1.2"),
        ({"pixel_size_um": 0.0}, "pixel_size_um must be greater than 0"),
        ({"dose": float("nan")}, "dose must be at least 0, not nan"),
        ({"pores": "round"}, "pores must be one of deep, resin, bright, not 'round'"),
    ],
)
def test_wrong_settings_are_refused(changes: dict[str, object], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        RenderSettings(**changes)  # type: ignore[arg-type]


def test_unknown_looks_and_settings_name_the_known_ones() -> None:
    with pytest.raises(ValueError, match="unknown look 'x'; known: secondary"):
        look("x")
    with pytest.raises(ValueError, match=r"unknown render settings \['shine'\]"):
        look("secondary", shine=1)
