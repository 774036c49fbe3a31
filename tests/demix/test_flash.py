from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import linprog
from ternary_tables import CASES

from poroscan.demix.classify import METASTABLE_LEAN, STABLE, classify
from poroscan.demix.flash import flash
from poroscan.demix.interaction import SharePolynomial
from poroscan.demix.mixture import Mixture
from poroscan.demix.molar import mixture_from_molar
from poroscan.demix.phase_diagram import find_phase_diagram

MIXTURES = {
    "T3": CASES["T3"].mixture,
    "T8": CASES["T8"].mixture,
    "three phases": Mixture(N_p=100, chi_pn=2.7, chi_ps=0.24, chi_sn=2.2),
    "symmetric": Mixture(N_p=1, chi_pn=3.0, chi_ps=3.0, chi_sn=3.0),
    "closed loop": Mixture(N_p=20, chi_pn=0.5, chi_ps=0.5, chi_sn=-3.0),
    "two gaps": Mixture(N_p=50, chi_pn=1.2, chi_ps=0.7, chi_sn=-0.5),
    "composition-dependent": mixture_from_molar(
        volume_nonsolvent=18.0,
        volume_solvent=96.5,
        volume_polymer=9000.0,
        g_12=SharePolynomial((0.785, 0.665)),
        chi_13=2.7,
        chi_23=0.24,
    ),
}


@pytest.mark.parametrize("case", ["T1", "T3", "T8", "P1"])
def test_midpoint_of_a_tie_line_parts_in_halves(case: str) -> None:
    diagram = find_phase_diagram(CASES[case].mixture)
    for row in CASES[case].tie_lines:
        line = diagram.tie_line_at("s", float(row[1]))
        feed = 0.5 * (line.rich + line.lean)
        result = flash(diagram, feed[0], feed[2])
        np.testing.assert_allclose(result.amounts, [0.5, 0.5], atol=1e-6)
        np.testing.assert_allclose(result.phases, [line.rich, line.lean], atol=1e-6)
        assert result.residual < 1e-10


@pytest.mark.parametrize("name", MIXTURES)
def test_flash_finds_the_state_of_least_free_energy(name: str, rng: np.random.Generator) -> None:
    """Independent check: linear programming over a grid finds the convex envelope without knowing about phases.

    The flash is a mixture of phases, so its energy lies on or above the true envelope; the envelope over grid points lies
    above the true one, by the curvature of f over one cell. The flash must lie between the two.
    """
    mixture = MIXTURES[name]
    diagram = find_phase_diagram(mixture)
    ticks = np.unique(
        np.concatenate(
            [[0], np.geomspace(1e-5, 0.02, 10), np.linspace(0.03, 0.97, 43), 1 - np.geomspace(2e-2, 1e-5, 8), [1]]
        )
    )
    n, p = (x.ravel() for x in np.meshgrid(ticks, ticks))
    inside = n + p <= 1
    n, p = np.append(n[inside], 1 - ticks), np.append(p[inside], ticks)
    energy = mixture.free_energy(n, p)
    for feed in rng.dirichlet([1, 1, 1], 6):
        result = flash(diagram, feed[0], feed[2])
        # (ii) lever rule on every component
        np.testing.assert_allclose(result.amounts @ result.phases, feed, atol=1e-12)
        assert (result.amounts > -1e-12).all()
        own = float(result.amounts @ mixture.free_energy(result.phases[:, 0], result.phases[:, 2]))
        envelope = linprog(
            energy, A_eq=np.vstack([n, p, np.ones_like(n)]), b_eq=[feed[0], feed[2], 1], method="highs"
        ).fun
        assert own <= envelope + 1e-9
        assert envelope - own < 5e-3  # the grid is fine enough for the bound to mean something


def test_number_of_phases_by_place() -> None:
    diagram = find_phase_diagram(MIXTURES["T3"])
    assert flash(diagram, 0.1, 0.1).homogeneous == "stable"
    assert flash(diagram, 0.5, 0.2).homogeneous == "unstable"
    line = diagram.tie_line_at("s", 0.1)
    near_rich = 0.97 * line.rich + 0.03 * line.lean
    result = flash(diagram, near_rich[0], near_rich[2])
    assert result.homogeneous == "metastable"
    np.testing.assert_allclose(result.amounts, [0.97, 0.03], atol=1e-9)


def test_feeds_on_an_edge_use_its_binary_gap() -> None:
    diagram = find_phase_diagram(MIXTURES["T3"])
    result = flash(diagram, 0.5, 0.5)
    # N = 20, χ = 1.5: binary table
    np.testing.assert_allclose(result.phases[:, 2], [0.84812351, 1.5796243e-6], rtol=1e-6)
    np.testing.assert_allclose(result.amounts @ result.phases, [0.5, 0, 0.5], atol=1e-12)
    assert result.residual < 1e-10
    assert len(flash(diagram, 0.0, 0.5).amounts) == 1


@pytest.mark.parametrize("case", ["T6", "T8", "P1"])
def test_feeds_with_a_trace_of_one_component(case: str, rng: np.random.Generator) -> None:
    # the lean phase holds 1e-7 to 1e-190 of polymer: a feed with 1e-9 may be one phase or two, and must be told apart
    diagram = find_phase_diagram(CASES[case].mixture)
    for trace in (1e-11, 1e-9, 1e-7, 1e-5):
        for share in rng.uniform(0.02, 0.98, 4):
            rest = (1 - trace) * share
            for n, p in ((rest, 1 - trace - rest), (rest, trace), (trace, rest)):
                result = flash(diagram, n, p)  # refuses a one-phase answer that another composition undercuts
                np.testing.assert_allclose(result.amounts @ result.phases, [n, 1 - n - p, p], rtol=1e-6, atol=1e-13)
                assert result.amounts.min() >= 0


@pytest.mark.parametrize("factor", [0.5, 2.0])
def test_either_side_of_the_lean_branch(factor: float) -> None:
    # T3 at solvent 0.2: lean polymer 4.085606e-4; half of it dissolves, twice as much does not
    diagram = find_phase_diagram(MIXTURES["T3"])
    line = diagram.tie_line_at("s", 0.2)
    polymer = factor * line.lean[2]
    feed = line.lean + (polymer - line.lean[2]) / (line.rich[2] - line.lean[2]) * (line.rich - line.lean)
    assert len(flash(diagram, feed[0], feed[2]).amounts) == (2 if factor > 1 else 1)
    found = classify(diagram, phi_n=feed[0], phi_p=feed[2])
    assert int(found.state) == (METASTABLE_LEAN if factor > 1 else STABLE)


@pytest.mark.parametrize(("n", "p"), [(0, 0), (1, 0), (0, 1)])
def test_feeds_on_a_corner_are_refused(n: float, p: float) -> None:
    diagram = find_phase_diagram(MIXTURES["T3"])
    with pytest.raises(ValueError, match="lies on a corner of the composition triangle: a pure component cannot demix"):
        flash(diagram, n, p)


@pytest.mark.parametrize(("n", "p"), [(-0.1, 0.5), (0.6, 0.6), (float("nan"), 0.1)])
def test_feeds_off_the_triangle_are_refused(n: float, p: float) -> None:
    with pytest.raises(ValueError, match="must be"):
        flash(find_phase_diagram(MIXTURES["T3"]), n, p)


def test_arrays_are_refused() -> None:
    with pytest.raises(ValueError, match="must be single numbers; classify takes arrays"):
        flash(find_phase_diagram(MIXTURES["T3"]), [0.1, 0.2], [0.1, 0.1])  # type: ignore[arg-type]
