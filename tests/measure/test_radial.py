from __future__ import annotations

import math

import numpy as np
import pytest
from media import disc, level_cut

from poroscan.measure import radial, skin
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.render.bodies import make_body
from poroscan.section import Circle, PixelSize, Section

RADIUS = 250


def plane(radius=RADIUS):
    particle = disc(radius)
    half = particle.shape[0] // 2
    y, x = np.mgrid[-half : half + 1, -half : half + 1]
    return particle, np.hypot(x, y), np.arctan2(-y, x)


def measured(pores, particle, *, view="whole", settings=None, **options):
    section = Section(pores & particle, particle, PixelSize(1.0), view=view, **options)
    settings = settings or MeasureSettings()
    return radial.part(section, settings, shared=Shared(section, settings), rng=np.random.default_rng(0))


def graded(a, b, rng, radius=RADIUS):
    particle, r, _ = plane(radius)
    return rng.random(particle.shape) < a + b * r / radius, particle


def test_linear_gradient_against_its_integrals(rng):
    # oracles 1.9: core a + b/3; halves and slope by integration of a + b r/R over the disc
    a, b = 0.3, 0.4
    part = measured(*graded(a, b, rng))
    inner = a + b * 2 / 3 * math.sqrt(0.5)
    outer = 2 * (a + 2 * b / 3) - inner
    value = {name: e.value for name, e in part.estimates.items()}
    print(f"\nradial asymmetry {value['radial_asymmetry']:.5f}, closed form {(outer - inner) / (outer + inner):.5f}")
    assert value["radial_asymmetry"] == pytest.approx((outer - inner) / (outer + inner), rel=0.02)
    assert value["radial_slope"] == pytest.approx(b / (a + 2 * b / 3), rel=0.02)
    assert value["core_porosity"] == pytest.approx(a + b / 3, abs=0.005)
    assert value["shell_porosity"] == pytest.approx(outer, abs=0.005)
    for name in ("radial_asymmetry", "core_porosity", "shell_porosity"):
        e = part.estimates[name]
        assert e.low < e.value < e.high
        assert e.high - e.low < 0.1


def test_profile_against_normalised_radius(rng):
    part = measured(*graded(0.2, 0.5, rng))
    curve = next(c for c in part.curves if c.name == "radial_porosity_normalised")
    assert curve.x.size == 20
    assert np.all(np.abs(curve.y - (0.2 + 0.5 * curve.x)) < 0.02)
    covered = (curve.low <= 0.2 + 0.5 * curve.x) & (0.2 + 0.5 * curve.x <= curve.high)
    assert covered[np.isfinite(curve.low)].mean() > 0.75


def test_middle_section_is_not_the_sphere(rng):
    # trap 0.11, oracles 1.9: a + 2b/3 in the section through the middle, a + 3b/4 in the sphere
    n = 60
    z, y, x = np.mgrid[-n : n + 1, -n : n + 1, -n : n + 1]
    r = np.sqrt(x**2 + y**2 + z**2) / (n - 1)
    particle = r <= 1
    pores = (rng.random(r.shape) < 0.2 + 0.6 * r) & particle
    middle = pores[n].sum() / particle[n].sum()
    assert middle == pytest.approx(0.2 + 0.6 * 2 / 3, abs=0.012)
    assert pores.sum() / particle.sum() == pytest.approx(0.2 + 0.6 * 3 / 4, abs=0.005)
    # The volume's own halves by volume: inner half a + b · 3/4 · 2^(−1/3)
    part = measured(pores, particle)
    inner = 0.2 + 0.6 * 0.75 * 0.5 ** (1 / 3)
    outer = 2 * (0.2 + 0.45) - inner
    assert part.estimates["radial_asymmetry"].value == pytest.approx((outer - inner) / (outer + inner), rel=0.03)
    assert part.estimates["core_porosity"].value == pytest.approx(0.2 + 0.6 * 0.75 / 2, abs=0.01)


@pytest.mark.parametrize("thickness", [3, 12, 40])
def test_skin_of_a_rendered_particle(thickness, rng):
    particle, r, _ = plane()
    field = level_cut((512, 512), length=4.0, fraction=0.5, rng=rng)[: r.shape[0], : r.shape[1]]
    part = measured(field & (r < RADIUS - thickness), particle)
    e = part.estimates["skin_thickness"]
    assert e.value == pytest.approx(thickness, abs=max(1.0, 0.03 * thickness))
    assert e.low - 0.5 <= thickness <= e.high + 0.5
    assert part.estimates["skin_porosity"].value < 0.1


@pytest.mark.parametrize("structure", ["sponge", "discs", "foam", "fingers", "graded"])
@pytest.mark.parametrize("thickness", [6, 15])
def test_skin_of_every_kind_of_particle(structure, thickness):
    body = make_body(structure, radius=200, rng=3, skin=float(thickness))
    e = measured(body.pores, body.particle).estimates["skin_thickness"]
    assert e.value == pytest.approx(thickness, abs=1.0)


def test_pores_open_to_the_outside_mean_no_skin(rng):
    particle, _, _ = plane()
    field = level_cut((512, 512), length=4.0, fraction=0.5, rng=rng)[: particle.shape[0], : particle.shape[1]]
    part = measured(field, particle)
    assert part.estimates["skin_thickness"].value == 0
    assert math.isnan(part.estimates["skin_porosity"].value)


def test_frame_is_no_outline(rng):
    # A particle cut by the frame: the profile starts at the visible outline only, and the frame grows no skin.
    particle, r, _ = plane()
    pores = (rng.random(r.shape) < 0.5) & (r < RADIUS - 20)
    half = particle.shape[0] // 2
    section = Section(
        (pores & particle)[:, : half + 40],
        particle[:, : half + 40],
        PixelSize(1.0),
        view="edge",
        circle=Circle(half, half, RADIUS, 1.0),
    )
    settings = MeasureSettings()
    part = radial.part(section, settings, shared=Shared(section, settings), rng=rng)
    assert part.estimates["skin_thickness"].value == pytest.approx(20, abs=1)
    assert math.isnan(part.estimates["radial_asymmetry"].value)
    assert part.estimates["core_porosity"].value == pytest.approx(0.5, abs=0.01)
    profile = next(c for c in part.curves if c.name == "radial_porosity")
    assert np.all(np.abs(profile.y[profile.x > 22] - 0.5) < 0.1)


def test_classes_of_an_odd_outline_have_equal_area():
    particle = disc(90)
    particle[:, 120:] = False
    section = Section(np.zeros_like(particle), particle, PixelSize(1.0))
    classes = radial.radius_classes(Shared(section, MeasureSettings()).depth, particle)
    share = np.bincount(classes[particle] // 120, minlength=10) / np.count_nonzero(particle)
    assert np.all(np.abs(share - 0.1) < 0.012)
    assert np.all(classes[~particle] == -1)


def test_normalised_radius_of_a_disc_is_r_over_r():
    particle, r, _ = plane()
    section = Section(np.zeros_like(particle), particle, PixelSize(1.0))
    classes = radial.radius_classes(Shared(section, MeasureSettings()).depth, particle)
    s = np.sqrt((classes[particle] + 0.5) / radial.CLASSES)
    assert np.abs(s - r[particle] / RADIUS)[r[particle] > 20].max() < 0.02


@pytest.mark.parametrize("turn", [0, 1, 2, 3])
def test_turning_changes_nothing(turn, rng):
    pores, particle = graded(0.3, 0.3, rng, radius=80)
    wanted = measured(pores, particle).estimates
    got = measured(np.rot90(pores, turn), np.rot90(particle, turn)).estimates
    for name in ("core_porosity", "shell_porosity", "radial_asymmetry", "skin_thickness"):
        assert got[name].value == pytest.approx(wanted[name].value, rel=1e-9)


def test_threshold_band_is_a_component(rng):
    pores, particle = graded(0.3, 0.3, rng, radius=80)
    pores &= particle
    low = pores & (rng.random(pores.shape) < 0.9)
    high = pores | (particle & (rng.random(pores.shape) < 0.1))
    section = Section(pores, particle, PixelSize(1.0), pores_low=low, pores_high=high)
    settings = MeasureSettings()
    e = radial.part(section, settings, shared=Shared(section, settings), rng=rng).estimates["shell_porosity"]
    assert set(e.components) == {"sampling", "threshold"}
    assert e.components["threshold"] > 0.03
    assert e.high - e.low > 3 * e.components["threshold"]


def test_interior_view_has_no_radius(rng):
    part = measured(rng.random((50, 50)) < 0.5, np.ones((50, 50), bool), view="interior")
    assert all(math.isnan(e.value) for e in part.estimates.values())
    assert part.flags == ("interior_view",)


@pytest.mark.parametrize("fill", [False, True])
def test_without_pores_or_walls_nothing_crashes(fill):
    particle = disc(30)
    part = measured(np.full(particle.shape, fill), particle)
    assert part.estimates["core_porosity"].value == float(fill)
    assert math.isnan(part.estimates["radial_asymmetry"].value) == (not fill)


@pytest.mark.parametrize("shape", [(3, 3), (3, 4), (5, 3)])
def test_tiny_particles_do_not_crash(shape, rng):
    particle = np.zeros(shape, bool)
    particle[1:-1, 1:-1] = True
    measured(rng.random(shape) < 0.5, particle)


def test_depth_without_outline_is_refused():
    particle = np.ones((4, 4), bool)
    with pytest.raises(ValueError, match="depth must be finite inside particle"):
        radial.radius_classes(np.full((4, 4), np.inf, np.float32), particle)


def test_thickness_interpolates_between_steps():
    middle = np.arange(6) + 0.5
    pixels = np.full(6, 100.0)
    crossing = skin.thickness(
        np.array([[0, 0, 20, 60, 50, 50], [60, 0, 0, 0, 0, 0], [0] * 6]), pixels, middle, level=0.4
    )
    assert crossing[0] == pytest.approx(3.0)
    assert crossing[1] == 0
    assert math.isnan(crossing[2])
