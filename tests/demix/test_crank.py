"""Uptake by pure diffusion through a held surface and from a stirred bath, 64 cells across the box.

Crank (1975) *The Mathematics of Diffusion*: cylinder eq 5.23, sphere eq 6.20, sphere in a stirred bath of limited volume eq 6.30;
T = Dt/a². How the surface is held between the cells stands in ``crank``.
"""

from __future__ import annotations

import numpy as np
import pytest
from crank import IDEAL, PURE, HeldDrop, share_inside
from scipy.special import j0, j1, jn_zeros

from poroscan.demix.stepper import Stepper

CYLINDER = {0.02: 0.298564, 0.05: 0.452121, 0.1: 0.605824, 0.2: 0.782148}
SPHERE = {0.02: 0.418731, 0.05: 0.606940, 0.1: 0.770479}
CYLINDER_CENTRE = {0.1: 0.151645, 0.2: 0.498513}
SPHERE_CENTRE = {0.05: 0.034001, 0.1: 0.292900}
#: Over the final uptake, by volume of the bath over that of the sphere
BATH = {1.0: {0.01: 0.490846, 0.05: 0.790519, 0.1: 0.903917}, 5.0: {0.01: 0.352521, 0.05: 0.660126, 0.1: 0.813938}}


def test_the_tables_are_those_of_the_series():
    roots = jn_zeros(0, 200)
    for time, share in CYLINDER.items():
        assert 1 - (4 / roots**2 * np.exp(-time * roots**2)).sum() == pytest.approx(share, abs=1e-6)
    for time, rise in CYLINDER_CENTRE.items():
        assert 1 - (2 / (roots * j1(roots)) * np.exp(-time * roots**2)).sum() == pytest.approx(rise, abs=1e-6)
    assert abs(j0(roots)).max() < 1e-12
    k = np.arange(1, 200)
    for time, share in SPHERE.items():
        assert 1 - (6 / (np.pi * k) ** 2 * np.exp(-time * (np.pi * k) ** 2)).sum() == pytest.approx(share, abs=1e-6)


def test_share_of_cells_inside_a_sphere():
    assert share_inside(2, 32, 11.3).sum() == pytest.approx(np.pi * 11.3**2, rel=1e-3)
    assert share_inside(3, 24, 8.3).sum() == pytest.approx(4 / 3 * np.pi * 8.3**3, rel=1e-3)


def test_cylinder():
    drop = HeldDrop(2, 64, 29.0)
    for time, share in CYLINDER.items():
        drop.run(time, 0.2)
        assert drop.uptake() == pytest.approx(share, rel=5e-3)
        if time in CYLINDER_CENTRE:
            assert drop.centre() == pytest.approx(CYLINDER_CENTRE[time], abs=2e-3)


def test_error_at_the_surface_is_of_second_order_in_the_cell():
    errors = []
    for radius, cells in ((10.0, 28), (20.0, 48)):
        drop = HeldDrop(2, cells, radius)
        drop.run(0.1, 0.05)
        errors.append(drop.uptake() / CYLINDER[0.1] - 1)
    assert 3.5 < errors[0] / errors[1] < 5


@pytest.mark.parametrize("ndim", [2, 3])
def test_diffusion_is_of_second_order_in_the_cell(ndim):
    """A Gaussian stays one, its variance grows by 2t: halving the cell quarters the error (steps as the square of the cell)."""
    errors = []
    for fine in (1, 2):
        cells, width = 28 * fine, 2.0 * fine
        x = np.arange(cells) - (cells - 1) / 2
        square = sum(np.expand_dims(x**2, [i for i in range(ndim) if i != a]) for a in range(ndim))
        stepper = Stepper(
            IDEAL,
            PURE,
            np.zeros_like(square),
            0.1 + 0.5 * _bell(square, width**2, 0, ndim),
        )
        for _ in range(10 * fine**2):
            stepper.step(0.1)
        errors.append(np.abs(stepper.fields()[1] - 0.1 - 0.5 * _bell(square, width**2, stepper.time, ndim)).max())
    assert 3.6 < errors[0] / errors[1] < 4.4


def _bell(square, variance, time, ndim):
    later = variance + 2 * time
    return (variance / later) ** (ndim / 2) * np.exp(-square / (2 * later))


@pytest.mark.slow
def test_sphere():
    drop = HeldDrop(3, 64, 29.0)
    for time, share in SPHERE.items():
        drop.run(time, 0.25)
        assert drop.uptake() == pytest.approx(share, rel=5e-3)
        if time in SPHERE_CENTRE:
            assert drop.centre() == pytest.approx(SPHERE_CENTRE[time], abs=2e-3)


@pytest.mark.slow
@pytest.mark.parametrize("bath", BATH)
def test_sphere_in_a_bath_of_limited_volume(bath):
    drop = HeldDrop(3, 64, 29.0)
    for time, share in list(BATH[bath].items())[: 3 if bath == 1 else 2]:
        drop.run(time, 0.25, bath=bath)
        assert drop.uptake() * (1 + 1 / bath) == pytest.approx(share, rel=5e-3)
