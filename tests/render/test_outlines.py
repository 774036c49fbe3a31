from __future__ import annotations

import numpy as np
import pytest

from poroscan.render.outlines import Outline, irregular

SHAPE = (241, 261)


def test_circle_area_is_pi_r_squared() -> None:
    outline = Outline(120.3, 130.6, 100.0)
    assert outline.area == pytest.approx(np.pi * 1e4, rel=1e-12)
    assert outline.mask(SHAPE).sum() == pytest.approx(np.pi * 1e4, rel=1e-3)


def test_ellipse_keeps_the_area_and_has_its_axes() -> None:
    outline = Outline(120, 130, 80.0, aspect=1.44, angle_deg=30.0)
    assert outline.area == pytest.approx(np.pi * 80**2, rel=1e-9)
    assert outline.reach(np.deg2rad(30.0)) == pytest.approx(80 * 1.2)
    assert outline.reach(np.deg2rad(120.0)) == pytest.approx(80 / 1.2)


def test_one_harmonic_has_the_closed_form_area() -> None:
    # ½∮R²(1 + a cos kθ)² dθ = πR²(1 + a²/2).
    outline = Outline(120, 130, 80.0, amplitudes=(0.0, 0.1), phases=(0.0, 1.0))
    assert outline.area == pytest.approx(np.pi * 80**2 * 1.005, rel=1e-12)


def test_angles_run_counter_clockwise_on_the_screen() -> None:
    _, theta = Outline(5, 5, 3.0).polar((11, 11))
    assert theta[0, 5] == pytest.approx(np.pi / 2)  # row 0 lies above the centre
    assert theta[5, 10] == 0


def test_irregular_outline_has_the_asked_roughness(rng: np.random.Generator) -> None:
    outline = irregular(120, 130, radius=80, rng=rng, roughness=0.03)
    reach = outline.reach(np.linspace(0, 2 * np.pi, 4096, endpoint=False))
    assert reach.std() / 80 == pytest.approx(0.03, rel=1e-6)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"radius": 0.0}, "radius must be positive"),
        ({"aspect": 0.9}, "aspect must be at least 1"),
        ({"amplitudes": (0.1,)}, "one entry per amplitude"),
        ({"amplitudes": (0.6,), "phases": (0.0,)}, "at most 0.5"),
    ],
)
def test_impossible_outlines_are_refused(changes: dict[str, object], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        Outline(**{"row": 1.0, "column": 1.0, "radius": 5.0, **changes})  # type: ignore[arg-type]
