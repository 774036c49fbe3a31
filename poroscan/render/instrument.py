"""What the microscope does to the signal: probe, uneven light, charging, noise, amplifier, eight bits."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter, gaussian_filter1d
from scipy.signal import lfilter

from poroscan.render.settings import RenderSettings
from poroscan.render.specimen import smooth_noise

FloatImage = npt.NDArray[np.float64]

_DRAG_LENGTH = 35.0  # decay of charging tails along the scan line, px


def expose(signal: FloatImage, *, settings: RenderSettings, rng: np.random.Generator) -> npt.NDArray[np.uint8]:
    """Turn the signal of the specimen into an eight-bit picture.

    Parameters
    ----------
    signal
        Output of ``specimen.brightness``.
    settings, rng
        Look and generator.

    Returns
    -------
    ndarray of uint8
        Values beyond the grey scale saturate, as the amplifier's do.
    """
    image = gaussian_filter(signal, settings.blur, mode="nearest") if settings.blur > 0 else signal
    image = image * illumination(image.shape, settings=settings, rng=rng)
    image = np.maximum(image + _drag(image, settings) + _bands(image, settings, rng), 0)
    if settings.dose > 0:
        image = rng.poisson(image * settings.dose) / settings.dose
    image = image + settings.detector_noise * rng.standard_normal(image.shape) + _streaks(image.shape, settings, rng)
    scaled = np.rint(255 * (settings.gain * image + settings.offset))
    return np.clip(scaled, 0, 255).astype(np.uint8)


def illumination(shape: tuple[int, ...], *, settings: RenderSettings, rng: np.random.Generator) -> FloatImage:
    """Relative brightness over the picture: a tilt and smooth unevenness, mean about 1."""
    rows, columns = np.ogrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    towards = np.deg2rad(settings.tilt_deg)
    tilt = settings.tilt / 2 * (columns * np.cos(towards) - rows * np.sin(towards)) / np.sqrt(2)
    coefficients = rng.normal(size=3)
    bowl = (
        coefficients[0] * (rows**2 - 1 / 3) + coefficients[1] * (columns**2 - 1 / 3) + coefficients[2] * rows * columns
    )
    return np.maximum(1 + tilt * 2 + settings.unevenness * bowl, 0.05)


def _drag(image: FloatImage, settings: RenderSettings) -> FloatImage:
    if settings.drag == 0:
        return np.zeros_like(image)
    decay = np.exp(-1 / _DRAG_LENGTH)
    # What charges is the excess over the picture's mean; the tail is its running average along the scan line.
    excess = np.maximum(image - image.mean(), 0)
    tail = lfilter([1 - decay], [1, -decay], excess, axis=1)
    return settings.drag * tail / max(float(tail.max()), 1e-12)


def _bands(image: FloatImage, settings: RenderSettings, rng: np.random.Generator) -> FloatImage:
    bands = np.zeros_like(image)
    if settings.charging == 0:
        return bands
    rows = np.arange(image.shape[0])
    for _ in range(settings.charging_bands):
        start, decay = rng.uniform(0, image.shape[0]), rng.uniform(0.008, 0.03) * image.shape[0]
        profile = np.where(rows >= start, np.exp(-(rows - start) / decay), 0.0) * rng.uniform(0.5, 1)
        along = np.clip(
            0.8 + 0.4 * gaussian_filter1d(rng.standard_normal(image.shape[1]), 40, mode="wrap") * 12, 0.1, 1.5
        )
        bands += settings.charging * profile[:, None] * along[None, :]
    return bands


def _streaks(shape: tuple[int, ...], settings: RenderSettings, rng: np.random.Generator) -> FloatImage:
    lines = settings.streaks * rng.standard_normal((shape[0], 1))
    if settings.curtains == 0:
        return lines
    # Curtains: streaks along the columns whose strength changes slowly on the way down.
    fine = smooth_noise((1, shape[1]), grain=3.0, rng=rng)
    slow = np.clip(1 + 0.5 * smooth_noise(shape, grain=120.0, rng=rng), 0, None)
    return lines + settings.curtains * fine * slow
