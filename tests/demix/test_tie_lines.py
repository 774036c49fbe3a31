from __future__ import annotations

from functools import cache

import mpmath
import numpy as np
import pytest
from ternary_tables import CASES

from poroscan.demix.equilibrium import potential_gap
from poroscan.demix.mixture import Mixture
from poroscan.demix.phase_diagram import PhaseDiagram, find_phase_diagram


@cache
def diagram_of(case: str) -> PhaseDiagram:
    return find_phase_diagram(CASES[case].mixture)


@pytest.mark.parametrize("case", CASES)
def test_tie_lines_plait_point_and_areas(case: str) -> None:
    expected, diagram = CASES[case], diagram_of(case)
    assert len(diagram.regions) == 1
    assert not diagram.triangles
    for row in expected.tie_lines:
        printed = [float(x) for x in row]
        line = diagram.tie_line_at("s", printed[1])
        np.testing.assert_allclose(line.rich, printed[:3], atol=1e-5)
        np.testing.assert_allclose(line.lean, printed[3:], atol=1e-5)
        # by the text: 1.2460e-190 and smaller keep their digits in the logarithm
        assert line.log_lean[2] / np.log(10) == pytest.approx(float(mpmath.log10(mpmath.mpf(row[5]))), abs=1e-4)
        assert line.residual < 1e-10
    if expected.plait is None:
        assert len(diagram.stable_plaits) == 0
    else:
        np.testing.assert_allclose(diagram.stable_plaits, [expected.plait], atol=1e-6)
    assert diagram.binodal_area == pytest.approx(expected.areas[0], abs=1e-3)
    assert diagram.spinodal_area == pytest.approx(expected.areas[1], abs=1e-3)


def test_no_plait_point_is_said_by_the_ends_of_the_region() -> None:
    # T7: χ_sn = 2 puts the plait point into the critical point of the s–n edge; T8: the band runs from edge to edge
    assert diagram_of("T7").regions[0].ends == ("edge pn", "critical edge")
    assert diagram_of("T8").regions[0].ends == ("edge pn", "edge sn")
    # T8 ends in the binary pair of χ = 2.4, N = 1
    np.testing.assert_allclose(diagram_of("T8").regions[0].rich[-1], [0.170715, 0.829285, 0], atol=1e-6)


@pytest.mark.parametrize("case", ["T3", "T6", "T8", "P1", "P2"])
def test_every_tie_line_is_polished(case: str) -> None:
    # (i) equality of all three molecular potentials, for every tie line of the family and not only the tabulated ones
    diagram = diagram_of(case)
    for logs in diagram.regions[0].logs:
        if np.isfinite(logs).all():
            assert potential_gap(diagram.mixture, logs) < 1e-10


@pytest.mark.parametrize(("case", "solvent"), [("T3", 0.3), ("T6", 0.1), ("P1", 0.1), ("P2", 0.3)])
def test_a_forty_digit_solution_of_the_equations_agrees(case: str, solvent: float) -> None:
    """Second implementation: the textbook potentials in mpmath, solved by its own Newton iteration."""
    (size_p, size_s, size_n), (pn, ps, sn) = CASES[case].sizes, CASES[case].chi
    line = diagram_of(case).tie_line_at("s", solvent)
    sizes = [size_n, size_s, size_p]
    chi = [[0, sn, pn], [sn, 0, ps], [pn, ps, 0]]

    def potential(logs: list, i: int):
        phi = [mpmath.exp(x) for x in logs]
        own = (logs[i] + 1) / sizes[i] - sum(f / n for f, n in zip(phi, sizes, strict=True))
        pairs = sn * phi[0] * phi[1] + pn * phi[0] * phi[2] + ps * phi[1] * phi[2]
        return own + sum(chi[i][j] * phi[j] for j in range(3)) - pairs

    def equations(*x):
        rich, lean = list(x[:3]), list(x[3:])
        equal = [potential(rich, i) - potential(lean, i) for i in range(3)]
        sums = [sum(mpmath.exp(v) for v in phase) - 1 for phase in (rich, lean)]
        return [*equal, *sums, mpmath.exp(rich[1]) - mpmath.mpf(solvent)]

    with mpmath.workdps(40):
        start = [mpmath.mpf(float(v)) * mpmath.mpf("1.0001") for v in (*line.log_rich, *line.log_lean)]
        solution = mpmath.findroot(equations, start, tol=1e-50)
        logs = [float(v) for v in solution]
    np.testing.assert_allclose([*line.log_rich, *line.log_lean], logs, rtol=1e-10)


def test_neutral_solvent_has_a_closed_form() -> None:
    # N = 1, χ_ps = χ_sn: equal solvent on both sides, ln((1−x)/x) = χ_pn (1−φs)(1−2x), plait at φs = 1 − 2/χ_pn
    diagram = diagram_of("T9")
    for line in diagram.regions[0].logs[1::10]:
        n, s, p = np.exp(line)
        assert s[0] == pytest.approx(s[1], abs=1e-12)
        x = p[1] / (p[1] + n[1])
        assert np.log((1 - x) / x) == pytest.approx(4 * (1 - s[1]) * (1 - 2 * x), abs=1e-9)
    np.testing.assert_allclose(diagram.stable_plaits, [[0.25, 0.5, 0.25]], atol=1e-9)


@pytest.mark.parametrize("case", ["T3", "P1"])
def test_plait_point_satisfies_both_of_its_equations(case: str) -> None:
    # det H = 0 and G_n H_pp − G_p H_np = 0 with G = ∇ det H, by differences of the Hessian
    mixture = CASES[case].mixture
    (n, _, p), step = diagram_of(case).stable_plaits[0], 1e-5

    def determinant(a: float, b: float) -> float:
        nn, cross, pp = mixture.hessian(a, b)
        return float(nn * pp - cross**2)

    nn, cross, pp = mixture.hessian(n, p)
    slope_n = (determinant(n + step, p) - determinant(n - step, p)) / (2 * step)
    slope_p = (determinant(n, p + step) - determinant(n, p - step)) / (2 * step)
    assert abs(determinant(n, p)) < 1e-7 * abs(nn * pp)
    assert abs(slope_n * pp - slope_p * cross) < 1e-4 * abs(slope_n * pp)


def test_swapping_solvent_and_nonsolvent_swaps_the_diagram() -> None:
    # (iv) relabelling: χ_pn ↔ χ_ps; the gap moves to the other edge and is otherwise the same
    plain = diagram_of("T3")
    swapped = find_phase_diagram(Mixture(N_p=20, chi_pn=0.5, chi_ps=1.5, chi_sn=1.0))
    assert swapped.regions[0].ends == ("edge ps", "plait")
    np.testing.assert_allclose(swapped.stable_plaits[:, [1, 0, 2]], plain.stable_plaits, atol=1e-9)
    assert swapped.binodal_area == pytest.approx(plain.binodal_area, abs=1e-4)
    assert swapped.spinodal_area == pytest.approx(plain.spinodal_area, abs=1e-4)
    line = swapped.tie_line_at("n", 0.3)
    np.testing.assert_allclose(line.lean[[1, 0, 2]], plain.tie_line_at("s", 0.3).lean, atol=1e-9)


@pytest.mark.parametrize("factor", [2.5, 10])
def test_sizes_times_k_and_parameters_over_k_change_nothing(factor: float) -> None:
    # (v) only N·χ matters for the compositions
    plain = diagram_of("T3")
    scaled = find_phase_diagram(
        Mixture(N_p=20 * factor, N_s=factor, N_n=factor, chi_pn=1.5 / factor, chi_ps=0.5 / factor, chi_sn=1.0 / factor)
    )
    for solvent in (0.05, 0.3, 0.5):
        a, b = plain.tie_line_at("s", solvent), scaled.tie_line_at("s", solvent)
        np.testing.assert_allclose(a.log_rich, b.log_rich, rtol=1e-9)
        np.testing.assert_allclose(a.log_lean, b.log_lean, rtol=1e-9)
    np.testing.assert_allclose(plain.stable_plaits, scaled.stable_plaits, atol=1e-9)


def test_asking_for_a_tie_line_that_is_not_there() -> None:
    diagram = diagram_of("T3")
    with pytest.raises(ValueError, match=r"no tie line of region 0 has phi_s = 0.9 .* runs from 0 to 0\.52"):
        diagram.tie_line_at("s", 0.9)
    with pytest.raises(ValueError, match="component must be one of n, s, p"):
        diagram.tie_line_at("x", 0.1)  # type: ignore[arg-type]
    with pytest.raises(ValueError, match="phase must be rich or lean"):
        diagram.tie_line_at("s", 0.1, phase="poor")  # type: ignore[arg-type]
    mixed = find_phase_diagram(Mixture(N_p=20, chi_pn=0.3, chi_ps=0.3, chi_sn=0.3))
    with pytest.raises(ValueError, match="no two-phase region"):
        mixed.tie_line_at("s", 0.1)
