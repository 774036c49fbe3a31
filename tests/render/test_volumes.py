from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtri

from poroscan.render import render_section
from poroscan.render.bodies import make_body
from poroscan.render.scene import compose
from poroscan.render.volumes import boolean_spheres_volume, level_cut_volume


def test_level_cut_volume_has_its_porosity_and_crossings_along_each_axis(rng: np.random.Generator) -> None:
    # Rice 1945: P_L = √2/(πℓ)·exp(−t²/2), the same along every axis.
    correlation, porosity = 8.0, 0.35
    pores = level_cut_volume((96, 96, 96), porosity=porosity, correlation=correlation, rng=rng)
    expected = np.sqrt(2) / (np.pi * correlation) * np.exp(-(ndtri(porosity) ** 2) / 2)
    assert pores.mean() == pytest.approx(porosity, abs=0.03)
    for axis in range(3):
        assert (pores != np.roll(pores, 1, axis=axis)).mean() == pytest.approx(expected, rel=0.08)


def test_boolean_spheres_volume_has_its_porosity(rng: np.random.Generator) -> None:
    pores = boolean_spheres_volume((80, 90, 100), porosity=0.4, radius=7.0, rng=rng)
    assert pores.shape == (80, 90, 100)
    assert pores.mean() == pytest.approx(0.4, abs=0.03)


def test_depth_of_a_body_goes_into_the_picture(rng: np.random.Generator) -> None:
    body = make_body("spheres_3d", radius=60.0, rng=rng, pore_radius=8.0)
    assert body.depth is not None
    assert (body.depth[body.pores] >= 1).all()
    assert (body.depth[~body.pores] == 0).all()
    flat = make_body("sponge", radius=60.0, rng=rng)
    scene = compose((140, 280), [body, flat], centres=[(70.0, 70.0), (70.0, 210.0)])
    assert scene.depth is not None
    assert np.isfinite(scene.depth[scene.labels == 1]).all()
    assert np.isnan(scene.depth[scene.labels != 1]).all()
    rendered = render_section(scene.pores, scene.labels, rng=0, depth=scene.depth)
    assert rendered.truth.keys() == {1, 2}
