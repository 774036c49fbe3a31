"""Speed of the measuring room: tables of ratios within one run (python -m pytest -m benchmark -s), in processor seconds."""

from __future__ import annotations

import time
import tracemalloc
from collections.abc import Callable

import edt
import numpy as np
import pytest
import scipy.fft as sf

from poroscan.measure import measure_section
from poroscan.measure.thickness import squared_thickness
from poroscan.section import PixelSize, Section

pytestmark = pytest.mark.benchmark


def best_of(function: Callable[[], object], *, repeats: int = 3) -> float:
    times = []
    for _ in range(repeats):
        start = time.process_time()
        function()
        times.append(time.process_time() - start)
    return min(times)


def gaussian_field(shape: tuple[int, ...], *, length: float, rng: np.random.Generator) -> np.ndarray:
    axes = np.meshgrid(*[np.fft.fftfreq(s) for s in shape[:-1]], np.fft.rfftfreq(shape[-1]), indexing="ij", sparse=True)
    kernel = np.exp(-sum((2 * np.pi * f) ** 2 for f in axes) * length**2 / 4)
    field = sf.irfftn(sf.rfftn(rng.standard_normal(shape)) * kernel, shape)
    return np.asarray(field / field.std())


def openings(mask: np.ndarray) -> np.ndarray:
    """The usual way: one opening for each integer radius, by the same distance transform."""
    distance = edt.edt(mask, black_border=False, parallel=1)
    out = np.zeros(mask.shape, np.float32)
    for radius in range(1, int(distance.max()) + 1):
        opened = edt.edt(~(distance >= radius), black_border=False, parallel=1) < radius
        out[opened & mask] = radius
    return out


def particle_section(n: int, *, length: float, rng: np.random.Generator) -> Section:
    y, x = np.ogrid[:n, :n]
    particle = (y - n / 2 + 0.5) ** 2 + (x - n / 2 + 0.5) ** 2 <= (n / 2 - 2) ** 2
    field = gaussian_field((n, n), length=length, rng=rng)
    low, pores, high = (particle & (field > u) for u in (0.35, 0.3, 0.25))
    grey = (1 / (1 + np.exp(4 * (field - 0.3)))).astype(np.float32)
    return Section(pores, particle, PixelSize(0.1), pores_low=low, pores_high=high, grey=grey)


def test_local_thickness(rng: np.random.Generator) -> None:
    masks = {
        "2048², pores of about 20 px": gaussian_field((2048, 2048), length=12, rng=rng) > 0,
        "2048², pores of about 7 px": gaussian_field((2048, 2048), length=4, rng=rng) > 0,
        "2048², pores of about 100 px": gaussian_field((2048, 2048), length=40, rng=rng) > -0.5,
        "192³, pores of about 10 px": gaussian_field((192, 192, 192), length=6, rng=rng) > 0,
        "192³, pores of about 20 px": gaussian_field((192, 192, 192), length=12, rng=rng) > -0.5,
    }
    squared_thickness(masks["2048², pores of about 7 px"][:64, :64].copy())
    print("\nlocal thickness                  largest r   openings    exact   ratio   over one distance transform")
    for name, mask in masks.items():
        slow = best_of(lambda m=mask: openings(m), repeats=1)
        fast = best_of(lambda m=mask: squared_thickness(m))
        once = best_of(lambda m=mask: edt.edtsq(m, black_border=False, parallel=1))
        radius = edt.edt(mask, black_border=False).max()
        print(f"{name:32s} {radius:9.1f} {slow:9.2f} s {fast:7.3f} s {slow / fast:6.1f} {fast / once:9.1f}")


def test_whole_section(rng: np.random.Generator) -> None:
    measure_section(particle_section(128, length=4, rng=rng))
    section = particle_section(1000, length=8, rng=rng)
    seconds = best_of(lambda: measure_section(section))
    tracemalloc.start()
    measure_section(section)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    padded = 1.5**2  # the correlation is padded by half a diameter
    print(f"\nmeasure_section, 1000²: {seconds:.2f} s (wanted: 1.0)")
    print(
        f"peak memory: {peak / section.particle.size:.0f} bytes per pixel, {peak / section.particle.size / padded:.0f} per padded pixel"
    )


def test_cost_grows_linearly(rng: np.random.Generator) -> None:
    measure_section(particle_section(128, length=4, rng=rng))
    print("\nside   seconds   µs per pixel")
    for n in (256, 512, 1024, 2048, 4096):
        section = particle_section(n, length=8, rng=rng)
        # The first touch of fresh memory can cost more than the work (virtual machines): the best of two at least.
        seconds = best_of(lambda s=section: measure_section(s), repeats=3 if n < 2048 else 2)
        print(f"{n:5d} {seconds:8.3f} {1e6 * seconds / n**2:10.3f}")
