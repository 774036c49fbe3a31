"""Diagrams of random mixtures, constant and composition-dependent: found, consistent, and of least free energy."""

from __future__ import annotations

import numpy as np
import pytest

from poroscan.demix.equilibrium import potential_gap
from poroscan.demix.flash import flash
from poroscan.demix.interaction import SharePolynomial, ShareRational
from poroscan.demix.mixture import Mixture
from poroscan.demix.phase_diagram import PhaseDiagram, find_phase_diagram


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


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["constant", "polynomial", "rational"])
def test_many_random_mixtures(kind: str, rng: np.random.Generator) -> None:
    for _ in range(20):
        _check(find_phase_diagram(_random_mixture(rng, kind)), rng)
