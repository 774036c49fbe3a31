"""py-pde (a general-purpose PDE library) as a second implementation of the binary Cahn–Hilliard equation."""

from __future__ import annotations

import numpy as np
import pytest
from solver_cases import BINARY, quiet_settings

from poroscan.demix.stepper import Stepper

#: c_t = ∇·(c(1−c)∇μ), μ = ln c − ln(1−c) + χ(1 − 2c) − κ∇²c: the ideal part is ∇²c.
KAPPA, CHI = 12.0, 3.0


def second_solution(start, time, dt):
    """Explicit steps of py-pde on the same periodic grid."""
    import pde

    grid = pde.CartesianGrid([[0, n] for n in start.shape], list(start.shape), periodic=True)
    equation = pde.PDE({"c": f"laplace(c) + divergence(c * (1 - c) * gradient({-2 * CHI} * c - {KAPPA} * laplace(c)))"})
    state = pde.ScalarField(grid, start)
    return equation.solve(state, t_range=time, dt=dt, solver="explicit", backend="numba", tracker=None).data


def our_solution(start, time, dt):
    from dataclasses import replace

    settings = quiet_settings(kappa_polymer=KAPPA, polymer_mobility=1.0)
    stepper = Stepper(replace(BINARY, chi_ps=CHI), settings, start, np.zeros_like(start))
    for _ in range(round(time / dt)):
        stepper.step(dt)
    return stepper.fields()[0]


def smooth_start(size, rng):
    modes = np.zeros((size, size))
    x = 2 * np.pi * np.arange(size) / size
    for a in range(2):
        for b in range(2):
            u, v = rng.uniform(0, 2 * np.pi, 2)
            modes += np.cos(a * x + u)[:, None] * np.cos(b * x + v)[None, :]
    return 0.5 + 0.03 * modes / modes.std()


@pytest.mark.slow
@pytest.mark.filterwarnings("ignore")
def test_py_pde_agrees(rng):
    """The stencils differ, both are of second order: the difference is a few per cent of the contrast on the coarse grid."""
    start = smooth_start(32, rng)
    time = 30.0
    theirs, ours = second_solution(start, time, dt=8e-3), our_solution(start, time, dt=0.02)
    assert theirs.std() > 1.15 * start.std()  # it demixes
    assert np.abs(ours - theirs).max() < 0.08 * np.ptp(theirs)
    assert np.sqrt(((ours - theirs) ** 2).mean()) < 0.05 * theirs.std()
