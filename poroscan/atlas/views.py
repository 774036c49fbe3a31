"""From a simulated particle to what a user's picture would say of it: masks, rendered pictures, segmentation, descriptors.

A match must not compare clean simulated fields with segmented pictures. Every particle of an atlas is therefore drawn as SEM
pictures of several looks, resolutions and faults, in whole and in interior views, and goes through the same
segmentation and measurement as a user's picture.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.intake.field_sections import midway, section_of_array
from poroscan.measure import MeasureSettings, measure_section
from poroscan.measure.descriptors import descriptors
from poroscan.render import RenderSettings
from poroscan.render.sem import render_section
from poroscan.render.settings import look
from poroscan.section import UNKNOWN_PIXEL_SIZE, BoolArray, Picture, Section
from poroscan.segment import SegmentSettings, segment_picture

#: Closings of the outline over the particle's extent, the first of which joins nearly all polymer to one body is taken: the gaps
#: between the beads at the surface of a bead structure are wider than the mouths of open pores.
CLOSINGS = (0.025, 0.035, 0.05, 0.07, 0.1)
#: Share of the polymer that the particle must hold.
_JOINED = 0.97
#: Looks that a picture of the atlas may have, with their chances.
_LOOKS: Mapping[str, float] = {
    "secondary": 0.4, "backscatter": 0.2, "resin": 0.1, "ion_polished": 0.15, "textured": 0.1, "charging": 0.05,
}  # fmt: skip

#: Least and largest diameter of the particle in a rendered picture, px: descriptors carry no length, so that it only sets how well
#: pores are resolved.
DIAMETERS = (200.0, 440.0)
#: Chance that the segmentation is told what the picture shows (view, dark pores), as a careful user does, rather than left to itself.
_TOLD = 0.5
#: Descriptors need no intervals: as few resamples as are allowed.
_MEASURE = MeasureSettings(bootstrap_replicates=20)

ViewKind = Literal["whole", "interior"]


@dataclass(frozen=True)
class Described:
    """Descriptors of one view of one particle.

    Parameters
    ----------
    kind
        ``clean`` (masks of the field itself), ``whole`` or ``interior`` (rendered and segmented).
    look
        Look of the picture; empty for ``clean``.
    diameter_px
        Diameter of the particle in the picture.
    values
        Descriptor name -> number; NaN where undefined.
    """

    kind: str
    look: str
    diameter_px: float
    values: Mapping[str, float]


def masks(field: npt.NDArray[np.floating], *, scale: float = 1.0) -> tuple[BoolArray, BoolArray]:
    """Pores and particle of a two-dimensional field of polymer fractions, finer by ``scale``.

    Polymer is where the fraction exceeds half-way between the means of the two phases (``midway``), after a Gaussian of one
    cell that takes out the thermal noise. A core that never
    demixed counts as polymer unless it is dilute beside a dense skin.

    Raises
    ------
    ValueError
        If the field is not two-dimensional or holds no polymer.
    """
    if field.ndim != 2:
        raise ValueError(f"field must be two-dimensional (cut a volume first), not {field.ndim}-D")
    smooth = ndimage.gaussian_filter(np.asarray(field, dtype=np.float32), 1.0, mode="nearest")
    level = midway(smooth)
    closing = _closing(smooth, level)
    if scale != 1:
        smooth = ndimage.zoom(smooth, scale, order=1, mode="nearest", grid_mode=True)
    section = _outlined(smooth, level, closing * scale)
    return section.pores, section.particle


def _outlined(field: npt.NDArray[np.float32], level: float, closing: float) -> Section:
    return section_of_array(
        field, pixel_size=UNKNOWN_PIXEL_SIZE, threshold=level, closing_px=max(closing, 2.0), view="whole"
    )


def _closing(field: npt.NDArray[np.float32], level: float) -> float:
    """Least closing radius (cells) that joins nearly all polymer to one body."""
    polymer = field >= level
    extent = max(int(np.ptp(np.flatnonzero(polymer.any(axis=axis)))) + 1 for axis in (0, 1))
    for share in CLOSINGS:
        held = np.count_nonzero(_outlined(field, level, share * extent).particle & polymer)
        if held >= _JOINED * np.count_nonzero(polymer):
            break
    return share * extent


def clean_section(field: npt.NDArray[np.floating]) -> Section:
    """The particle of a two-dimensional field as a Section, without rendering."""
    pores, particle = masks(field)
    margin = ((2, 2), (2, 2))
    return Section(np.pad(pores, margin), np.pad(particle, margin), UNKNOWN_PIXEL_SIZE)


def picture_of(
    field: npt.NDArray[np.floating], *, kind: ViewKind, diameter_px: float, rng: np.random.Generator
) -> tuple[Picture, str]:
    """A rendered SEM picture of a field, and the name of its look.

    Parameters
    ----------
    field
        Polymer fraction, 2-D.
    kind
        ``whole``: the particle with ground around it; ``interior``: a square from inside it.
    diameter_px
        Diameter of the particle in the picture.
    rng
        Source of the look, the faults and the place of an interior view.
    """
    _, particle = masks(field)
    scale = diameter_px / np.sqrt(4 / np.pi * np.count_nonzero(particle))
    pores, particle = _placed(*masks(field, scale=scale), rng=rng)
    name = str(rng.choice(list(_LOOKS), p=list(_LOOKS.values())))
    rendered = render_section(pores, particle, _varied(look(name), rng), rng=rng)
    grey = rendered.grey.astype(np.float32) / np.float32(255)
    if kind == "interior":
        grey = np.ascontiguousarray(_inner_square(grey, rendered.labels > 0, rng=rng))
    return Picture(grey, UNKNOWN_PIXEL_SIZE, name=f"{kind}-{name}"), name


def describe_clean(field: npt.NDArray[np.floating]) -> Described:
    """Descriptors of the masks of the field itself."""
    section = clean_section(field)
    diameter = float(np.sqrt(4 / np.pi * np.count_nonzero(section.particle)))
    return Described("clean", "", diameter, _values(section))


def describe_rendered(
    field: npt.NDArray[np.floating], *, kind: ViewKind, diameter_px: float, rng: np.random.Generator
) -> Described | None:
    """Descriptors after rendering and segmentation; None where the segmentation found no particle."""
    picture, name = picture_of(field, kind=kind, diameter_px=diameter_px, rng=rng)
    told = SegmentSettings(view=kind, pore_shade="dark") if rng.random() < _TOLD else SegmentSettings()
    sections = segment_picture(picture, told).sections
    if not sections:
        return None
    largest = max(sections, key=lambda s: int(np.count_nonzero(s.particle)))
    if not _is_the_particle(largest, kind, diameter_px):
        return None
    return Described(kind, name, diameter_px, _values(largest))


def _is_the_particle(section: Section, kind: ViewKind, diameter_px: float) -> bool:
    """Whether the segmentation found the particle, and not a bead of it: the match can learn nothing from a wrong outline."""
    if kind == "interior":
        return section.view == "interior"
    return section.view == "whole" and int(np.count_nonzero(section.particle)) > 0.5 * np.pi / 4 * diameter_px**2


def describe_all(field: npt.NDArray[np.floating], *, wholes: int, interiors: int, seed: int) -> Iterator[Described]:
    """Clean descriptors, then those of several rendered views at the diameters of ``DIAMETERS``."""
    yield describe_clean(field)
    rng = np.random.default_rng(seed)
    for i in range(wholes + interiors):
        kind: ViewKind = "whole" if i < wholes else "interior"
        diameter = float(np.exp(rng.uniform(*np.log(DIAMETERS))))
        made = describe_rendered(field, kind=kind, diameter_px=diameter, rng=rng)
        if made is not None:
            yield made


def _values(section: Section) -> Mapping[str, float]:
    measurement = measure_section(section, _MEASURE, rng=0)
    return descriptors(measurement.record, measurement.curves)


def _placed(pores: BoolArray, particle: BoolArray, *, rng: np.random.Generator) -> tuple[BoolArray, BoolArray]:
    """The particle turned by a quarter turn or mirrored at random, with ground around it."""
    margin = int(0.06 * max(particle.shape)) + 8
    turns, mirror = int(rng.integers(4)), bool(rng.integers(2))
    out = []
    for mask in (pores, particle):
        turned = np.rot90(mask[:, ::-1] if mirror else mask, turns)
        out.append(np.pad(turned, margin))
    return out[0], out[1]


def _varied(settings: RenderSettings, rng: np.random.Generator) -> RenderSettings:
    """The look with faults of random strength, as pictures of one laboratory differ."""
    return replace(
        settings,
        dose=float(np.exp(rng.uniform(np.log(120), np.log(900)))),
        blur=float(rng.uniform(0.4, 1.6)),
        tilt=float(rng.uniform(0, 0.15)),
        tilt_deg=float(rng.uniform(0, 360)),
        unevenness=float(rng.uniform(0, 0.08)),
        pore_light=float(np.clip(settings.pore_light * rng.uniform(0.3, 1.2), 0, 1)),
        edge=settings.edge * float(rng.uniform(0.3, 1.3)),
        gain=float(rng.uniform(0.8, 1.15)),
        detector_deg=float(rng.uniform(0, 360)),
    )


def _inner_square(
    grey: npt.NDArray[np.float32], particle: BoolArray, *, rng: np.random.Generator
) -> npt.NDArray[np.float32]:
    """A square that lies inside the particle, of 0.4 to 0.6 of its diameter."""
    depth = ndimage.distance_transform_edt(np.pad(particle, 1))[1:-1, 1:-1]
    diameter = np.sqrt(4 / np.pi * np.count_nonzero(particle))
    half = min(rng.uniform(0.2, 0.3) * diameter, depth.max() / 1.45)
    rows, columns = np.nonzero(depth >= 1.42 * half)
    pick = int(rng.integers(rows.size))
    half = int(half)
    r, c = int(rows[pick]), int(columns[pick])
    return grey[max(r - half, 0) : r + half, max(c - half, 0) : c + half]
