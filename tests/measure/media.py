"""Random media with closed forms, periodic, for the tests of the measuring room.

Sources: Chiu, Stoyan, Kendall and Mecke, Stochastic Geometry and its Applications (2013), chapters 3 and 6 (Boolean model);
Berk 1987, Teubner 1991, Roberts and Teubner 1995 (level-cut Gaussian fields).
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
import scipy.fft as sf
from scipy import integrate, special

Bool = npt.NDArray[np.bool_]


def boolean_discs(shape: tuple[int, ...], *, radius: float, eta: float, rng: np.random.Generator) -> Bool:
    """Periodic Boolean model of discs (balls in 3-D): True in the union of the grains; covered share 1 − exp(−eta)."""
    volume = math.pi * radius**2 if len(shape) == 2 else 4 / 3 * math.pi * radius**3
    n = rng.poisson(eta * math.prod(shape) / volume)
    covered = np.zeros(shape, bool)
    reach = math.ceil(radius) + 1
    offsets = np.meshgrid(*[np.arange(-reach, reach + 1)] * len(shape), indexing="ij", sparse=True)
    for _ in range(n):
        centre = [rng.uniform(0, s) for s in shape]
        whole = [math.floor(c) for c in centre]
        inside = sum((o + w - c) ** 2 for o, w, c in zip(offsets, whole, centre, strict=True)) < radius**2
        covered[np.ix_(*[(o.ravel() + w) % s for o, w, s in zip(offsets, whole, shape, strict=True)])] |= inside
    return covered


def gaussian_field(shape: tuple[int, ...], *, length: float, rng: np.random.Generator) -> npt.NDArray[np.float64]:
    """Periodic Gaussian field of unit variance with correlation exp(−r²/2 length²), by spectral synthesis."""
    q2 = _q2(shape, half=True)
    noise = sf.rfftn(rng.standard_normal(shape))
    # A filter exp(−q²s²/2) correlates the noise as exp(−r²/4s²); s = length/√2 gives the one wanted.
    kernel = np.exp(-q2 * length**2 / 4)
    full = np.exp(-(length**2) / 2 * _q2(shape, half=False))
    return np.asarray(sf.irfftn(noise * kernel, shape) / math.sqrt(float(np.mean(full))))


def ring_cut(shape: tuple[int, ...], *, spacing: float, spread: float, rng: np.random.Generator) -> Bool:
    """Level cut at one half of a Gaussian field whose spectrum is a Gaussian ring at 2π/spacing (relative width ``spread``)."""
    centre = 2 * math.pi / spacing
    spectrum = np.exp(-((np.sqrt(_q2(shape, half=True)) - centre) ** 2) / (4 * (spread * centre) ** 2))
    return np.asarray(sf.irfftn(sf.rfftn(rng.standard_normal(shape)) * spectrum, shape) > 0)


def _q2(shape: tuple[int, ...], *, half: bool) -> npt.NDArray[np.float64]:
    last = np.fft.rfftfreq(shape[-1]) if half else np.fft.fftfreq(shape[-1])
    axes = np.meshgrid(*[np.fft.fftfreq(s) for s in shape[:-1]], last, indexing="ij", sparse=True)
    return np.asarray(sum((2 * math.pi * f) ** 2 for f in axes))


def level_cut(shape: tuple[int, ...], *, length: float, fraction: float, rng: np.random.Generator) -> Bool:
    """Level cut of a Gaussian field: True with probability ``fraction``."""
    return gaussian_field(shape, length=length, rng=rng) > special.ndtri(1 - fraction)


def s2_boolean_void(r: npt.ArrayLike, *, radius: float, eta: float) -> npt.NDArray[np.float64]:
    """Closed form of S2 of the void of Boolean discs (2-D; oracles: exp(−rho (2πR² − overlap)))."""
    d = np.minimum(np.asarray(r, float) / radius, 2.0)
    overlap = 2 * np.arccos(d / 2) - d / 2 * np.sqrt(4 - d * d)
    return np.exp(-eta / math.pi * (2 * math.pi - overlap))


def s2_level_cut(r: npt.ArrayLike, *, length: float, fraction: float) -> npt.NDArray[np.float64]:
    """Closed form of S2 of a level cut: p² + (1/2π) ∫₀^g exp(−u²/(1+t))/√(1−t²) dt with g = exp(−r²/2 length²)."""
    u = special.ndtri(1 - fraction)
    g = np.exp(-np.square(np.asarray(r, float)) / (2 * length**2))

    def one(top: float) -> float:  # t = sin(s) removes the singularity at 1
        return integrate.quad(lambda s: math.exp(-(u**2) / (1 + math.sin(s))), 0, math.asin(top))[0] / (2 * math.pi)

    return fraction**2 + np.array([one(t) for t in np.atleast_1d(g)])


def disc(radius: float, *, margin: int = 1, centre_shift: tuple[float, float] = (0.0, 0.0)) -> Bool:
    """Round particle mask with a margin: pixel centres within ``radius``."""
    half = math.ceil(radius) + margin
    y, x = np.ogrid[-half : half + 1, -half : half + 1]
    return (y - centre_shift[0]) ** 2 + (x - centre_shift[1]) ** 2 <= radius**2
