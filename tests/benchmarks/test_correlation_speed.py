"""Speed of the masked two-point correlation against the bare transforms it needs, and its growth with the picture."""

from __future__ import annotations

import math
import time
import tracemalloc
from collections.abc import Callable

import numpy as np
import pytest
import scipy.fft
from scipy import ndimage

from poroscan.measure.two_point import radial_average, two_point

pytestmark = pytest.mark.benchmark


def best(call: Callable[[], object], *, runs: int = 5) -> float:
    """Shortest of several runs, in seconds."""
    times = []
    for _ in range(runs):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return min(times)


def section(size: int) -> tuple[np.ndarray, np.ndarray]:
    """Round particle that fills the square, with a random structure of 6 px."""
    rng = np.random.default_rng(size)
    axis = np.arange(size) - (size - 1) / 2
    particle = axis[:, None] ** 2 + axis[None, :] ** 2 <= (size / 2 - 1) ** 2
    field = ndimage.gaussian_filter(rng.standard_normal((size, size)).astype(np.float32), 4, mode="wrap")
    return (field > 0) & particle, particle


def bare_transforms(size: int, lag: int) -> Callable[[], object]:
    """Two real transforms and two inverse ones at the padded size: what two autocorrelations cost at the least, done plainly."""
    n = scipy.fft.next_fast_len(size + lag, real=True)
    picture = np.random.default_rng(0).random((size, size))

    def call() -> None:
        for _ in range(2):
            scipy.fft.irfft2(scipy.fft.rfft2(picture, s=(n, n)), s=(n, n), overwrite_x=True)

    return call


def test_masked_correlation_against_bare_transforms() -> None:
    pores, particle = section(2048)
    print("\nmasked S2 of 2048², double precision, one core, against 2 rfft2 + 2 irfft2 of the padded size")
    print("largest lag  bare/s  masked S2/s  ratio  with radial average/s  ratio")
    for lag in (512, 1024, 2046):
        bare = best(bare_transforms(2048, lag))
        plain = best(lambda lag=lag: two_point(pores, particle, max_lag=lag))
        averaged = best(lambda lag=lag: radial_average(two_point(pores, particle, max_lag=lag)))
        print(f"{lag:11d} {bare:7.3f} {plain:12.3f} {plain / bare:6.2f} {averaged:22.3f} {averaged / bare:6.2f}")


def test_growth_and_memory() -> None:
    print(
        "\nmasked S2 with radial average, largest lag half the side\n  side   time/s   ns/pixel  ns/(pixel·log2)  peak bytes/pixel"
    )
    for size in (256, 512, 1024, 2048, 4096):
        pores, particle = section(size)

        def call(pores: np.ndarray = pores, particle: np.ndarray = particle, lag: int = size // 2) -> object:
            return radial_average(two_point(pores, particle, max_lag=lag))

        seconds = best(call, runs=3 if size < 4096 else 1)
        tracemalloc.start()
        call()
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        pixel = 1e9 * seconds / size**2
        print(f"{size:6d} {seconds:8.4f} {pixel:10.1f} {pixel / math.log2(size**2):16.2f} {peak / size**2:17.1f}")
