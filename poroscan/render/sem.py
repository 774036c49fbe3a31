"""From masks to a picture as a scanning electron microscope would show them, with the exact truth beside it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.ndimage import label as label_components

from poroscan.render.depth import imagined_depth
from poroscan.render.instrument import expose
from poroscan.render.lettering import add_banner, burn_bar
from poroscan.render.settings import RenderSettings
from poroscan.render.specimen import brightness
from poroscan.section import BoolArray


@dataclass(frozen=True, eq=False)
class Rendered:
    """A rendered picture with its truth.

    Parameters
    ----------
    grey
        uint8 picture; its last ``banner_rows`` rows are the data banner.
    pixel_size_um
        Micrometres per pixel.
    labels
        int32, particle number at every pixel above the banner, 0 for surroundings.
    pores
        bool, of the shape of ``labels``.
    banner_rows
        Rows of the data banner; 0 without one.
    truth
        Particle number → what is known of the particle: ``porosity``, ``area_px2``, ``equivalent_diameter_px`` and ``_um``,
        ``centroid_row_px``, ``centroid_col_px``, ``touches_frame`` (0 or 1), ``polar_asymmetry`` and
        ``polar_direction_deg`` counted on the masks, and whatever was passed as ``known``.
    """

    grey: npt.NDArray[np.uint8]
    pixel_size_um: float
    labels: npt.NDArray[np.int32]
    pores: BoolArray
    banner_rows: int
    truth: Mapping[int, Mapping[str, float]]


def render_section(
    pores: BoolArray,
    particle: npt.NDArray[np.bool_] | npt.NDArray[np.integer],
    settings: RenderSettings | None = None,
    *,
    rng: np.random.Generator | int | None,
    depth: npt.NDArray[np.floating] | None = None,
    known: Mapping[int, Mapping[str, float]] | None = None,
) -> Rendered:
    """Picture a cross-section.

    Parameters
    ----------
    pores
        bool array (row, column), True in pore; lies inside ``particle``.
    particle
        bool array, True inside an outline (each connected piece is a particle), or an integer array of particle
        numbers, 0 for surroundings (tells touching particles apart).
    settings
        Look of the picture; None takes the defaults.
    rng
        Generator or seed; the same seed gives the same picture.
    depth
        Depth of the material under each pixel, px, for example from ``depth.depth_below``; NaN pixels, or all of them
        where it is None, get an imagined one.
    known
        What is known beyond the masks, by particle number, passed through to ``truth``.

    Returns
    -------
    Rendered

    Raises
    ------
    ValueError
        If the arrays differ in shape, are not two-dimensional, or pores lie outside the particle.
    """
    settings = RenderSettings() if settings is None else settings
    labels = _as_labels(particle)
    _check(pores, labels, depth)
    rng = np.random.default_rng(rng)
    imagined = imagined_depth(pores, rng=rng, particle=labels > 0, struts=settings.struts)
    below = imagined if depth is None else np.where(np.isnan(depth), imagined, np.asarray(depth, dtype=float))
    signal = brightness(labels, pores, below, settings=settings, rng=rng)
    grey = expose(signal, settings=settings, rng=rng)
    rows = grey.shape[0]
    if settings.bar == "burnt":
        grey = burn_bar(grey, pixel_size_um=settings.pixel_size_um)
    elif settings.bar == "banner":
        grey = add_banner(grey, pixel_size_um=settings.pixel_size_um, words=settings.banner_text)
    truth = particle_truth(pores, labels, pixel_size_um=settings.pixel_size_um, known=known or {})
    return Rendered(grey, settings.pixel_size_um, labels, pores, grey.shape[0] - rows, truth)


def _as_labels(particle: npt.NDArray[np.bool_] | npt.NDArray[np.integer]) -> npt.NDArray[np.int32]:
    particle = np.asarray(particle)
    if particle.dtype == np.bool_:
        return np.asarray(label_components(particle)[0], dtype=np.int32)
    if not np.issubdtype(particle.dtype, np.integer) or particle.min(initial=0) < 0:
        raise ValueError(
            f"particle must be a bool mask or non-negative integer particle numbers, not {particle.dtype} values"
        )
    return particle.astype(np.int32)


def _check(pores: BoolArray, labels: npt.NDArray[np.int32], depth: npt.NDArray[np.floating] | None) -> None:
    if not isinstance(pores, np.ndarray) or pores.dtype != np.bool_:
        raise ValueError("pores must be a bool array (use array.astype(bool))")
    if labels.ndim != 2 or labels.size == 0:
        raise ValueError(f"particle must be a non-empty two-dimensional array, not of shape {labels.shape}")
    if pores.shape != labels.shape:
        raise ValueError(f"pores has shape {pores.shape}, but particle has {labels.shape}")
    if (pores & (labels == 0)).any():
        raise ValueError("pores lie outside particle (use pores & particle)")
    if depth is not None and depth.shape != labels.shape:
        raise ValueError(f"depth has shape {depth.shape}, but particle has {labels.shape}")


def particle_truth(
    pores: BoolArray,
    labels: npt.NDArray[np.int32],
    *,
    pixel_size_um: float,
    known: Mapping[int, Mapping[str, float]],
) -> dict[int, dict[str, float]]:
    """What the masks say of every particle, by its number.

    Parameters
    ----------
    pores, labels
        Masks of one shape.
    pixel_size_um
        Micrometres per pixel.
    known
        Further values by particle number.
    """
    truth: dict[int, dict[str, float]] = {}
    for number in np.unique(labels[labels > 0]).tolist():
        inside = labels == number
        rows, columns = np.nonzero(inside)
        diameter = 2 * np.sqrt(len(rows) / np.pi)
        centre = float(rows.mean()), float(columns.mean())
        frame = rows.min() == 0 or columns.min() == 0 or rows.max() == labels.shape[0] - 1
        amplitude, direction = first_harmonic(pores & inside, inside, centre=centre)
        truth[number] = {
            "porosity": float(pores[inside].mean()),
            "area_px2": float(len(rows)),
            "equivalent_diameter_px": float(diameter),
            "equivalent_diameter_um": float(diameter * pixel_size_um),
            "centroid_row_px": centre[0],
            "centroid_col_px": centre[1],
            "touches_frame": float(frame or columns.max() == labels.shape[1] - 1),
            "polar_asymmetry": amplitude,
            "polar_direction_deg": direction,
            **known.get(number, {}),
        }
    return truth


def first_harmonic(pores: BoolArray, inside: BoolArray, *, centre: tuple[float, float]) -> tuple[float, float]:
    """First angular harmonic of porosity about a centre: amplitude over the mean, and direction (degrees).

    The harmonic is the least-squares fit of m + a·cos θ + b·sin θ to the pore indicator over the pixels inside; both are
    NaN without pores.
    """
    rows, columns = np.nonzero(inside)
    theta = np.arctan2(centre[0] - rows, columns - centre[1])
    basis = np.column_stack([np.ones_like(theta), np.cos(theta), np.sin(theta)])
    mean, a, b = np.linalg.solve(basis.T @ basis, basis.T @ pores[rows, columns].astype(float))
    if mean <= 0:
        return float("nan"), float("nan")
    return float(np.hypot(a, b) / mean), float(np.degrees(np.arctan2(b, a)))
