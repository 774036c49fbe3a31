from __future__ import annotations

import math

import numpy as np
import pytest

from poroscan.demix.flash import flash
from poroscan.demix.mixture import Mixture, site_potentials
from poroscan.demix.phase_diagram import PhaseDiagram, find_phase_diagram


@pytest.fixture(scope="module")
def published() -> PhaseDiagram:
    return find_phase_diagram(Mixture(N_p=100, chi_pn=2.7, chi_ps=0.24, chi_sn=2.2))


def test_triangle_and_plait_points(published: PhaseDiagram) -> None:
    # N=100, χ_pn=2.7, χ_ps=0.24, χ_sn=2.2: solved at 40 digits, stable; one plait point stable, one inside the larger gap
    (triangle,) = published.triangles
    expected = [[0.155133, 0.729081, 0.115786], [0.246972, 0.752070, 9.57584e-4], [0.751489, 0.248511, 1.490e-57]]
    np.testing.assert_allclose(triangle.phases[:2], expected[:2], atol=1e-6)
    np.testing.assert_allclose(triangle.phases[2], expected[2], atol=1e-6)
    assert triangle.logs[2, 2] / math.log(10) == pytest.approx(math.log10(1.490e-57), abs=1e-3)
    assert triangle.residual < 1e-10
    assert [plait.stable for plait in published.plaits] == [True, False]
    np.testing.assert_allclose(published.plaits[0].phi[[0, 2]], [0.191550, 0.030430], atol=2e-6)
    np.testing.assert_allclose(published.plaits[1].phi[[0, 2]], [0.343250, 1.2e-4], atol=6e-6)


def test_three_two_phase_regions_leave_the_triangle(published: PhaseDiagram) -> None:
    ends = sorted(region.ends for region in published.regions)
    assert ends == [("edge pn", "triangle"), ("edge sn", "triangle"), ("triangle", "plait")]
    # each side of the triangle is the last tie line of one region
    corners = published.triangles[0].phases
    for region in published.regions:
        side = np.exp(region.logs[0 if region.ends[0] == "triangle" else -1]).T
        assert all(np.abs(corners - phase).max(axis=1).min() < 1e-9 for phase in side)


def test_families_are_cut_where_the_third_phase_takes_over(published: PhaseDiagram) -> None:
    # past the side of the triangle a tie line still solves the equations, but the third phase lies below its plane
    mixture, (triangle,) = published.mixture, published.triangles
    phases = triangle.phases.T
    energy = mixture.free_energy(phases[0], phases[2])
    for region in published.regions:
        for logs in region.logs:
            if np.isfinite(logs).all():
                plane = site_potentials(mixture, logs)[:, 0]
                assert (energy - plane @ phases).min() > -1e-12


def test_flash_inside_the_triangle_gives_three_phases(published: PhaseDiagram) -> None:
    amounts = np.array([0.2, 0.5, 0.3])
    feed = amounts @ published.triangles[0].phases
    result = flash(published, feed[0], feed[2])
    np.testing.assert_allclose(result.phases, published.triangles[0].phases, atol=1e-12)
    np.testing.assert_allclose(result.amounts, amounts, atol=1e-9)


@pytest.mark.parametrize(
    ("chi", "a", "b"), [(2.8, 0.6992029, 0.1503986), (3.0, 0.8109168, 0.0945416), (3.5, 0.9129011, 0.0435494)]
)
def test_symmetric_mixture(chi: float, a: float, b: float) -> None:
    # N = 1, equal χ: phases (a, b, b) with ln(a/b) = χ(a − b), a + 2b = 1
    (triangle,) = find_phase_diagram(Mixture(N_p=1, chi_pn=chi, chi_ps=chi, chi_sn=chi)).triangles
    np.testing.assert_allclose(np.sort(triangle.phases, axis=1), [[b, b, a]] * 3, atol=1e-7)
    a, b = triangle.phases.max(), triangle.phases.min()
    assert math.log(a / b) == pytest.approx(chi * (a - b), abs=1e-10)


def test_symmetric_threshold_is_first_order() -> None:
    # at χ = 4 ln 2 = 2.772589 the phases (2/3, 1/6, 1/6) coexist with the even mixture (mean-field Potts, q = 3; Wu 1982);
    # just below it the even mixture is stable and takes part in three triangles, just above it is gone
    threshold = 4 * math.log(2)
    below = find_phase_diagram(
        Mixture(N_p=1, chi_pn=threshold - 2e-3, chi_ps=threshold - 2e-3, chi_sn=threshold - 2e-3)
    )
    assert len(below.triangles) == 3
    assert all(np.abs(t.phases - 1 / 3).max(axis=1).min() < 0.01 for t in below.triangles)
    assert len(flash(below, 1 / 3, 1 / 3).amounts) == 1
    above = find_phase_diagram(
        Mixture(N_p=1, chi_pn=threshold + 2e-3, chi_ps=threshold + 2e-3, chi_sn=threshold + 2e-3)
    )
    assert len(above.triangles) == 1
    np.testing.assert_allclose(np.sort(above.triangles[0].phases, axis=1), [[1 / 6, 1 / 6, 2 / 3]] * 3, atol=5e-3)


def test_symmetric_centre_turns_unstable_at_three() -> None:
    for chi, stable in ((2.999, True), (3.001, False)):
        mixture = Mixture(N_p=1, chi_pn=chi, chi_ps=chi, chi_sn=chi)
        assert (mixture.stability(1 / 3, 1 / 3) > 0) == stable
