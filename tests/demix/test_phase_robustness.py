"""Diagrams of random mixtures, constant and composition-dependent: found, consistent, and of least free energy."""

from __future__ import annotations

import numpy as np
import pytest

from poroscan.demix.equilibrium import potential_gap
from poroscan.demix.flash import flash
from poroscan.demix.interaction import ChiFunction, SharePolynomial, ShareRational
from poroscan.demix.mixture import Mixture
from poroscan.demix.phase_diagram import PhaseDiagram, find_phase_diagram
from poroscan.errors import SimulationError


def _random_mixture(rng: np.random.Generator, kind: str) -> Mixture:
    sn = float(rng.uniform(-2, 3.2))
    share = {
        "constant": sn,
        "polynomial": SharePolynomial((sn, *map(float, rng.uniform(-0.8, 0.8, 3)))),
        "rational": ShareRational(sn - 0.6, float(rng.uniform(0.2, 0.6)), float(rng.uniform(-0.5, 0.75))),
    }
    return Mixture(
        N_p=float(np.exp(rng.uniform(0, np.log(2000)))),
        N_s=float(rng.choice([1, 2, 5])),
        N_n=float(rng.choice([1, 1, 3])),
        chi_pn=float(rng.uniform(0.3, 4)),
        chi_ps=float(rng.uniform(-1, 1.5)),
        chi_sn=share[kind],
    )


def _check(diagram: PhaseDiagram, rng: np.random.Generator) -> None:
    assert 0 <= diagram.spinodal_area <= diagram.binodal_area + 1e-3 <= 1.001
    for region in diagram.regions:
        gaps = [potential_gap(diagram.mixture, logs) for logs in region.logs[::7] if np.isfinite(logs).all()]
        assert max(gaps, default=0.0) < 1e-9
    for feed in rng.dirichlet([1, 1, 1], 5):
        result = flash(diagram, feed[0], feed[2])  # refuses a one-phase answer that another composition undercuts
        np.testing.assert_allclose(result.amounts @ result.phases, feed, atol=1e-10)
        if result.homogeneous == "unstable":
            assert len(result.amounts) > 1


@pytest.mark.parametrize("kind", ["constant", "polynomial", "rational"])
def test_a_few_random_mixtures(kind: str, rng: np.random.Generator) -> None:
    for _ in range(3):
        _check(find_phase_diagram(_random_mixture(rng, kind)), rng)


def test_a_parameter_that_is_no_number_in_a_corner_is_refused() -> None:
    # finite at the compositions checked when the mixture is made, NaN in concentrated polymer
    holed = ChiFunction(
        lambda n, s, p: np.where(p > 0.95, np.nan, 1.0),
        lambda n, s, p: (0 * n,) * 3,
        lambda n, s, p: (0 * n,) * 6,
    )
    mixture = Mixture(N_p=20, chi_pn=1.5, chi_ps=0.5, chi_sn=holed)
    with pytest.raises(
        SimulationError, match=r"the free energy is not a number at phi_n=.*mend the interaction parameter"
    ):
        find_phase_diagram(mixture)


EXTREMES = {
    "ideal": (1.0, 0.0, 0.0, 0.0),
    "very long chain": (1e6, 2.0, 0.3, 0.8),
    "strong": (200.0, 12.0, 0.4, 1.0),
    "strong attraction": (50.0, 1.5, -6.0, -6.0),
    "all immiscible": (100.0, 5.0, 3.0, 4.0),
    "just above critical": (20.0, 0.7487, 0.0, 0.0),
}


@pytest.mark.parametrize("name", EXTREMES)
def test_extremes(name: str, rng: np.random.Generator) -> None:
    size, pn, ps, sn = EXTREMES[name]
    diagram = find_phase_diagram(Mixture(N_p=size, chi_pn=pn, chi_ps=ps, chi_sn=sn))
    _check(diagram, rng)
    assert bool(diagram.regions) == (name != "ideal")


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["constant", "polynomial", "rational"])
def test_many_random_mixtures(kind: str, rng: np.random.Generator) -> None:
    for _ in range(20):
        _check(find_phase_diagram(_random_mixture(rng, kind)), rng)
