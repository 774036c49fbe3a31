from __future__ import annotations

import numpy as np
import pytest

from poroscan.render import radial
from poroscan.render.outlines import Outline

SHAPE = (261, 261)
CIRCLE = Outline(130.0, 130.0, 120.0)


def test_skin_is_free_of_pores_and_no_thicker() -> None:
    particle = CIRCLE.mask(SHAPE)
    pores = radial.with_skin(np.ones(SHAPE, dtype=bool), particle=particle, thickness=15.0)
    distance, _ = CIRCLE.polar(SHAPE)
    assert distance[pores].max() == pytest.approx(105.0, abs=1.0)
    assert pores[distance < 103.5].all()


def test_frame_gets_no_skin() -> None:
    particle = np.ones((40, 40), dtype=bool)
    particle[:10] = False
    pores = radial.with_skin(np.ones((40, 40), dtype=bool), particle=particle, thickness=5.0)
    assert pores[-1].all()
    assert pores[20:, 0].all()
    assert not pores[:15].any()


def test_ramp_has_the_closed_form_mean() -> None:
    # Mean of a + b·r/R over the disc: a + 2b/3.
    chance = radial.ramp(CIRCLE, shape=SHAPE, centre=0.6, rim=0.3)
    assert chance[CIRCLE.mask(SHAPE)].mean() == pytest.approx(0.6 - 0.3 * 2 / 3, abs=2e-3)


def test_dipole_has_its_amplitude_and_direction() -> None:
    chance = radial.dipole(CIRCLE, shape=SHAPE, mean=0.4, amplitude=0.3, direction_deg=140.0)
    inside = CIRCLE.mask(SHAPE)
    _, theta = CIRCLE.polar(SHAPE)
    moment = 2 * (chance * np.exp(1j * theta))[inside].mean() / chance[inside].mean()
    assert abs(moment) == pytest.approx(0.3, rel=0.01)
    assert np.degrees(np.angle(moment)) == pytest.approx(140.0, abs=0.3)


def test_fingers_start_under_the_skin_and_end_before_the_centre(rng: np.random.Generator) -> None:
    pores = radial.fingers(CIRCLE, shape=SHAPE, number=14, width=20.0, skin=10.0, length=0.5, rng=rng)
    distance, _ = CIRCLE.polar(SHAPE)
    assert pores.any()
    assert distance[pores].max() <= 110.0
    assert distance[pores].min() >= 120 - 10 - 0.5 * 120 * 1.15 - 1
