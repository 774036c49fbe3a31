"""segment_picture: from a Picture to its particles and their pores."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import BoolArray, Picture, Section, View
from poroscan.segment.cleanup import Float32, bands, noise_level, shading
from poroscan.segment.closing import close_body, distance_to, fill_holes, split_touching
from poroscan.segment.frame import frame_weight
from poroscan.segment.histogram import Levels, bright_share, find_levels
from poroscan.segment.outline import BY_GREY, Candidate, find_bodies, reduce_picture, texture_window
from poroscan.segment.pores import PORES, Inside, Pores, fixed, threshold_of
from poroscan.segment.result import Segmentation, Threshold
from poroscan.segment.settings import SegmentSettings
from poroscan.segment.variation import smooth_edges_kept
from poroscan.segment.view import arc_points, fit_circle, is_edge

Labels = npt.NDArray[np.int32]


@dataclass(frozen=True, eq=False)
class _Found:
    """Particles of the picture before pores."""

    view: View
    labels: Labels
    method: str
    raw: BoolArray | None = None
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
    feature = _fine_feature(grey, best, step)
    radius = settings.closing_radius_px
    for k, box in enumerate(ndimage.find_objects(coarse), start=1):
        pad = 6
        rows, columns = (
            slice(max(0, (s.start - pad) * step), min(n, (s.stop + pad) * step))
            for s, n in zip(box, grey.shape, strict=True)
        )
        piece = _enlarge(coarse, grey.shape, step)[rows, columns]
        mask, gain, used = _fine_mask(piece, k, feature[rows, columns], best, step, radius)
        if not mask.any():
            continue
        number = int(labels.max()) + 1
        labels[rows, columns][mask & (labels[rows, columns] == 0)] = number
        own = np.unique(coarse[connected == connected[coarse == k][0]])
        if (own > 0).sum() > 1:
            split.add(number)
        notes.append(f"particle {number}: closing by {used:.0f} pixels added {100 * gain:.1f} % to the area")
    labels = _renumber(labels)
    if not labels.any():
        return _Found("whole", labels, best.name, flags=("no_particle",))
    own_grey = feature if best.name in BY_GREY else None
    return _Found(
        _view_of(labels, settings), labels, f"outline: {best.name}", own_grey, frozenset(split), (), tuple(notes)
    )


def _enlarge(coarse: npt.NDArray[np.generic], shape: tuple[int, ...], step: int) -> npt.NDArray[np.generic]:
    return np.repeat(np.repeat(coarse, step, axis=0), step, axis=1)[: shape[0], : shape[1]]


def _fine_feature(grey: Float32, best: Candidate, step: int) -> BoolArray:
    """Pixels that belong to a particle by their own grey value, at full resolution."""
    smoothed = ndimage.gaussian_filter(grey, 1.0)
    if best.name == "pale":
        return smoothed > best.level
    if best.name == "dark":
        return smoothed < -best.level
    ground = smoothed[_enlarge(ndimage.binary_erosion(~best.bodies, iterations=3, border_value=1), grey.shape, step)]
    if ground.size < 50:
        return np.zeros(grey.shape, bool)
    middle = float(np.median(ground))
    spread = 1.4826 * float(np.median(np.abs(ground - middle)))
    return np.abs(smoothed - middle) > 3.5 * spread + 1e-6


def _fine_mask(
    piece: Labels, k: int, raw: BoolArray, best: Candidate, step: int, radius: float | None
) -> tuple[BoolArray, float, float]:
    body = piece == k
    others = (piece > 0) & ~body
    band = 3 * step if best.name in BY_GREY else (texture_window(best.raw.shape) // 2 + 1) * step
    grown = distance_to(body) <= (3 * step if best.name in BY_GREY else step)
    deep = distance_to(~body) > band
    filled = fill_holes((raw & grown & ~others) | deep)
    filled = _largest(ndimage.binary_opening(filled, np.ones((3, 3))) | deep)
    closed, used = close_body(filled, radius=radius)
    closed = closed & ~others
    return closed, float((closed & ~filled).sum()) / max(float(closed.sum()), 1.0), used


def _largest(mask: BoolArray) -> BoolArray:
    labels, count = ndimage.label(mask)
    if count <= 1:
        return mask
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    return labels == int(sizes.argmax())


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
        result, threshold = _find_pores(
            grey, particle, noise, settings, None if found.raw is None else found.raw[window]
        )
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
    grey: Float32, particle: BoolArray, noise: float, settings: SegmentSettings, raw: BoolArray | None
) -> tuple[Pores, Threshold | None]:
    level, residual = _levelled(grey, particle, noise, settings, raw)
    levels = find_levels(level, particle, residual_noise=residual, hint=_rim_grey(level, particle, raw))
    bright = settings.pore_shade == "bright" or (
        settings.pore_shade == "auto" and _bright_pores(level, particle, levels)
    )
    if bright:
        level = -level
        levels = find_levels(level, particle, residual_noise=residual, hint=-levels.material)
    inside = Inside(level, particle, residual, levels)
    if settings.threshold is not None:
        result = fixed(inside, settings, -settings.threshold if bright else settings.threshold)
    else:
        result = PORES["auto" if settings.pores == "trained" else settings.pores](inside, settings)
    return result, threshold_of(result, bright=bright)


def _levelled(
    grey: Float32, particle: BoolArray, noise: float, settings: SegmentSettings, raw: BoolArray | None
) -> tuple[Float32, float]:
    """Grey values without shading, bands and noise, and the noise left."""
    rough = ndimage.gaussian_filter(grey, 1.0)
    surface = shading(rough, particle) if settings.flatten else np.zeros_like(grey)
    if settings.destripe:
        rough = rough - surface
        residual = noise / (2 * math.sqrt(math.pi))
        levels = find_levels(rough, particle, residual_noise=residual, hint=_rim_grey(rough, particle, raw))
        material = particle & (np.abs(rough - levels.material) < 2.5 * levels.spread)
        surface = surface + bands(rough, material)
    level = grey - surface
    if not settings.denoise:
        return level, noise
    return smooth_edges_kept(level, particle, weight=noise), NOISE_LEFT * noise


#: Standard deviation left by smoothing with the noise as its weight, over the noise (measured on flat fields of white noise).
NOISE_LEFT = 0.28


def _rim_grey(grey: Float32, particle: BoolArray, raw: BoolArray | None) -> float | None:
    """Grey value of the material, read at the rim, which the outline has shown to be unlike the ground."""
    if raw is None:
        return None
    depth = distance_to(~particle)
    rim = raw & particle & (depth > 3) & (depth <= max(8.0, 0.12 * float(depth.max())))
    return float(np.median(grey[rim])) if int(rim.sum()) >= 50 else None


def _bright_pores(grey: Float32, particle: BoolArray, levels: Levels) -> bool:
    """Pores are taken as bright only where hardly anything is darker than the material and a good deal is brighter."""
    share = bright_share(grey, particle, levels)
    return levels.excess < 0.03 and share > 0.03 and share > 3.0 * levels.excess


def _mean_threshold(found: list[tuple[Threshold | None, float]]) -> Threshold | None:
    known = [(t, w) for t, w in found if t is not None]
    if not known:
        return None
    total = sum(w for _, w in known)
    level = sum(t.level * w for t, w in known) / total
    uncertainty = math.sqrt(sum((t.uncertainty * w / total) ** 2 for t, w in known))
    return replace(known[0][0], level=level, uncertainty=uncertainty)
