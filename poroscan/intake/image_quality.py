"""Image quality: clipping, noise, resolution, uneven illumination, charging bands.

All functions take a 2-D float array of grey values (banner cut off) and return plain numbers; ``judge`` turns them into flags.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import fft, ndimage

Grey = npt.NDArray[np.float32]

#: Shares of pure black and of pure white from which a picture counts as clipped.
CLIPPED_BLACK, CLIPPED_WHITE = 0.05, 0.01
#: Noise over contrast from which a picture counts as noisy.
NOISY = 0.12
#: Resolution in pixels from which a picture counts as blurred.
BLURRED = 8.0
#: Drift of the background over the contrast from which illumination counts as uneven.
UNEVEN = 0.25
#: Brightness of a band over the contrast, and rows in bands, from which a picture counts as charging.
BAND, BAND_ROWS = 0.08, 3

#: Noise over the standard deviation of the picture below which detail does not count as seen.
_INVISIBLE = 0.01

_LARGEST_FFT = 1024
_BLOCKS = 16


@dataclass(frozen=True)
class Quality:
    """Image quality of one picture.

    Parameters
    ----------
    black, white
        Share of pixels at the lowest and the highest grey value.
    noise
        Standard deviation of the pixel noise over the contrast.
    contrast
        Grey difference between the 2nd and the 98th percentile.
    resolution_px
        Smallest length seen in the power spectrum, in pixels; NaN for a constant picture.
    drift
        Range of the fitted background over the contrast; 0 where no smooth trend fits.
    band_rows
        Rows in bright bands that run over the whole width.
    """

    black: float
    white: float
    noise: float
    contrast: float
    resolution_px: float
    drift: float
    band_rows: int


def image_quality(grey: Grey) -> Quality:
    """Every figure of image quality of a picture.

    Parameters
    ----------
    grey
        2-D array of grey values.
    """
    low, high = float(grey.min()), float(grey.max())
    contrast = float(np.subtract(*np.quantile(_thinned(grey), (0.98, 0.02))))
    if high <= low:
        return Quality(0.0, 0.0, 0.0, 0.0, float("nan"), 0.0, 0)
    contrast = contrast if contrast > 0 else high - low
    return Quality(
        black=float(np.count_nonzero(grey == low)) / grey.size,
        white=float(np.count_nonzero(grey == high)) / grey.size,
        noise=noise_sd(grey) / contrast,
        contrast=contrast,
        resolution_px=spectral_resolution(grey),
        drift=background_drift(grey) / contrast,
        band_rows=len(band_rows(grey, least=BAND * contrast)),
    )


def judge(quality: Quality) -> tuple[str, ...]:
    """Flags that follow from the figures."""
    if quality.contrast == 0:
        return ("constant_picture",)
    flags = (
        ("clipped", quality.black >= CLIPPED_BLACK or quality.white >= CLIPPED_WHITE),
        ("noisy", quality.noise >= NOISY),
        ("blurred", quality.resolution_px >= BLURRED),
        ("uneven_illumination", quality.drift >= UNEVEN),
        ("charging", quality.band_rows >= BAND_ROWS),
    )
    return tuple(name for name, found in flags if found)


def _thinned(grey: Grey, *, most: int = 500_000) -> Grey:
    step = max(1, int(np.sqrt(grey.size / most)))
    return grey[::step, ::step]


def noise_sd(grey: Grey) -> float:
    """Standard deviation of white noise, from the finest diagonal Haar coefficients.

    sigma = median|w| / 0.6745 with w = (a − b − c + d) / 2 of every 2 × 2 block (Donoho and Johnstone 1994, Biometrika 81,
    425–455). Fine texture counts as noise.
    """
    rows, columns = grey.shape[0] // 2 * 2, grey.shape[1] // 2 * 2
    if rows < 2 or columns < 2:
        return 0.0
    g = grey[:rows, :columns]
    detail = (g[::2, ::2] - g[::2, 1::2] - g[1::2, ::2] + g[1::2, 1::2]) / 2
    return float(np.median(np.abs(detail))) / 0.6745


def spectral_resolution(grey: Grey) -> float:
    """Smallest length that stands out of the noise in the power spectrum, in pixels (2 is the best there is).

    The radially averaged power of the middle of the picture (Hann window, at most 1024²) is compared with its floor between
    0.4 and 0.5 cycles per pixel, or with the power of a noise of 1 % of the picture's standard deviation where that is more; the resolution is one over the highest frequency up to which the power exceeds twice that floor.
    """
    side = min(_LARGEST_FFT, *grey.shape) // 2 * 2
    if side < 32:
        return float("nan")
    top, left = (grey.shape[0] - side) // 2, (grey.shape[1] - side) // 2
    crop = grey[top : top + side, left : left + side].astype(np.float64)
    window = np.hanning(side)
    power = np.abs(fft.rfft2((crop - crop.mean()) * window[:, None] * window)) ** 2
    frequency = np.hypot(fft.fftfreq(side)[:, None], fft.rfftfreq(side))
    bins = (frequency * side).astype(np.int64).ravel()
    counts = np.bincount(bins)
    radial = np.bincount(bins, weights=power.ravel()) / np.maximum(counts, 1)
    invisible = (_INVISIBLE * float(crop.std())) ** 2 * float((window**2).sum()) ** 2
    floor = max(float(np.median(radial[int(0.4 * side) : side // 2])), invisible)
    above = radial[1 : side // 2] > 2 * floor
    last = int(np.argmin(above)) if not above.all() else len(above)
    return float(side / max(last, 1))


def background_drift(grey: Grey) -> float:
    """Range (5th to 95th percentile) of a smooth brightness trend, in grey values; 0 where none fits.

    The picture is cut into 16 × 16 blocks. Their medians are fitted by a quadratic surface plus a step between two groups (bright
    and dark, split anew after every fit), so that a particle on its ground is not taken for uneven light. The worst fifth of
    the blocks, which straddle an outline, is left out. The trend counts where it explains at least half of the variance that
    the step leaves.
    """
    if min(grey.shape) < 4 * _BLOCKS:
        return 0.0
    rows, columns = grey.shape[0] // _BLOCKS, grey.shape[1] // _BLOCKS
    blocks = grey[: rows * _BLOCKS, : columns * _BLOCKS].reshape(_BLOCKS, rows, _BLOCKS, columns)
    values = (
        np.median(blocks[:, :: max(1, rows // 24), :, :: max(1, columns // 24)], axis=(1, 3)).astype(np.float64).ravel()
    )
    y, x = (axis.ravel() for axis in np.mgrid[-1 : 1 : _BLOCKS * 1j, -1 : 1 : _BLOCKS * 1j])
    surface = np.stack([x, y, x * y, x * x, y * y], axis=-1)
    kept = np.ones(values.shape, dtype=bool)
    trend, rest = np.zeros_like(values), values
    for _ in range(6):
        bright = rest > _split(rest)
        terms = np.column_stack([np.ones_like(values), bright, surface])
        solved = np.linalg.lstsq(terms[kept], values[kept], rcond=None)[0]
        trend, rest = surface @ solved[2:], values - surface @ solved[2:]
        miss = np.abs(values - terms @ solved)
        kept = miss <= np.quantile(miss, 0.8)
    step = np.column_stack([np.ones_like(values), bright])
    without = values - step @ np.linalg.lstsq(step[kept], values[kept], rcond=None)[0]
    if float(np.mean((values - terms @ solved)[kept] ** 2)) > 0.5 * float(np.mean(without[kept] ** 2)):
        return 0.0
    return float(np.subtract(*np.quantile(trend[kept], (0.95, 0.05))))


def _split(values: npt.NDArray[np.float64]) -> float:
    """Threshold with the largest variance between the two groups (Otsu 1979)."""
    ordered = np.sort(values)
    n = np.arange(1, len(ordered))
    left = np.cumsum(ordered)[:-1]
    between = (left / n - (ordered.sum() - left) / (len(ordered) - n)) ** 2 * n * (len(ordered) - n)
    cut = int(np.argmax(between))
    return float(0.5 * (ordered[cut] + ordered[cut + 1]))


def band_rows(grey: Grey, *, least: float) -> npt.NDArray[np.int64]:
    """Rows in bands that are brighter than the rows around them over the whole width.

    Parameters
    ----------
    grey
        2-D array of grey values.
    least
        By how much a band must be brighter, in grey values.

    Returns
    -------
    array of int
        Row numbers.
    """
    window = 2 * (min(201, max(41, grey.shape[0] // 16)) // 2) + 1
    if grey.shape[0] < 2 * window or grey.shape[1] < 16:
        return np.empty(0, np.int64)
    parts = np.array_split(grey, 6, axis=1)
    profiles = np.stack([np.median(p[:, :: max(1, p.shape[1] // 128)], axis=1) for p in parts])
    rise = profiles - ndimage.median_filter(profiles, size=(1, window), mode="nearest")
    spread = np.median(np.abs(rise), axis=1, keepdims=True) / 0.6745
    return np.flatnonzero((rise > np.maximum(least, 4 * spread)).sum(axis=0) >= len(parts) - 1)
