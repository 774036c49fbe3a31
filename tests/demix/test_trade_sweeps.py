"""Areas and plait points along sweeps of one parameter, and what the equations say about common statements of the trade."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from poroscan.demix.mixing_line import line_crossings
from poroscan.demix.mixture import Mixture
from poroscan.demix.phase_diagram import PhaseDiagram, find_phase_diagram

TOLERANCE = 2e-3

# χ_pn: plait n, p, binodal, spinodal, first unstable φn at φp = 0.15 (N = 20, χ_ps = 0.5, χ_sn = 1)
POLYMER_NONSOLVENT = {
    0.9: (0.67669, 0.15463, 0.1157, 0.0717, 0.6814),
    1.0: (0.60231, 0.14415, 0.2056, 0.1328, 0.5970),
    1.2: (0.47977, 0.13484, 0.3625, 0.2499, 0.4683),
    1.5: (0.33977, 0.13547, 0.5402, 0.3990, 0.3312),
    2.0: (0.19324, 0.14081, 0.7286, 0.5784, 0.1897),
    2.5: (0.11816, 0.13961, 0.8329, 0.6922, 0.1154),
    3.0: (0.07876, 0.13516, 0.8915, 0.7653, 0.0759),
}
# χ_sn: plait n, p (None: there is none), binodal, spinodal, first unstable φn (N = 20, χ_pn = 1.5, χ_ps = 0.5)
SOLVENT_NONSOLVENT = {
    -1.0: (0.07033, 0.15018, 0.8494, 0.6730, 0.0704),
    0.0: (0.15752, 0.15996, 0.7129, 0.5411, 0.1612),
    0.5: (0.24439, 0.15678, 0.6164, 0.4609, 0.2478),
    1.0: (0.33977, 0.13547, 0.5402, 0.3990, 0.3312),
    1.5: (0.41394, 0.08486, 0.5188, 0.3749, 0.3723),
    1.8: (0.44828, 0.03753, 0.5416, 0.3818, 0.3733),
    1.95: (0.47495, 0.00840, 0.5691, 0.3933, 0.3671),
    2.0: (None, None, 0.5826, 0.3989, 0.3641),
    2.2: (None, None, 0.6359, 0.4189, 0.3470),
    2.4: (None, None, 0.6816, 0.4405, 0.3221),
    2.7: (None, None, 0.7367, 0.4786, 0.2725),
    3.0: (None, None, 0.7790, 0.5221, 0.2167),
}
# the same for N = 100, χ_pn = 1.4, χ_ps = 0.45: binodal, spinodal
LONGER_CHAIN = {
    0.0: (0.7577, 0.6023),
    0.5: (0.6640, 0.5169),
    1.0: (0.5750, 0.4385),
    1.5: (0.5400, 0.3991),
    1.9: (0.5634, 0.3995),
    2.0: (0.5793, 0.4044),
    2.1: (0.6041, 0.4103),
    2.5: (0.6941, 0.4489),
}
# χ_ps: binodal, spinodal (N = 20, χ_pn = 1.5, χ_sn = 1)
POLYMER_SOLVENT = {
    -0.5: (0.5381, 0.3769),
    0.0: (0.5184, 0.3713),
    0.2: (0.5189, 0.3761),
    0.4: (0.5290, 0.3883),
    0.5: (0.5402, 0.3990),
    0.6: (0.5591, 0.4150),
    0.7: (0.5937, 0.4416),
}
# N: binodal, spinodal (χ_pn = 1.5, χ_ps = 0.4, χ_sn = 0.5)
CHAIN_LENGTH = {
    5: (0.3232, 0.2133),
    10: (0.4885, 0.3461),
    20: (0.5866, 0.4370),
    50: (0.6573, 0.5093),
    100: (0.6861, 0.5402),
    200: (0.7031, 0.5586),
}


def _diagram(*, size: float = 20, pn: float = 1.5, ps: float = 0.5, sn: float = 1.0) -> PhaseDiagram:
    return find_phase_diagram(Mixture(N_p=size, chi_pn=pn, chi_ps=ps, chi_sn=sn))


def _first_unstable(diagram: PhaseDiagram) -> float:
    crossings = line_crossings(diagram, np.array([0, 0.85, 0.15]), np.array([0.85, 0, 0.15]))
    return next(float(c.phi[0]) for c in crossings if c.boundary == "spinodal")


def _check_row(diagram: PhaseDiagram, row: tuple[float | None, ...]) -> None:
    if row[0] is None:
        assert len(diagram.stable_plaits) == 0
    else:
        np.testing.assert_allclose(diagram.stable_plaits[:, [0, 2]], [row[:2]], atol=2e-5)
    assert diagram.binodal_area == pytest.approx(row[2], abs=TOLERANCE)
    assert diagram.spinodal_area == pytest.approx(row[3], abs=TOLERANCE)
    assert _first_unstable(diagram) == pytest.approx(row[4], abs=2e-4)


@pytest.mark.slow
@pytest.mark.parametrize("chi", POLYMER_NONSOLVENT)
def test_polymer_nonsolvent_sweep(chi: float) -> None:
    _check_row(_diagram(pn=chi), POLYMER_NONSOLVENT[chi])


@pytest.mark.slow
@pytest.mark.parametrize("chi", SOLVENT_NONSOLVENT)
def test_solvent_nonsolvent_sweep(chi: float) -> None:
    _check_row(_diagram(sn=chi), SOLVENT_NONSOLVENT[chi])


@pytest.mark.slow
@pytest.mark.parametrize("chi", LONGER_CHAIN)
def test_solvent_nonsolvent_sweep_of_a_longer_chain(chi: float) -> None:
    diagram = _diagram(size=100, pn=1.4, ps=0.45, sn=chi)
    assert (diagram.binodal_area, diagram.spinodal_area) == pytest.approx(LONGER_CHAIN[chi], abs=TOLERANCE)


@pytest.mark.slow
@pytest.mark.parametrize("chi", POLYMER_SOLVENT)
def test_polymer_solvent_sweep(chi: float) -> None:
    diagram = _diagram(ps=chi)
    assert (diagram.binodal_area, diagram.spinodal_area) == pytest.approx(POLYMER_SOLVENT[chi], abs=TOLERANCE)


@pytest.mark.slow
@pytest.mark.parametrize("size", CHAIN_LENGTH)
def test_chain_length_sweep(size: int) -> None:
    diagram = _diagram(size=size, ps=0.4, sn=0.5)
    assert (diagram.binodal_area, diagram.spinodal_area) == pytest.approx(CHAIN_LENGTH[size], abs=TOLERANCE)


def test_raising_chi_pn_widens_the_gap_and_the_unstable_region() -> None:
    # common practice, no source; holds
    diagrams = [_diagram(pn=chi) for chi in (0.9, 1.5, 2.5)]
    for earlier, later in pairwise(diagrams):
        assert later.binodal_area > earlier.binodal_area
        assert later.spinodal_area > earlier.spinodal_area


def test_past_the_critical_chi_sn_the_unstable_area_grows_and_only_its_share_falls() -> None:
    # the statement "the spinodal region shrinks" is not supported as an area: 0.3989 → 0.4405 from χ_sn = 2 to 2.4
    at, past = _diagram(sn=2.0), _diagram(sn=2.4)
    assert past.spinodal_area > at.spinodal_area
    assert past.spinodal_area / past.binodal_area < at.spinodal_area / at.binodal_area
    assert past.binodal_area - past.spinodal_area > at.binodal_area - at.spinodal_area


@pytest.mark.parametrize(("chi", "plait"), [(2.00, True), (2.02, False)])
def test_the_plait_point_of_a_longer_chain_goes_between_2_and_2_02(chi: float, plait: bool) -> None:
    # N = 100, χ_pn = 1.4, χ_ps = 0.45: it goes at 2.01 to 2.02, later than for N = 20
    diagram = _diagram(size=100, pn=1.4, ps=0.45, sn=chi)
    assert bool(len(diagram.stable_plaits)) == plait
