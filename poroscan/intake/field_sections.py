"""From an array of polymer fractions, or a labelled mask, to the Section that is measured."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Literal

import numpy as np
import numpy.typing as npt

from poroscan.section import PixelSize, Section

#: Share of every side of the array that polymer takes where a field has no outline.
_ON_FACE = 0.05

FieldView = Literal["auto", "whole", "interior"]


def section_of_array(
    values: npt.NDArray,
    *,
    pixel_size: PixelSize,
    threshold: float | None = None,
    closing_px: float | None = None,
    view: FieldView = "auto",
    labels: Mapping[str, int] | None = None,
    name: str = "",
) -> Section:
    """The particle in an array of polymer fractions, or in a labelled mask, as a Section.

    Polymer is where the fraction is at least ``threshold``. The particle is the polymer closed by a ball of radius ``closing_px``
    (so that pores open to the bath stay inside the outline), with its holes filled, its largest piece taken. Pores are the
    part of the particle that is not polymer.

    Parameters
    ----------
    values
        2-D or 3-D array: polymer fraction (any real scale), bool (True is polymer), or whole-number labels with ``labels``.
    pixel_size
        Length of an edge.
    threshold
        Polymer from this value on; None takes half-way between the mean values of the two phases (Ridler and Calvard 1978).
        For a field whose two phases are not both present this is arbitrary: state a threshold for a dense particle.
    closing_px
        Radius in pixels; None takes 2 % of the equivalent diameter of the polymer, at least 2.
    view
        ``whole``, ``interior`` (no outline: everything is particle), or ``auto``: interior where polymer takes at least 5 % of
        every side of the array.
    labels
        Which whole numbers mean ``pore``, ``polymer`` and ``outside``, for a labelled mask; then neither threshold nor closing is
        used.
    name
        Name of the section.

    Returns
    -------
    Section
        ``grey`` holds the field as float32.

    Raises
    ------
    ValueError
        If the array is not 2-D or 3-D, not finite, or holds no polymer; if a parameter is out of range or a label is not listed.
    """
    values = np.asarray(values)
    _check_array(values, closing_px)
    if labels is not None:
        pores, particle = _from_labels(values, labels)
    else:
        polymer = values.astype(bool) if values.dtype == np.bool_ else values >= _threshold(values, threshold)
        if not polymer.any():
            raise ValueError("values hold no polymer at this threshold; lower threshold")
        particle = _filled(polymer, _radius(polymer, closing_px))
        if view == "interior" or (view == "auto" and _least_face_share(polymer) >= _ON_FACE):
            particle = np.ones(values.shape, dtype=bool)
        pores = particle & ~polymer
    shown_view: Literal["whole", "interior"] = "interior" if bool(particle.all()) else "whole"
    return Section(
        pores,
        particle,
        pixel_size,
        view=shown_view,
        name=name,
        origin=(0,) * values.ndim,
        grey=values.astype(np.float32),
    )


def _check_array(values: npt.NDArray, closing_px: float | None) -> None:
    if values.ndim not in (2, 3) or values.size == 0 or values.dtype.kind not in "buif":
        raise ValueError(f"values must be a 2-D or 3-D array of numbers, not {values.dtype} of shape {values.shape}")
    if values.dtype.kind == "f" and not bool(np.isfinite(values).all()):
        raise ValueError("values must be finite; fill or cut off what is NaN or infinite")
    if closing_px is not None and not (math.isfinite(closing_px) and closing_px >= 0):
        raise ValueError(f"closing_px must be at least 0 pixels, not {closing_px!r}")


def _threshold(values: npt.NDArray, threshold: float | None) -> float:
    if threshold is not None:
        if not math.isfinite(threshold):
            raise ValueError(f"threshold must be a finite number, not {threshold!r}")
        return threshold
    return midway(values)


def midway(values: npt.NDArray) -> float:
    """Threshold half-way between the means of what lies below and above it.

    T. W. Ridler and S. Calvard, IEEE Trans. Syst. Man Cybern. 8 (1978) 630–632, iterated to a fixed point.

    Raises
    ------
    ValueError
        If all values are equal, so that nothing is separated.
    """
    low, high = float(values.min()), float(values.max())
    if low == high:
        raise ValueError(f"values are all {low:g}, so no threshold separates polymer from solvent; give threshold")
    cut = 0.5 * (low + high)
    for _ in range(100):
        above = values >= cut
        new = 0.5 * (float(values[above].mean()) + float(values[~above].mean()))
        if abs(new - cut) <= 1e-9 * (high - low):
            break
        cut = new
    return cut


def _radius(polymer: npt.NDArray[np.bool_], closing_px: float | None) -> float:
    if closing_px is not None:
        return closing_px
    count = float(np.count_nonzero(polymer))
    diameter = math.sqrt(4 * count / math.pi) if polymer.ndim == 2 else (6 * count / math.pi) ** (1 / 3)
    return max(2.0, 0.02 * diameter)


def _filled(polymer: npt.NDArray[np.bool_], radius: float) -> npt.NDArray[np.bool_]:
    """Closed by a ball, holes filled, largest piece."""
    from scipy import ndimage

    margin = math.ceil(radius) + 1
    mask = np.pad(polymer, margin)
    if radius > 0:
        # The frame is not background: the closing must not eat in from it, so the padding repeats the border.
        mask = np.pad(polymer, margin, mode="edge")
        near = ndimage.distance_transform_edt(~mask) <= radius
        mask = ndimage.distance_transform_edt(np.pad(near, 1, mode="edge"))[(slice(1, -1),) * polymer.ndim] > radius
    inner = mask[(slice(margin, -margin),) * polymer.ndim] | polymer
    inner = ndimage.binary_fill_holes(inner)
    pieces, count = ndimage.label(inner)
    if count > 1:
        inner = pieces == 1 + int(np.argmax(np.bincount(pieces.ravel())[1:]))
    return inner


def _least_face_share(mask: npt.NDArray[np.bool_]) -> float:
    """Smallest share of the mask on a side of the array."""
    return min(float(mask.take(i, axis=a).mean()) for a in range(mask.ndim) for i in (0, -1))


def _from_labels(values: npt.NDArray, labels: Mapping[str, int]) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_]]:
    unknown = set(labels) - {"pore", "polymer", "outside"}
    if unknown or "polymer" not in labels:
        raise ValueError(f"labels must give pore, polymer and outside, not {', '.join(sorted(labels)) or 'nothing'}")
    present = np.unique(values)
    extra = [v for v in present.tolist() if v not in labels.values()]
    if extra:
        raise ValueError(f"values hold the labels {extra[:5]}, which labels does not name")
    pores = values == labels["pore"] if "pore" in labels else np.zeros(values.shape, dtype=bool)
    particle = pores | (values == labels["polymer"])
    return pores, particle
