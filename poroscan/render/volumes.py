"""Random three-dimensional pore structures, so that what is seen through a pore's mouth is what lies below it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import fft
from scipy.special import ndtri

from poroscan.render.structures import Seed
from poroscan.section import BoolArray


def level_cut_volume(shape: Sequence[int], *, porosity: float, correlation: float, rng: Seed) -> BoolArray:
    """Level cut of a periodic three-dimensional Gaussian field with covariance exp(−(r/ℓ)²).

    Every plane has the expected porosity and the interface length of ``structures.level_cut``.

    Parameters
    ----------
    shape
        Planes, rows, columns.
    porosity
        Expected porosity.
    correlation
        ℓ, px.
    rng
        Generator or seed.
    """
    white = np.random.default_rng(rng).standard_normal(tuple(shape), dtype=np.float32)
    spectrum = fft.rfftn(white)
    variance = 1.0
    for axis, size in enumerate(shape):
        q = 2 * np.pi * (fft.rfftfreq(size) if axis == 2 else fft.fftfreq(size))
        along = np.exp(-((q * correlation) ** 2) / 8).astype(np.float32)
        spectrum *= along[tuple(slice(None) if a == axis else None for a in range(3))]
        full = np.exp(-((2 * np.pi * fft.fftfreq(size) * correlation) ** 2) / 4)
        variance *= full.mean()  # the power spectrum is a product over the axes, so its mean is one as well
    field = fft.irfftn(spectrum, s=tuple(shape))
    return field < ndtri(porosity) * np.sqrt(variance)


def boolean_spheres_volume(shape: Sequence[int], *, porosity: float, radius: float, rng: Seed) -> BoolArray:
    """Boolean model of equal spheres: overlapping round pores, volume porosity 1 − exp(−ρ·4πR³/3).

    Parameters
    ----------
    shape
        Planes, rows, columns.
    porosity
        Expected porosity of the volume and of every plane.
    radius
        R, px.
    rng
        Generator or seed.
    """
    rng = np.random.default_rng(rng)
    density = -np.log1p(-porosity) / (4 / 3 * np.pi * radius**3)
    grown = np.asarray(shape) + 2 * radius
    centres = rng.uniform(-radius, np.asarray(shape) + radius, size=(rng.poisson(density * np.prod(grown)), 3))
    pores = np.zeros(tuple(shape), dtype=bool)
    for centre in centres:
        low = np.maximum(np.ceil(centre - radius), 0).astype(int)
        high = np.minimum(np.floor(centre + radius) + 1, shape).astype(int)
        if (low >= high).any():
            continue
        z, y, x = (np.arange(a, b) - c for a, b, c in zip(low, high, centre, strict=True))
        ball = z[:, None, None] ** 2 + y[None, :, None] ** 2 + x[None, None, :] ** 2 <= radius**2
        pores[low[0] : high[0], low[1] : high[1], low[2] : high[2]] |= ball
    return pores
