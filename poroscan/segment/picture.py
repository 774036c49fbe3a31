"""segment_picture: from a Picture to its particles and their pores."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import BoolArray, Picture, Section, View
from poroscan.segment.cleanup import Float32, bands, noise_level, shading, smooth
from poroscan.segment.closing import close_mask, distance_to, fill_holes, split_touching
from poroscan.segment.frame import frame_weight
from poroscan.segment.outline import Candidate, find_bodies, reduce_picture
from poroscan.segment.pores import PORES, Inside, Pores, fixed, levels_of, threshold_of
from poroscan.segment.result import Segmentation, Threshold
from poroscan.segment.settings import SegmentSettings
from poroscan.segment.view import arc_points, fit_circle, is_edge

Labels = npt.NDArray[np.int32]


@dataclass(frozen=True, eq=False)
class _Found:
    """Particles of the picture before pores."""

    view: View
    labels: Labels
    method: str
    split: frozenset[int] = frozenset()
    flags: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


def segment_picture(
    picture: Picture,
    settings: SegmentSettings | None = None,
    *,
    strokes: npt.NDArray[np.integer] | None = None,
    given_pores: BoolArray | None = None,
    given_particles: npt.NDArray[np.integer] | BoolArray | None = None,
) -> Segmentation:
    """Find the particles of a picture and the pores inside them.

    Parameters
    ----------
    picture
        The picture, data banner cut off.
    settings
        Choices; None takes the defaults.
    strokes
        Integer array of the picture's shape: 0 unlabelled, 1 material, 2 pore, 3 surroundings (for ``pores = "trained"``).
    given_pores
        bool array of the picture's shape that replaces the pore finding.
    given_particles
        Label or bool array of the picture's shape that replaces the outline finding.

    Returns
    -------
    Segmentation
        Degenerate pictures give no sections and a flag, never an error.

    Raises
    ------
    ValueError
        If an array is not of the picture's shape, or ``pores = "trained"`` comes without strokes.
    """
    settings = settings or SegmentSettings()
    for name, array in (("strokes", strokes), ("given_pores", given_pores), ("given_particles", given_particles)):
        if array is not None and np.shape(array) != picture.grey.shape:
            raise ValueError(f"{name} must have the picture's shape {picture.grey.shape}, not {np.shape(array)}")
    if settings.pores == "trained" and strokes is None and given_pores is None:
        raise ValueError('settings.pores "trained" needs strokes: a label picture (1 material, 2 pore, 3 surroundings)')
    grey = picture.grey
    if float(grey.min()) == float(grey.max()) and given_particles is None:
        return _nothing(grey.shape, ("constant_picture", "no_particle"))
    found = _particles(grey, settings, given_particles)
    return _sections(picture, found, settings, strokes, given_pores)


def _nothing(shape: tuple[int, ...], flags: tuple[str, ...]) -> Segmentation:
    return Segmentation("whole", (), np.zeros(shape, np.int32), np.zeros(shape, bool), "none", None, flags)


def _particles(grey: Float32, settings: SegmentSettings, given: npt.NDArray[np.generic] | None) -> _Found:
    if given is not None:
        labels = ndimage.label(given)[0] if given.dtype == np.bool_ else given
        labels = _renumber(np.asarray(labels).astype(np.int32))
        return _Found(_view_of(labels, settings), labels, "given outline")
    if settings.view == "interior":
        return _interior(grey.shape)
    small, step = reduce_picture(ndimage.gaussian_filter(grey, 1.0))
    radius = None if settings.closing_radius_px is None else settings.closing_radius_px / step
    best = find_bodies(small, settings.outline, radius=radius)
    if best is None:
        return (
            _interior(grey.shape)
            if settings.view == "auto"
            else _Found(settings.view, np.zeros(grey.shape, np.int32), "none")
        )
    return _draw(grey, best, step, settings)


def _interior(shape: tuple[int, ...]) -> _Found:
    return _Found("interior", np.ones(shape, np.int32), "interior view", flags=("interior_view",))


def _draw(grey: Float32, best: Candidate, step: int, settings: SegmentSettings) -> _Found:
    """Outline at full resolution, particles apart and dust dropped."""
    bodies = _drop_dust(best.bodies, settings, step)
    coarse = split_touching(bodies, settings.split_neck if settings.split_touching else 0.0)
    connected, _ = ndimage.label(bodies)
    labels = np.zeros(grey.shape, np.int32)
    split, notes = set(), []
    feature = ndimage.gaussian_filter(grey, 1.0) * (-1 if best.name == "dark" else 1)
    radius = best.radius * step if settings.closing_radius_px is None else settings.closing_radius_px
    for k, box in enumerate(ndimage.find_objects(coarse), start=1):
        pad = 6
        rows, columns = (
            slice(max(0, (s.start - pad) * step), min(n, (s.stop + pad) * step))
            for s, n in zip(box, grey.shape, strict=True)
        )
        piece = _enlarge(coarse, rows, columns, step)
        mask, gain = _fine_mask(piece, k, feature[rows, columns], best, step, radius)
        if not mask.any():
            continue
        number = int(labels.max()) + 1
        labels[rows, columns][mask & (labels[rows, columns] == 0)] = number
        own = np.unique(coarse[connected == connected[coarse == k][0]])
        if (own > 0).sum() > 1:
            split.add(number)
        notes.append(f"particle {number}: closing by {radius:.0f} pixels added {100 * gain:.1f} % to the area")
    labels = _renumber(labels)
    if not labels.any():
        return _Found("whole", labels, best.name, flags=("no_particle",))
    return _Found(_view_of(labels, settings), labels, f"outline: {best.name}", frozenset(split), (), tuple(notes))


def _enlarge(coarse: Labels, rows: slice, columns: slice, step: int) -> Labels:
    r = np.arange(rows.start, rows.stop) // step
    c = np.arange(columns.start, columns.stop) // step
    return coarse[np.ix_(r, c)]


def _fine_mask(
    piece: Labels, k: int, feature: Float32, best: Candidate, step: int, radius: float
) -> tuple[BoolArray, float]:
    body = piece == k
    if best.name == "texture":
        return body, 0.0
    near = distance_to(body) <= 3 * step
    others = (piece > 0) & ~body
    deep = distance_to(~body) > 3 * step
    raw = ((feature > best.level) & near & ~others) | deep
    filled = fill_holes(raw)
    closed = fill_holes(close_mask(filled, radius)) & ~others
    labels, count = ndimage.label(closed)
    if count > 1:
        sizes = np.bincount(labels.ravel())
        sizes[0] = 0
        closed = labels == int(sizes.argmax())
    return closed, float(closed.sum() - (filled & closed).sum()) / max(float(closed.sum()), 1.0)


def _drop_dust(bodies: BoolArray, settings: SegmentSettings, step: int) -> BoolArray:
    labels, _ = ndimage.label(bodies)
    sizes = np.bincount(labels.ravel()).astype(np.float64)
    sizes[0] = 0
    diameter = 2 * np.sqrt(sizes / math.pi)
    keep = (diameter * step >= settings.min_diameter_px) & (diameter >= settings.min_relative_diameter * diameter.max())
    keep[0] = False
    return keep[labels]


def _renumber(labels: Labels) -> Labels:
    present = np.unique(labels)
    present = present[present > 0]
    table = np.zeros(int(labels.max()) + 1, np.int32)
    table[present] = np.arange(1, present.size + 1)
    return table[np.maximum(labels, 0)]


def _view_of(labels: Labels, settings: SegmentSettings) -> View:
    if settings.view != "auto":
        return settings.view
    if labels.all() and labels.max() == 1:
        return "interior"
    return "edge" if is_edge(labels) else "whole"


def _sections(
    picture: Picture,
    found: _Found,
    settings: SegmentSettings,
    strokes: npt.NDArray[np.integer] | None,
    given_pores: BoolArray | None,
) -> Segmentation:
    if not found.labels.any():
        return replace(
            _nothing(picture.grey.shape, (*found.flags, "no_particle")), view=found.view, method=found.method
        )
    pores = np.zeros(picture.grey.shape, bool)
    noise = noise_level(picture.grey)
    sections, thresholds, notes = [], [], list(found.notes)
    for k, box in enumerate(ndimage.find_objects(found.labels), start=1):
        window = _with_margin(box, picture.grey.shape)
        section, threshold = _section(picture, found, k, window, noise, settings, given_pores)
        pores[window] |= section.pores
        sections.append(section)
        thresholds.append((threshold, float(section.particle.sum())))
    flags = tuple(dict.fromkeys((*found.flags, *(("edge_view",) if found.view == "edge" else ()))))
    return Segmentation(
        found.view, tuple(sections), found.labels, pores, found.method, _mean_threshold(thresholds), flags, tuple(notes)
    )


def _with_margin(box: tuple[slice, ...], shape: tuple[int, ...]) -> tuple[slice, ...]:
    return tuple(slice(max(0, s.start - 2), min(n, s.stop + 2)) for s, n in zip(box, shape, strict=True))


def _section(
    picture: Picture,
    found: _Found,
    k: int,
    window: tuple[slice, ...],
    noise: float,
    settings: SegmentSettings,
    given_pores: BoolArray | None,
) -> tuple[Section, Threshold | None]:
    particle = found.labels[window] == k
    grey = picture.grey[window]
    if given_pores is not None:
        mask = np.asarray(given_pores[window], bool) & particle
        result, threshold = Pores(mask, mask, mask, math.nan, math.nan, "given pores"), None
    else:
        result, threshold = _find_pores(grey, particle, noise, settings)
    banded = threshold is not None
    cut = _cut(particle, window, picture.grey.shape)
    flags = dict.fromkeys((*result.flags, *_view_flags(found, k, cut)))
    section = Section(
        pores=result.pores,
        particle=particle,
        pixel_size=picture.pixel_size,
        view=found.view,
        name=str(k),
        origin=tuple(s.start for s in window),
        grey=grey,
        pores_low=result.low if banded else None,
        pores_high=result.high if banded else None,
        frame_weight=_weight(particle, picture.grey.shape, cut, found.view),
        circle=fit_circle(arc_points(particle)) if found.view == "edge" else None,
        flags=tuple(flags),
    )
    return section, threshold


def _view_flags(found: _Found, k: int, cut: bool) -> tuple[str, ...]:
    flags: tuple[str, ...] = {"edge": ("edge_view",), "interior": ("interior_view",), "whole": ()}[found.view]
    if cut and found.view != "interior":
        flags = (*flags, "touches_frame")
    return (*flags, "split_from_touching") if k in found.split else flags


def _cut(particle: BoolArray, window: tuple[slice, ...], shape: tuple[int, ...]) -> bool:
    rows, columns = window
    return bool(
        (rows.start == 0 and particle[0].any())
        or (columns.start == 0 and particle[:, 0].any())
        or (rows.stop == shape[0] and particle[-1].any())
        or (columns.stop == shape[1] and particle[:, -1].any())
    )


def _weight(particle: BoolArray, frame: tuple[int, ...], cut: bool, view: View) -> float:
    if view == "interior":
        return 1.0
    if cut:
        return math.nan
    box = (int(particle.any(axis=1).sum()), int(particle.any(axis=0).sum()))
    return frame_weight((frame[0], frame[1]), box)


def _find_pores(
    grey: Float32, particle: BoolArray, noise: float, settings: SegmentSettings
) -> tuple[Pores, Threshold | None]:
    spread = float(np.subtract(*np.percentile(grey[particle], [99, 1])))
    smoothed, sigma = smooth(grey, noise, spread) if settings.denoise else (grey, 0.0)
    if settings.flatten:
        smoothed = smoothed - shading(smoothed, particle)
    residual = noise / (2 * sigma * math.sqrt(math.pi)) if sigma else noise
    if settings.destripe:
        first = levels_of(smoothed, particle, residual)
        material = particle & (np.abs(smoothed - first.material) < 2.5 * first.spread)
        smoothed = smoothed - bands(smoothed, material)
    bright = settings.pore_shade == "bright"
    turned = -smoothed if bright else smoothed
    inside = Inside(turned, particle, residual, levels_of(turned, particle, residual))
    if settings.threshold is not None:
        result = fixed(inside, settings, -settings.threshold if bright else settings.threshold)
    else:
        result = PORES["auto" if settings.pores == "trained" else settings.pores](inside, settings)
    return result, threshold_of(result, bright=bright)


def _mean_threshold(found: list[tuple[Threshold | None, float]]) -> Threshold | None:
    known = [(t, w) for t, w in found if t is not None]
    if not known:
        return None
    total = sum(w for _, w in known)
    level = sum(t.level * w for t, w in known) / total
    uncertainty = math.sqrt(sum((t.uncertainty * w / total) ** 2 for t, w in known))
    return replace(known[0][0], level=level, uncertainty=uncertainty)
