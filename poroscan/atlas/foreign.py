"""Textures that no demixing made, as a test of the verdict ``unlike_atlas``: packings, foams, stripes, level cuts, photographs.

None of them takes part in any fit. Each is cut to a round particle, drawn as a picture and segmented like every view of the
atlas.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping

import numpy as np
import numpy.typing as npt
from scipy import ndimage
from scipy.spatial import cKDTree

from poroscan.atlas.views import Described, ViewKind, describe_rendered

#: Size of the made fields; the particle takes most of it.
_SIZE = 256

FloatArray = npt.NDArray[np.float64]


def disc_packing(rng: np.random.Generator) -> FloatArray:
    """Equal discs of pore that do not touch (random sequential addition; Feder 1980), 1 in polymer."""
    radius = rng.uniform(4, 10)
    centres: list[FloatArray] = []
    for point in rng.uniform(0, _SIZE, (4000, 2)):
        if all(np.hypot(*(point - c)) > 2.15 * radius for c in centres):
            centres.append(point)
    return (_nearest(np.array(centres), 1)[0] > radius).astype(float)


def voronoi_foam(rng: np.random.Generator) -> FloatArray:
    """Walls of equal width between the cells of a Poisson–Voronoi mosaic."""
    nearest = _nearest(rng.uniform(0, _SIZE, (int(rng.uniform(60, 250)), 2)), 2)
    return (nearest[1] - nearest[0] < rng.uniform(2.0, 5.0)).astype(float)


def stripes(rng: np.random.Generator) -> FloatArray:
    """Straight lamellae in one direction, a little uneven."""
    rows, columns = np.indices((_SIZE, _SIZE))
    angle, period = rng.uniform(0, np.pi), rng.uniform(8, 24)
    phase = (rows * np.sin(angle) + columns * np.cos(angle)) / period * 2 * np.pi
    wave = np.sin(phase + 0.3 * ndimage.gaussian_filter(rng.standard_normal((_SIZE, _SIZE)), 8) * 20)
    return (wave > rng.uniform(-0.4, 0.4)).astype(float)


def level_cut(rng: np.random.Generator) -> FloatArray:
    """Level cut of a Gaussian field with a power-law spectrum: pores of all sizes, rough walls."""
    q = np.hypot(np.fft.fftfreq(_SIZE)[:, None], np.fft.rfftfreq(_SIZE)[None])
    q[0, 0] = 1.0
    spectrum = np.fft.rfft2(rng.standard_normal((_SIZE, _SIZE))) * q ** -rng.uniform(0.8, 1.6)
    spectrum[0, 0] = 0
    field = np.fft.irfft2(spectrum, s=(_SIZE, _SIZE))
    return (field > np.quantile(field, rng.uniform(0.25, 0.6))).astype(float)


def photograph(rng: np.random.Generator) -> FloatArray:
    """A piece of a photograph shipped with scikit-image, cut at its median."""
    from skimage import data

    names = ("brick", "grass", "gravel", "camera", "coins", "text", "page", "moon", "clock")
    grey = np.asarray(getattr(data, str(rng.choice(names)))(), dtype=float)
    scale = max(1.0, _SIZE / min(grey.shape))
    grey = ndimage.zoom(grey, scale, order=1) if scale > 1 else grey
    row, column = (int(rng.integers(0, n - _SIZE + 1)) for n in grey.shape)
    piece = ndimage.gaussian_filter(grey[row : row + _SIZE, column : column + _SIZE], 1.0)
    return (piece > np.median(piece)).astype(float)


TEXTURES: Mapping[str, Callable[[np.random.Generator], FloatArray]] = {
    "disc packing": disc_packing,
    "Voronoi foam": voronoi_foam,
    "stripes": stripes,
    "level cut": level_cut,
    "photograph": photograph,
}


def foreign_views(n: int, *, kind: ViewKind, seed: int) -> Iterator[tuple[str, Described]]:
    """Rendered, segmented and described views of ``n`` particles of every foreign texture.

    Parameters
    ----------
    n
        Particles of each texture.
    kind
        ``whole`` or ``interior``.
    seed
        Seed.
    """
    for name, make in TEXTURES.items():
        rng = np.random.default_rng([seed, len(name)])
        for _ in range(n):
            field = _as_particle(make(rng))
            found = describe_rendered(field, kind=kind, diameter_px=float(rng.uniform(240, 440)), rng=rng)
            if found is not None:
                yield name, found


def _as_particle(texture: FloatArray) -> FloatArray:
    rows, columns = np.indices(texture.shape) - (_SIZE - 1) / 2
    return np.where(np.hypot(rows, columns) < 0.46 * _SIZE, texture, 0.0)


def _nearest(points: FloatArray, k: int) -> FloatArray:
    grid = np.indices((_SIZE, _SIZE)).reshape(2, -1).T
    distance = np.asarray(cKDTree(points).query(grid, k=k)[0]).reshape(-1, k)
    return distance.T.reshape(k, _SIZE, _SIZE)
