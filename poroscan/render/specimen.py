"""How strongly each point of the specimen shines before the instrument has touched the signal.

Sources of the forms used: the secondary-electron yield rises at edges and on slopes (Seiler 1983, J. Appl. Phys. 54:R1;
Reimer 1998, Scanning Electron Microscopy, 2nd ed., ch. 6); of the electrons set free on a pore floor a detector
collects those that leave through the mouth, for an isotropic source on the axis of a round mouth of
half-width a at depth z the solid-angle share 1 − z/√(z² + a²).
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from edt import edt
from scipy.ndimage import gaussian_filter, gaussian_filter1d, map_coordinates

from poroscan.render.depth import FloatImage, mouth_radius
from poroscan.render.settings import RenderSettings
from poroscan.section import BoolArray

_BLACK = 0.03  # signal of a pore into which nothing shines: stray electrons
_CREASE = 0.35  # relative darkening of the seam between two particles that touch


def brightness(
    labels: npt.NDArray[np.int32],
    pores: BoolArray,
    depth: FloatImage,
    *,
    settings: RenderSettings,
    rng: np.random.Generator,
) -> FloatImage:
    """Signal of every point of the specimen, grey levels before the instrument.

    Parameters
    ----------
    labels
        Particle number at every pixel, 0 for surroundings.
    pores
        True in pore.
    depth
        Depth of the material under each pore pixel, px.
    settings, rng
        Look and generator.
    """
    particle = labels > 0
    solid = particle & ~pores
    image = np.where(particle, _face(labels, solid, settings, rng), _ground(particle, settings, rng))
    image[pores] = _pore_signal(pores, particle, depth, settings, rng)[pores]
    return np.maximum(image + _relief(depth, pores, settings), 0.0)


def _face(
    labels: npt.NDArray[np.int32], solid: BoolArray, settings: RenderSettings, rng: np.random.Generator
) -> FloatImage:
    shape = labels.shape
    face = settings.polymer + settings.face_texture * smooth_noise(shape, grain=settings.face_grain, rng=rng)
    face += settings.knife * _marks(shape, rng)
    # One label per particle: the seam between two touching particles is an edge as well.
    distance = np.asarray(edt((labels * solid).astype(np.uint32), black_border=False, parallel=1), dtype=float) - 0.5
    lively = np.maximum(1 + 0.35 * smooth_noise(shape, grain=9.0, rng=rng), 0)
    face += settings.edge * lively * np.exp(-np.maximum(distance, 0) / settings.edge_width)
    return face * (1 - _CREASE * _seam(labels))


def _seam(labels: npt.NDArray[np.int32]) -> FloatImage:
    seam = np.zeros(labels.shape)
    for axis in (0, 1):
        first, second = (np.swapaxes(labels, 0, axis)[:-1], np.swapaxes(labels, 0, axis)[1:])
        meets = (first != second) & (first > 0) & (second > 0)
        view = np.swapaxes(seam, 0, axis)
        view[:-1][meets] = 1.0
        view[1:][meets] = 1.0
    return seam


def _ground(particle: BoolArray, settings: RenderSettings, rng: np.random.Generator) -> FloatImage:
    shape = particle.shape
    level = settings.resin if settings.ground_kind == "resin" else settings.ground
    rough = smooth_noise(shape, grain=settings.ground_grain, rng=rng)
    rough += 0.6 * smooth_noise(shape, grain=5 * settings.ground_grain, rng=rng)
    ground = level + settings.ground_texture * rough
    if settings.shadow > 0 and particle.any() and not particle.all():
        away = np.asarray(edt(~particle, black_border=False, parallel=1), dtype=float)
        reach = 0.25 * np.sqrt(particle.sum() / np.pi)
        ground *= 1 - settings.shadow * np.exp(-away / max(reach, 1.0))
    return ground


def _pore_signal(
    pores: BoolArray, particle: BoolArray, depth: FloatImage, settings: RenderSettings, rng: np.random.Generator
) -> FloatImage:
    rough = smooth_noise(pores.shape, grain=settings.face_grain, rng=rng)
    if settings.pores == "resin":
        return settings.resin + 0.5 * settings.face_texture * rough
    mouth = mouth_radius(pores, particle=particle)
    seen = 1 - depth / np.maximum(np.hypot(depth, mouth), 1e-9)
    if settings.pores == "bright":
        return settings.polymer + settings.pore_glow * (0.55 + 0.9 * seen) + settings.face_texture * rough
    lit = settings.polymer * settings.pore_light * seen
    return _BLACK + lit * (1 + 2 * settings.face_texture / settings.polymer * rough if settings.polymer > 0 else 1)


def _relief(depth: FloatImage, pores: BoolArray, settings: RenderSettings) -> FloatImage:
    if settings.relief == 0 or settings.pores == "resin":
        return np.zeros_like(depth)
    down, right = np.gradient(gaussian_filter(depth, 1.0))
    towards = np.deg2rad(settings.detector_deg)
    # A wall is lit where it falls away towards the detector: it faces it. Rows grow downwards.
    slope = right * np.cos(towards) - down * np.sin(towards)
    return np.where(pores, settings.relief * slope / np.sqrt(1 + right**2 + down**2), 0.0)


def _marks(shape: tuple[int, ...], rng: np.random.Generator) -> FloatImage:
    """Parallel knife marks in a random direction, zero mean and about unit variance."""
    angle = rng.uniform(0, np.pi)
    length = int(math.hypot(*shape)) + 8
    profile = gaussian_filter1d(rng.standard_normal(length), 1.5, mode="wrap")
    profile /= max(float(profile.std()), 1e-12)
    rows, columns = np.indices(shape)
    across = (rows - shape[0] / 2) * np.cos(angle) + (columns - shape[1] / 2) * np.sin(angle) + length / 2
    strength = np.clip(1 + 0.8 * smooth_noise(shape, grain=40.0, rng=rng), 0, None)
    return map_coordinates(profile, [across], order=1, mode="nearest") * strength


def smooth_noise(shape: tuple[int, ...], *, grain: float, rng: np.random.Generator) -> FloatImage:
    """Smooth noise of unit standard deviation; ``grain`` is the standard deviation of its smoothing times two, px."""
    noise = gaussian_filter(rng.standard_normal(shape), grain / 2, mode="wrap")
    spread = float(noise.std())
    return noise / spread if spread > 0 else np.zeros(shape)
