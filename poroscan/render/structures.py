"""Random two-dimensional pore structures with known truth: True is pore.

Each generator fills a whole rectangular field; cutting it to a particle is ``pores & particle``. What is known of each in
closed form stands in its docstring; oracles of that kind are the reason why these structures are used.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy import fft
from scipy.ndimage import gaussian_filter
from scipy.spatial import cKDTree
from scipy.special import ndtri

from poroscan.section import BoolArray

FloatImage = npt.NDArray[np.float64]
Seed = np.random.Generator | int | None


def gaussian_field(shape: Sequence[int], *, spectrum: FloatImage, rng: Seed) -> FloatImage:
    """Periodic Gaussian random field of zero mean and unit variance.

    Parameters
    ----------
    shape
        Rows, columns.
    spectrum
        Amplitude transfer at the wave numbers of ``wave_number(shape)``; its square is the power spectrum.
    rng
        Generator or seed.

    Returns
    -------
    ndarray
        float64; exactly unit variance in the ensemble (Parseval), not in the single field.
    """
    white = np.random.default_rng(rng).standard_normal(tuple(shape))
    field = fft.ifft2(fft.fft2(white) * spectrum).real
    return field / np.sqrt(np.mean(spectrum**2))


def wave_number(shape: Sequence[int]) -> FloatImage:
    """Magnitude of the wave vector 2π/length (1/px) at the points of a full two-dimensional FFT of ``shape``."""
    return 2 * np.pi * np.hypot(fft.fftfreq(shape[0])[:, None], fft.fftfreq(shape[1])[None, :])


def level_cut(shape: Sequence[int], *, porosity: float | FloatImage, correlation: float, rng: Seed) -> BoolArray:
    """Level cut of a Gaussian field with covariance exp(−(r/ℓ)²).

    Parameters
    ----------
    shape
        Rows, columns.
    porosity
        Expected porosity, a number or a map of ``shape`` (values strictly between 0 and 1): a map gives graded or
        polar-asymmetric particles whose local expectation is known exactly.
    correlation
        ℓ, px.
    rng
        Generator or seed.

    Notes
    -----
    The level t is set by Φ(t) = porosity; the interface length per area is then L_A = exp(−t²/2)/(√2·ℓ), from Rice's
    formula for crossings of a line, P_L = √2/(πℓ)·exp(−t²/2), and L_A = π/2·P_L (Rice 1945; Adler 1981).
    """
    spectrum = np.exp(-((wave_number(shape) * correlation) ** 2) / 8)
    return gaussian_field(shape, spectrum=spectrum, rng=rng) < _level(porosity)


def spinodal(
    shape: Sequence[int], *, porosity: float | FloatImage, spacing: float, rng: Seed, width: float = 0.18
) -> BoolArray:
    """Level cut of a narrow-band Gaussian field: both phases winding, with a characteristic spacing.

    The structure of early spinodal decomposition after Cahn (1965, J. Chem. Phys. 42:93): waves of one length and
    random direction and phase. The power spectrum is a Gaussian ring at 2π/``spacing`` of relative width ``width``.

    Parameters
    ----------
    shape
        Rows, columns.
    porosity
        Expected porosity, number or map.
    spacing
        Characteristic spacing, px.
    rng
        Generator or seed.
    width
        Standard deviation of the ring relative to its radius.
    """
    centre = 2 * np.pi / spacing
    spectrum = np.exp(-(((wave_number(shape) - centre) / (width * centre)) ** 2) / 4)
    return gaussian_field(shape, spectrum=spectrum, rng=rng) < _level(porosity)


def _level(porosity: float | FloatImage) -> FloatImage:
    values = np.asarray(porosity, dtype=np.float64)
    if not ((values > 0) & (values < 1)).all():
        raise ValueError("porosity must lie strictly between 0 and 1 everywhere")
    level: FloatImage = ndtri(values)
    return level


def boolean_discs(shape: Sequence[int], *, porosity: float, radius: float, rng: Seed) -> BoolArray:
    """Boolean model of equal discs: overlapping pores thrown at random.

    Parameters
    ----------
    shape
        Rows, columns.
    porosity
        Expected porosity p = 1 − exp(−ρπR²) (Matheron 1975).
    radius
        R, px.
    rng
        Generator or seed.
    """
    _in_open_unit(porosity, "porosity")
    rng = np.random.default_rng(rng)
    grown = (shape[0] + 2 * radius) * (shape[1] + 2 * radius)
    number = rng.poisson(-np.log1p(-porosity) / (np.pi * radius**2) * grown)
    centres = rng.uniform(-radius, np.asarray(shape) + radius, size=(number, 2))
    return paint_discs(shape, centres=centres, radii=np.full(number, radius))


def boolean_spheres(shape: Sequence[int], *, porosity: float, radius: float, rng: Seed) -> BoolArray:
    """Plane section of a Boolean model of equal spheres; the area porosity is the volume porosity (Delesse).

    Parameters
    ----------
    shape
        Rows, columns.
    porosity
        Expected porosity 1 − exp(−ρ·4πR³/3).
    radius
        Radius R of the spheres, px; section discs have radius √(R² − h²), h uniform.
    rng
        Generator or seed.
    """
    _in_open_unit(porosity, "porosity")
    rng = np.random.default_rng(rng)
    grown = (shape[0] + 2 * radius) * (shape[1] + 2 * radius)
    number = rng.poisson(-np.log1p(-porosity) / (4 / 3 * np.pi * radius**3) * grown * 2 * radius)
    centres = rng.uniform(-radius, np.asarray(shape) + radius, size=(number, 2))
    return paint_discs(shape, centres=centres, radii=np.sqrt(radius**2 - rng.uniform(-radius, radius, number) ** 2))


def closed_cells(
    shape: Sequence[int],
    *,
    porosity: float,
    diameter: float,
    rng: Seed,
    spread: float = 1.25,
    wall: float = 3.0,
    density: FloatImage | None = None,
    largest: float | None = None,
) -> tuple[BoolArray, npt.NDArray[np.float64]]:
    """Polydisperse round closed cells that never touch: random sequential addition, largest first.

    Parameters
    ----------
    shape
        Rows, columns.
    porosity
        Area fraction aimed at over the field; addition stops there, or when no place is left.
    diameter
        Median diameter by number, px (lognormal).
    rng
        Generator or seed.
    spread
        Geometric standard deviation of the diameters.
    wall
        Least wall between two cells, px.
    density
        Map of ``shape`` with values 0…1: chance that a cell, once placed, is kept.
    largest
        Diameters over this are not drawn, px; None for three geometric deviations over the median.

    Returns
    -------
    pores : ndarray of bool
    cells : ndarray, shape (n, 3)
        Row, column and radius of every cell, px.
    """
    _in_open_unit(porosity, "porosity")
    rng = np.random.default_rng(rng)
    # Lognormal cells of median d: mean area π/4 d² exp(2 ln²σ) (Hatch and Choate 1929).
    mean_area = np.pi / 4 * diameter**2 * np.exp(2 * np.log(spread) ** 2)
    number = int(np.ceil(1.15 * porosity * shape[0] * shape[1] / mean_area))
    cap = largest if largest is not None else diameter * spread**3
    drawn = diameter * np.exp(np.log(spread) * rng.standard_normal(number))
    radii = np.sort(np.minimum(drawn, cap))[::-1] / 2
    cells = _without_overlap(shape, radii=radii, wall=wall, rng=rng)
    if density is not None:
        at = cells[:, :2].astype(int)
        cells = cells[rng.uniform(size=len(cells)) < density[at[:, 0], at[:, 1]]]
    cells = _up_to_area(cells, target=porosity * shape[0] * shape[1], rng=rng)
    return paint_discs(shape, centres=cells[:, :2], radii=cells[:, 2]), cells


def _without_overlap(shape: Sequence[int], *, radii: FloatImage, wall: float, rng: np.random.Generator) -> FloatImage:
    placed = np.empty((len(radii), 3))
    count = 0
    for radius in radii:
        tries = rng.uniform(0, shape, size=(60, 2))
        others = placed[:count]
        for trial in tries:
            gap = np.hypot(others[:, 0] - trial[0], others[:, 1] - trial[1]) - others[:, 2] - radius
            if not (gap < wall).any():
                placed[count] = (*trial, radius)
                count += 1
                break
    return placed[:count]


def _up_to_area(cells: FloatImage, *, target: float, rng: np.random.Generator) -> FloatImage:
    cells = cells[rng.permutation(len(cells))]
    return cells[np.cumsum(np.pi * cells[:, 2] ** 2) <= target]


def voronoi_foam(
    shape: Sequence[int], *, cell: float, wall: float, rng: Seed, regularity: float = 0.7, rounding: float = 0.0
) -> BoolArray:
    """Foam: Voronoi cells with straight walls of constant thickness.

    Parameters
    ----------
    shape
        Rows, columns.
    cell
        Cell size √(area per cell), px.
    wall
        Wall thickness, px: a pixel is wall within half of it from the bisector of its two nearest seeds.
    rng
        Generator or seed.
    regularity
        0 for seeds thrown at random, 1 for the hexagonal lattice.
    rounding
        Standard deviation of the smoothing that rounds cell corners, px; 0 leaves them sharp.
    """
    rng = np.random.default_rng(rng)
    seeds = lattice(shape, spacing=cell, jitter=(1 - regularity), rng=rng)
    rows, columns = np.indices(tuple(shape))
    points = np.column_stack([rows.ravel(), columns.ravel()]).astype(float)
    distance, index = cKDTree(seeds).query(points, k=2)
    between = np.linalg.norm(seeds[index[:, 0]] - seeds[index[:, 1]], axis=1)
    to_bisector = (distance[:, 1] ** 2 - distance[:, 0] ** 2) / (2 * np.maximum(between, 1e-9))
    pores = (to_bisector > wall / 2).reshape(tuple(shape))
    return gaussian_filter(pores.astype(np.float32), rounding) > 0.5 if rounding > 0 else pores


def bead_packing(
    shape: Sequence[int], *, bead: float, rng: Seed, overlap: float = 0.06, spread: float = 0.12, jitter: float = 0.22
) -> BoolArray:
    """Packing of polymer beads that touch and are grown together at their necks; the space between them is pore.

    Parameters
    ----------
    shape
        Rows, columns.
    bead
        Mean bead diameter, px.
    rng
        Generator or seed.
    overlap
        Mean overlap of neighbours relative to the diameter.
    spread
        Relative standard deviation of bead diameters.
    jitter
        Disorder of the centres, 0 for the hexagonal lattice.
    """
    rng = np.random.default_rng(rng)
    # A hexagonal lattice of neighbour distance s has √3/2·s² per point.
    neighbour = bead * (1 - overlap)
    centres = lattice(shape, spacing=neighbour * np.sqrt(np.sqrt(3) / 2), jitter=jitter, rng=rng)
    radii = bead / 2 * np.clip(1 + spread * rng.standard_normal(len(centres)), 0.4, 1.6)
    return ~paint_discs(shape, centres=centres, radii=radii)


def lattice(shape: Sequence[int], *, spacing: float, jitter: float, rng: Seed) -> FloatImage:
    """Points of a disordered hexagonal lattice over a field and one margin around it.

    Parameters
    ----------
    shape
        Rows, columns.
    spacing
        √(area per point), px.
    jitter
        Standard deviation of the displacement relative to ``spacing``.
    rng
        Generator or seed.

    Returns
    -------
    ndarray, shape (n, 2)
        Row and column of every point.
    """
    rng = np.random.default_rng(rng)
    step = spacing * np.sqrt(2 / np.sqrt(3))
    high = step * np.sqrt(3) / 2
    rows = np.arange(-3, shape[0] / high + 4)
    columns = np.arange(-3, shape[1] / step + 4)
    grid_rows, grid_columns = np.meshgrid(rows, columns, indexing="ij")
    points = np.column_stack([(grid_rows * high).ravel(), ((grid_columns + 0.5 * (grid_rows % 2)) * step).ravel()])
    return points + rng.normal(scale=jitter * spacing, size=points.shape)


def paint_discs(shape: Sequence[int], *, centres: FloatImage, radii: FloatImage) -> BoolArray:
    """Union of discs: pixels whose centre lies within a radius of a centre.

    Parameters
    ----------
    shape
        Rows, columns.
    centres
        Row and column of each disc, shape (n, 2), px; may lie outside the field.
    radii
        Radius of each disc, px.
    """
    painted = np.zeros(tuple(shape), dtype=bool)
    for (row, column), radius in zip(centres, radii, strict=True):
        top, bottom = max(0, int(np.ceil(row - radius))), min(shape[0], int(np.floor(row + radius)) + 1)
        left, right = max(0, int(np.ceil(column - radius))), min(shape[1], int(np.floor(column + radius)) + 1)
        if top >= bottom or left >= right:
            continue
        r, c = np.ogrid[top:bottom, left:right]
        painted[top:bottom, left:right] |= (r - row) ** 2 + (c - column) ** 2 <= radius**2
    return painted


def _in_open_unit(value: float, name: str) -> None:
    if not 0 < value < 1:
        raise ValueError(f"{name} must lie strictly between 0 and 1, not {value!r}")
