"""segment_picture: from a Picture to its particles and their pores."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import BoolArray, Picture, Section, View
from poroscan.segment.cleanup import Float32, noise_level
from poroscan.segment.drawing import draw_particles
from poroscan.segment.excluded import box_mask, fill_unknown
from poroscan.segment.frame import frame_weight
from poroscan.segment.inside import find_pores
from poroscan.segment.outline import find_bodies, like_debris, reduce_picture
from poroscan.segment.pores import Pores
from poroscan.segment.result import Segmentation, Threshold
from poroscan.segment.settings import SegmentSettings
from poroscan.segment.trained import Odds, classify
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


@dataclass(frozen=True, eq=False)
class _Task:
    """What the pores of every particle are found from."""

    picture: Picture
    found: _Found
    settings: SegmentSettings
    noise: float
    given_pores: BoolArray | None
    odds: Odds | None


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
    if picture.excluded:
        unknown = box_mask(picture.grey.shape, picture.excluded)
        picture = replace(picture, grey=fill_unknown(picture.grey, unknown))
    grey = picture.grey
    if float(grey.min()) == float(grey.max()) and given_particles is None:
        return _nothing(grey.shape, ("constant_picture", "no_particle"))
    found = _particles(grey, settings, given_particles)
    return _sections(picture, found, settings, strokes, given_pores)


def _nothing(shape: tuple[int, ...], flags: tuple[str, ...]) -> Segmentation:
    return Segmentation("whole", (), np.zeros(shape, np.int32), np.zeros(shape, bool), "none", None, flags)


def _particles(grey: Float32, settings: SegmentSettings, given: npt.NDArray[np.integer] | BoolArray | None) -> _Found:
    if given is not None:
        # a mask of one value holds particles only by their being apart; several values are numbers of particles
        one_value = np.unique(given[given > 0]).size <= 1
        labels = _renumber((ndimage.label(given > 0)[0] if one_value else given).astype(np.int32))
        if not labels.any():
            return _Found("whole", labels, "given outline", flags=("no_particle",))
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
    drawn = draw_particles(grey, best, step, settings)
    if not drawn.labels.any():
        return _Found("whole", drawn.labels, "none", flags=("no_particle",))
    method = f"outline: {best.name}"
    debris = settings.outline == "auto" and like_debris(best)
    flags = ("outline_uncertain",) if drawn.raw is None or debris else ()
    notes = (*drawn.notes, *((DEBRIS,) if debris else ()))
    return _Found(_view_of(drawn.labels, settings), drawn.labels, method, drawn.raw, drawn.split, flags, notes)


DEBRIS = "what was found is small against the picture and hardly stands out from it: is it debris on a surface?"


def _interior(shape: tuple[int, ...]) -> _Found:
    return _Found("interior", np.ones(shape, np.int32), "interior view", flags=("interior_view",))


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
    """Pores of every particle found."""
    if not found.labels.any():
        return replace(
            _nothing(picture.grey.shape, (*found.flags, "no_particle")), view=found.view, method=found.method
        )
    pores = np.zeros(picture.grey.shape, bool)
    odds = classify(picture.grey, strokes) if strokes is not None and settings.pores == "trained" else None
    task = _Task(picture, found, settings, noise_level(picture.grey), given_pores, odds)
    sections, thresholds, notes = [], [], list(found.notes)
    for k, box in enumerate(ndimage.find_objects(found.labels), start=1):
        window = _with_margin(box, picture.grey.shape)
        section, threshold = _section(task, k, window)
        pores[window] |= section.pores
        sections.append(section)
        thresholds.append((threshold, float(section.particle.sum())))
    flags = tuple(dict.fromkeys((*found.flags, *(("edge_view",) if found.view == "edge" else ()))))
    return Segmentation(
        found.view, tuple(sections), found.labels, pores, found.method, _mean_threshold(thresholds), flags, tuple(notes)
    )


def _with_margin(box: tuple[slice, ...], shape: tuple[int, ...]) -> tuple[slice, ...]:
    return tuple(slice(max(0, s.start - 2), min(n, s.stop + 2)) for s, n in zip(box, shape, strict=True))


def _section(task: _Task, k: int, window: tuple[slice, ...]) -> tuple[Section, Threshold | None]:
    picture, found = task.picture, task.found
    particle = found.labels[window] == k
    result, threshold = _pores_in(task, particle, window)
    banded = result.low is not result.pores
    cut = _cut(particle, window, picture.grey.shape)
    flags = dict.fromkeys((*result.flags, *_view_flags(found, k, cut)))
    section = Section(
        pores=result.pores,
        particle=particle,
        pixel_size=picture.pixel_size,
        view=found.view,
        name=str(k),
        origin=tuple(s.start for s in window),
        grey=picture.grey[window],
        pores_low=result.low if banded else None,
        pores_high=result.high if banded else None,
        frame_weight=_weight(particle, picture.grey.shape, cut, found.view),
        circle=fit_circle(arc_points(particle)) if found.view == "edge" else None,
        flags=tuple(flags),
    )
    return section, threshold


def _pores_in(task: _Task, particle: BoolArray, window: tuple[slice, ...]) -> tuple[Pores, Threshold | None]:
    if task.given_pores is not None:
        mask = np.asarray(task.given_pores[window], bool) & particle
        return Pores(mask, mask, mask, math.nan, math.nan, "given pores", () if mask.any() else ("no_pores",)), None
    raw = None if task.found.raw is None else task.found.raw[window]
    odds = None if task.odds is None else task.odds.crop(window)
    return find_pores(task.picture.grey[window], particle, task.settings, noise=task.noise, raw=raw, odds=odds)


def _view_flags(found: _Found, k: int, cut: bool) -> tuple[str, ...]:
    flags: tuple[str, ...] = {"edge": ("edge_view",), "interior": ("interior_view",), "whole": ()}[found.view]
    if cut and found.view != "interior":
        flags = (*flags, "touches_frame")
    if "outline_uncertain" in found.flags:
        flags = (*flags, "outline_uncertain")
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


def _mean_threshold(found: list[tuple[Threshold | None, float]]) -> Threshold | None:
    known = [(t, w) for t, w in found if t is not None]
    if not known:
        return None
    total = sum(w for _, w in known)
    level = sum(t.level * w for t, w in known) / total
    uncertainty = math.sqrt(sum((t.uncertainty * w / total) ** 2 for t, w in known))
    return replace(known[0][0], level=level, uncertainty=uncertainty)
