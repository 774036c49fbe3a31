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

#: What two processes do side by side: the step of a 256² particle, counted over a fixed time.
RUN = """
import sys, time
sys.path.insert(0, {here!r})
from test_simulation_speed import stepper
s = stepper((256, 256)); s.step(0.5)
start = time.perf_counter()
for _ in range(400): s.step(0.5)
print(400 / (time.perf_counter() - start))
"""


def stepper(shape, precision="float32"):
    rng = np.random.default_rng(0)
    settings = SimulationSettings(dimensions=len(shape), cells=shape[0], radius=shape[0] / 3, precision=precision)
    p, n = (level + 0.02 * rng.standard_normal(shape) for level in (0.3, 0.2))
    return Stepper(MIXTURE, settings, p, n)


def _best(function, repeats, rounds=40):
    """Shortest mean time; short rounds, so that other work on the machine does not get into all of them."""
    function()
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        for _ in range(repeats):
            function()
        times.append((time.perf_counter() - start) / repeats)
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
    code = RUN.format(here=str(Path(__file__).parent))
    env = {**os.environ, "OMP_NUM_THREADS": "1"}

    def speed(count):
        runs = [subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, env=env) for _ in range(count)]
        return sum(float(run.communicate()[0]) for run in runs)

    alone = speed(1)
    print(f"\ntwo 256² runs on two cores: {speed(2) / alone:.2f} times one (at least 1.8)")


def test_against_py_pde():
    """The same binary Cahn–Hilliard run to the same error against a run of eight times the resolution in time."""
    import sys as system

    system.path.insert(0, str(Path(__file__).parents[1] / "demix"))
    from test_second_solver import our_solution, second_solution, smooth_start

    start = smooth_start(64, np.random.default_rng(1))
    span, theirs_dt, ours_dt = 20.0, 5e-3, 0.1
    exact = our_solution(start, span, 0.0125)
    second_solution(start, theirs_dt, theirs_dt)
    begin = time.perf_counter()
    theirs = second_solution(start, span, theirs_dt)
    pde_time = time.perf_counter() - begin
    begin = time.perf_counter()
    ours = our_solution(start, span, ours_dt)
    our_time = time.perf_counter() - begin
    print(
        f"\nbinary Cahn–Hilliard 64², to t = {span}: py-pde {pde_time:.2f} s, poroscan {our_time:.2f} s, "
        f"{pde_time / our_time:.1f} times faster (at least 5); error in time {np.abs(ours - exact).max():.1e}, difference "
        f"of the two {np.abs(ours - theirs).max():.1e} (stencils, second order)"
    )
