from __future__ import annotations

import numpy as np
import pytest
from ternary_tables import CASES

from poroscan.demix.classify import METASTABLE_LEAN, METASTABLE_RICH, STABLE, UNSTABLE, classify
from poroscan.demix.flash import flash
from poroscan.demix.mixing_line import line_crossings
from poroscan.demix.mixture import Mixture
from poroscan.demix.phase_diagram import PhaseDiagram, find_phase_diagram


@pytest.fixture(scope="module")
def diagram() -> PhaseDiagram:
    return find_phase_diagram(CASES["T3"].mixture)


@pytest.mark.parametrize("case", ["T3", "T6", "T8", "P1"])
def test_binodal_encloses_spinodal_and_touches_it_only_in_the_plait_point(case: str) -> None:
    # (iii)
    found = find_phase_diagram(CASES[case].mixture)
    curve = np.concatenate(found.spinodal.curves)
    plait = found.stable_plaits
    apart = np.abs(curve - plait[0]).max(axis=1) > 0.02 if len(plait) else np.ones(len(curve), dtype=bool)
    away = curve[apart & (curve.min(axis=1) > 1e-9)]
    assert len(away) > 100
    assert (classify(found, phi_n=away[:, 0], phi_p=away[:, 2]).region >= 0).all()
    # every phase of a tie line is itself stable, and less so the nearer the plait point
    for branch in (found.regions[0].rich, found.regions[0].lean):
        assert (found.mixture.stability(branch[:, 0], branch[:, 2]) > 0).all()
    if len(plait):
        assert abs(found.mixture.stability(plait[0, 0], plait[0, 2])) < 1e-9


def test_spinodal_points_lie_on_the_spinodal(diagram: PhaseDiagram) -> None:
    for curve in diagram.spinodal.curves:
        assert np.abs(diagram.mixture.stability(curve[:, 0], curve[:, 2])).max() < 1e-10


@pytest.mark.parametrize("case", ["T3", "T8"])
def test_areas_agree_with_counting_random_points(case: str, rng: np.random.Generator) -> None:
    # Monte Carlo, 3 standard errors: another way to both areas
    found = find_phase_diagram(CASES[case].mixture)
    points = rng.dirichlet([1, 1, 1], 40000)
    state = classify(found, phi_n=points[:, 0], phi_p=points[:, 2]).state
    for area, hits in ((found.binodal_area, state != STABLE), (found.spinodal_area, state == UNSTABLE)):
        assert abs(hits.mean() - area) < 3 * np.sqrt(area * (1 - area) / len(points))


def test_classification_agrees_with_the_flash(diagram: PhaseDiagram, rng: np.random.Generator) -> None:
    points = rng.dirichlet([1, 1, 1], 60)
    found = classify(diagram, phi_n=points[:, 0], phi_p=points[:, 2])
    for k, point in enumerate(points):
        result = flash(diagram, point[0], point[2])
        assert (len(result.amounts) == 1) == (found.state[k] == STABLE)
        assert (result.homogeneous == "unstable") == (found.state[k] == UNSTABLE)
        if len(result.amounts) == 2:
            assert found.lever[k] == pytest.approx(result.amounts[0], abs=2e-3)
        else:
            assert np.isnan(found.lever[k])


@pytest.mark.parametrize("solvent", [0.1, 0.3, 0.45])
def test_sides_along_a_tie_line(diagram: PhaseDiagram, solvent: float) -> None:
    line = diagram.tie_line_at("s", solvent)
    share = np.linspace(0.001, 0.999, 400)
    points = line.lean + share[:, None] * (line.rich - line.lean)
    found = classify(diagram, phi_n=points[:, 0], phi_p=points[:, 2])
    order = found.state.tolist()
    # from the lean end: metastable lean, unstable, metastable rich, each in one stretch
    changes = [a for a, b in zip(order, [*order[1:], -1], strict=True) if a != b]
    assert changes == [METASTABLE_LEAN, UNSTABLE, METASTABLE_RICH]
    assert (np.diff(found.side) >= 0).all()
    np.testing.assert_allclose(found.lever, share, atol=2e-3)
    # the sides part half-way between the spinodal crossings
    unstable = share[found.state == UNSTABLE]
    assert share[np.argmax(found.side > 0)] == pytest.approx(unstable[[0, -1]].mean(), abs=5e-3)


def test_outside_the_gap_the_side_is_that_of_the_nearer_branch(diagram: PhaseDiagram) -> None:
    found = classify(diagram, phi_n=[0.05, 0.3], phi_p=[0.6, 0.02])
    assert found.state.tolist() == [STABLE, STABLE]
    assert found.side.tolist() == [1, -1]
    assert found.region.tolist() == [-1, -1]


def test_classification_keeps_the_shape_and_takes_a_single_point(diagram: PhaseDiagram) -> None:
    assert classify(diagram, phi_n=np.full((3, 4), 0.5), phi_p=np.full((3, 4), 0.2)).state.shape == (3, 4)
    assert int(classify(diagram, phi_n=0.5, phi_p=0.2).state) == UNSTABLE


def test_without_a_gap_everything_is_stable() -> None:
    mixed = find_phase_diagram(Mixture(N_p=20, chi_pn=0.3, chi_ps=0.3, chi_sn=0.3))
    found = classify(mixed, phi_n=[0.2, 0.5], phi_p=[0.3, 0.1])
    assert found.state.tolist() == [STABLE, STABLE]
    assert found.side.tolist() == [0, 0]


def test_inside_a_triangle_the_region_says_so() -> None:
    three = find_phase_diagram(Mixture(N_p=100, chi_pn=2.7, chi_ps=0.24, chi_sn=2.2))
    centre = three.triangles[0].phases.mean(axis=0)
    found = classify(three, phi_n=centre[0], phi_p=centre[2])
    assert int(found.region) == -2
    assert float(found.lever) == pytest.approx(1 / 3)


def test_crossings_of_a_tie_line_extended_are_its_phases(diagram: PhaseDiagram) -> None:
    line = diagram.tie_line_at("s", 0.3)
    along = line.rich - line.lean
    start, end = line.rich + 0.1 * along, line.lean - 0.004 * along
    crossings = line_crossings(diagram, start, end)
    assert [(c.boundary, c.entering) for c in crossings] == [
        ("binodal", True),
        ("spinodal", True),
        ("spinodal", False),
        ("binodal", False),
    ]
    np.testing.assert_allclose(crossings[0].phi, line.rich, atol=1e-4)
    np.testing.assert_allclose(crossings[-1].phi, line.lean, atol=1e-4)
    assert [c.side for c in crossings] == [1, 1, -1, -1]
    for c in crossings[1:3]:
        assert abs(diagram.mixture.stability(c.phi[0], c.phi[2])) < 1e-9


def test_a_line_that_is_off_the_triangle_is_refused(diagram: PhaseDiagram) -> None:
    with pytest.raises(ValueError, match="start must be three volume fractions"):
        line_crossings(diagram, np.array([0.5, 0.5, 0.5]), np.array([1.0, 0, 0]))


def test_closed_loop_is_found_without_any_gap_on_an_edge() -> None:
    # strong attraction of solvent and non-solvent: none of the three pairs demixes, the ternary does
    # (for N = 1 and χ_ps = χ_pn the loop is symmetric about φn = φs)
    loop = find_phase_diagram(Mixture(N_p=1, chi_pn=1.0, chi_ps=1.0, chi_sn=-6.0))
    assert [region.ends for region in loop.regions] == [("plait", "plait")]
    first, last = loop.stable_plaits
    np.testing.assert_allclose(first, last[[1, 0, 2]], atol=1e-8)
    assert loop.binodal_area > loop.spinodal_area > 0.2


@pytest.mark.parametrize("case", ["T3", "T6"])
def test_classification_tells_traces_of_polymer_apart_between_the_tie_lines(case: str) -> None:
    # the exact lean phase of tie lines half-way between those of the family: 1 % less polymer dissolves, 1 % more does not
    found = find_phase_diagram(CASES[case].mixture)
    solvent = found.regions[0].rich[:, 1]
    for value in 0.5 * (solvent[10:-40:8] + solvent[11:-39:8]):
        line = found.tie_line_at("s", float(value))
        if line.lean[2] < 1e-9:
            continue  # below the rounding of phi_s = 1 − phi_n − phi_p
        step = (line.rich - line.lean) / (line.rich[2] - line.lean[2])
        less, more = (line.lean + change * line.lean[2] * step for change in (-0.01, 0.01))
        assert int(classify(found, phi_n=less[0], phi_p=less[2]).state) == STABLE
        assert int(classify(found, phi_n=more[0], phi_p=more[2]).state) == METASTABLE_LEAN


def test_classification_of_traces_agrees_with_the_flash() -> None:
    found = find_phase_diagram(CASES["T6"].mixture)
    n = np.linspace(0.2, 0.99, 40)
    for polymer in (1e-11, 1e-9, 1e-7):
        states = classify(found, phi_n=n, phi_p=np.full_like(n, polymer)).state
        phases = np.array([len(flash(found, a, polymer).amounts) for a in n])
        assert ((states != STABLE) == (phases > 1)).mean() > 0.97
