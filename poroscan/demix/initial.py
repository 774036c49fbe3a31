"""The drop at the start: polymer solution in its bath, with a rough surface and a little noise."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from poroscan.demix.formulation import Formulation

FloatArray = npt.NDArray[np.float64]

#: Decay length in cells of the tanh profile that joins dope and bath.
_EDGE = 1.5


def initial_fields(formulation: Formulation, *, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """Fractions of polymer and non-solvent at time 0.

    The surface is r = R(1 + ε g(direction)) with g of unit variance; in 2-D a Fourier series of modes 2…``roughness_modes`` with
    amplitudes falling as 1/mode (a capillary spectrum), in 3-D a sum of plane waves on the sphere of the same wave
    numbers. Noise of ``initial_noise`` is scaled by φ(1 − φ) so that a component that is absent stays absent.
    """
    settings = formulation.simulation
    shape = (settings.cells,) * settings.dimensions
    axes = np.meshgrid(*[np.arange(n) - (n - 1) / 2 for n in shape], indexing="ij", sparse=True)
    distance = np.sqrt(sum(a**2 for a in axes))
    surface = settings.radius * (1 + settings.roughness * _roughness(axes, distance, settings.roughness_modes, rng))
    inside = 0.5 * (1 - np.tanh((distance - surface) / _EDGE))
    fields = []
    for dope, bath in (
        (formulation.dope.polymer, formulation.bath.polymer),
        (formulation.dope.nonsolvent, formulation.bath.nonsolvent),
    ):
        value = bath + (dope - bath) * inside
        value = value + 4 * settings.initial_noise * value * (1 - value) * rng.standard_normal(shape)
        fields.append(value)
    return fields[0], fields[1]


def _roughness(axes: Sequence[FloatArray], distance: FloatArray, modes: int, rng: np.random.Generator) -> FloatArray:
    if len(axes) == 2:
        angle = np.arctan2(*axes)
        numbers = np.arange(2, modes + 1)
        parts = rng.standard_normal((2, numbers.size)) / numbers
        parts /= np.sqrt(0.5 * (parts**2).sum())
        total = np.zeros(distance.shape)
        for k, (a, b) in zip(numbers, parts.T, strict=True):
            total += a * np.cos(k * angle) + b * np.sin(k * angle)
        return total
    safe = np.maximum(distance, 0.5)
    total = np.zeros(distance.shape)
    waves = 24
    for k in rng.uniform(2, modes, waves):
        direction = rng.standard_normal(3)
        direction *= k / np.linalg.norm(direction)
        phase = sum(q * a for q, a in zip(direction, axes, strict=True)) / safe
        total += np.sqrt(2 / waves) * np.cos(phase + rng.uniform(0, 2 * np.pi))
    return total
