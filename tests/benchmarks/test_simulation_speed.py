"""Speed of the particle solver as ratios within one run; prints a table, asserts nothing about the clock."""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from scipy import fft

from poroscan.demix.mixture import Mixture
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.demix.stepper import Stepper

pytestmark = [pytest.mark.benchmark, pytest.mark.filterwarnings("ignore")]
MIXTURE = Mixture(N_p=20, chi_pn=2.5, chi_ps=0.5, chi_sn=0.5)

#: What two processes do side by side, each on a core of its own: CPU time of a step of a 256² particle, best of short rounds.
#: CPU time, so that what else runs on the machine does not count, but what the two take from each other (cache, memory) does.
RUN = """
import os, sys, time
os.sched_setaffinity(0, {{{core}}})
sys.path.insert(0, {here!r})
from test_simulation_speed import stepper
s = stepper((256, 256)); s.step(0.5)
print("ready", flush=True); sys.stdin.readline()
best = 1e9
for _ in range(40):
    start = time.process_time()
    for _ in range(20): s.step(0.5)
    best = min(best, (time.process_time() - start) / 20)
print(best)
"""


def stepper(shape, precision="float32"):
    rng = np.random.default_rng(0)
    settings = SimulationSettings(dimensions=len(shape), cells=shape[0], radius=shape[0] / 3, precision=precision)
    p, n = (level + 0.02 * rng.standard_normal(shape) for level in (0.3, 0.2))
    return Stepper(MIXTURE, settings, p, n)


def _best(function, repeats, rounds=40):
    """Shortest mean CPU time of this thread; short rounds, so that other work on the machine does not get into all of them."""
    function()
    times = []
    for _ in range(rounds):
        start = time.thread_time()
        for _ in range(repeats):
            function()
        times.append((time.thread_time() - start) / repeats)
    return min(times)


@pytest.mark.parametrize(("shape", "repeats", "limit"), [((256, 256), 3, 4), ((448, 448), 1, 4), ((96, 96, 96), 1, 5)])
def test_step_against_its_transforms(shape, repeats, limit):
    run = stepper(shape)
    field = run.fields()[0]

    def transforms():
        for _ in range(2):
            fft.irfftn(fft.rfftn(field, workers=1), s=shape, workers=1)

    step, bare = _best(lambda: run.step(0.5), repeats), _best(transforms, repeats)
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(
        f"\n{'×'.join(map(str, shape)):>12} float32  step {step * 1e3:8.2f} ms  four FFTs {bare * 1e3:7.2f} ms  "
        f"ratio {step / bare:.2f} (at most {limit})  {step * 1e9 / field.size:.0f} ns/cell  peak {memory:.0f} MB"
    )


def test_two_runs_side_by_side():
    cores = sorted(os.sched_getaffinity(0))[:2]
    env = {**os.environ, "OMP_NUM_THREADS": "1"}

    def step(used):
        codes = [RUN.format(core=core, here=str(Path(__file__).parent)) for core in used]
        pipes = {"stdin": subprocess.PIPE, "stdout": subprocess.PIPE, "text": True}
        runs = [subprocess.Popen([sys.executable, "-c", code], env=env, **pipes) for code in codes]
        for run in runs:
            run.stdout.readline()  # compiled and ready
        for run in runs:
            run.stdin.write("\n")
            run.stdin.flush()
        return [float(run.communicate()[0]) for run in runs]

    alone = min(step([core])[0] for core in cores)
    both = step(cores)
    print(
        f"\ntwo 256² runs on {len(cores)} cores: {sum(alone / b for b in both):.2f} times the work of one (at least 1.8); CPU time "
        f"of a step {alone * 1e3:.2f} ms alone, {' and '.join(f'{b * 1e3:.2f}' for b in both)} ms side by side"
    )


def _spectral(start, span, dt=0.03):
    """Common reference: Runge–Kutta steps of fourth order and derivatives in Fourier space, waves of four cells and longer."""
    from test_second_solver import CHI, KAPPA

    k = [2 * np.pi * f(n) for f, n in zip((np.fft.fftfreq, np.fft.rfftfreq), start.shape, strict=True)]
    axes = np.meshgrid(*k, indexing="ij")
    square = axes[0] ** 2 + axes[1] ** 2
    kept = (abs(axes[0]) < np.pi / 2) & (abs(axes[1]) < np.pi / 2)

    def back(spectrum):
        return fft.irfftn(spectrum, s=start.shape)

    def rate(spectrum):
        c = back(spectrum)
        drive = (KAPPA * square - 2 * CHI) * spectrum
        flux = [fft.rfftn(c * (1 - c) * back(1j * a * drive)) for a in axes]
        return kept * (-square * spectrum + 1j * axes[0] * flux[0] + 1j * axes[1] * flux[1])

    state = kept * fft.rfftn(start)
    for _ in range(round(span / dt)):
        first = rate(state)
        second = rate(state + dt / 2 * first)
        third = rate(state + dt / 2 * second)
        state = state + dt / 6 * (first + 2 * second + 2 * third + rate(state + dt * third))
    return back(state)


def _py_pde(start, dt):
    """A function that steps the equation of ``test_second_solver`` with py-pde from ``start`` over a time; compiled already."""
    import pde
    from test_second_solver import CHI, KAPPA

    grid = pde.CartesianGrid([[0, n] for n in start.shape], list(start.shape), periodic=True)
    terms = f"laplace(c) + divergence(c * (1 - c) * gradient({-2 * CHI} * c - {KAPPA} * laplace(c)))"
    solver = pde.ExplicitSolver(pde.PDE({"c": terms}), backend="numba")
    step = solver.make_stepper(pde.ScalarField(grid, start), dt)
    step(pde.ScalarField(grid, start), 0.0, dt)

    def run(span):
        state = pde.ScalarField(grid, start)
        step(state, 0.0, span)
        return state.data

    return run


def _ours(start, dt):
    """The same with the particle solver, single precision, tables made already."""
    from dataclasses import replace

    from solver_cases import BINARY, quiet_settings
    from test_second_solver import CHI, KAPPA

    settings = quiet_settings(kappa_polymer=KAPPA, polymer_mobility=1.0, precision="float32")
    stepper = Stepper(replace(BINARY, chi_ps=CHI), settings, start, np.zeros_like(start))
    stepper.step(dt)
    stepper.restart(start, np.zeros_like(start))

    def run(span):
        for _ in range(round(span / dt)):
            stepper.step(dt)
        return stepper.fields()[0]

    return run


def test_against_py_pde():
    """The same binary Cahn–Hilliard run on the same grid to the same time, from weak waves to coarsening phases.

    py-pde steps explicitly; 0.04 is its longest stable step here, and shorter ones make it no more accurate (its error is
    that of its stencil). poroscan takes the longest step of a list with which its error against the common reference is
    not above that of py-pde. Compilation is left out on both sides (py-pde compiles every new equation for some ten seconds).
    """
    sys.path.insert(0, str(Path(__file__).parents[1] / "demix"))
    size, span = 96, 300.0
    rng = np.random.default_rng(1)
    x = 2 * np.pi * np.arange(size) / size
    waves = sum(
        np.cos(a * x[:, None] + b * x + rng.uniform(0, 2 * np.pi)) for a in range(6) for b in range(-5, 6) if a or b > 0
    )
    start = 0.5 + 0.03 * waves / waves.std()
    reference = _spectral(start, span)

    def timed(run):
        begin = time.process_time()
        result = run(span)
        seconds = time.process_time() - begin
        error = np.sqrt(((result - reference) ** 2).mean()) / reference.std()
        return seconds, (float(error) if np.isfinite(error) else np.inf)

    pde_time, pde_error = timed(_py_pde(start, 0.04))
    ours = {dt: timed(_ours(start, dt)) for dt in (4.0, 2.0, 1.0, 0.5, 0.25)}
    good = [dt for dt, (_, error) in ours.items() if error <= pde_error]
    our_dt = max(good) if good else min(ours)
    our_time, our_error = ours[our_dt]
    print("\nporoscan:", *(f"dt {dt:g} {t:.3f} s {e:.3%};" for dt, (t, e) in ours.items()))
    print(
        f"binary Cahn–Hilliard {size}², to t = {span:g}: py-pde dt 0.04 {pde_time:.3f} s, error {pde_error:.2%}; poroscan dt "
        f"{our_dt:g} {our_time:.3f} s, error {our_error:.2%}; {pde_time / our_time:.1f} times faster (at least 5); contrast "
        f"{np.ptp(reference):.2f}"
    )
