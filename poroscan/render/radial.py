"""What a particle adds to a structure: a skin, a porosity that changes with radius or angle, finger-like pores."""

from __future__ import annotations

import numpy as np
from edt import edt

from poroscan.render.outlines import FloatImage, Outline
from poroscan.render.structures import Seed
from poroscan.section import BoolArray


def with_skin(pores: BoolArray, *, particle: BoolArray, thickness: float) -> BoolArray:
    """Close all pores within a given distance of the outline.

    Parameters
    ----------
    pores, particle
        bool arrays of one shape; pores outside the particle are dropped.
    thickness
        Thickness of the skin, px, from the outline, which runs half a pixel outside the last pixel centre inside.

    Notes
    -----
    The frame is no outline: a particle cut by the border of the array gets no skin along it.
    """
    depth = edt(particle, black_border=False, parallel=1) - 0.5
    return pores & particle & (depth >= thickness)


def ramp(outline: Outline, *, shape: tuple[int, int], centre: float, rim: float) -> FloatImage:
    """Porosity map φ = centre + (rim − centre)·r/R(θ), held at ``rim`` outside the outline.

    The mean over the section is centre + 2(rim − centre)/3 for a circle, and over the sphere that the section cuts
    through the middle centre + 3(rim − centre)/4.
    """
    distance, theta = outline.polar(shape)
    return centre + (rim - centre) * np.minimum(distance / outline.reach(theta), 1.0)


def dipole(
    outline: Outline, *, shape: tuple[int, int], mean: float, amplitude: float, direction_deg: float
) -> FloatImage:
    """Porosity map φ(θ) = mean·(1 + amplitude·cos(θ − direction)), constant along every radius.

    Its first angular harmonic relative to the mean is ``amplitude``, its direction ``direction_deg`` (counter-clockwise on
    the screen from the +column direction).
    """
    _, theta = outline.polar(shape)
    return mean * (1 + amplitude * np.cos(theta - np.deg2rad(direction_deg)))


def fingers(
    outline: Outline,
    *,
    shape: tuple[int, int],
    number: int,
    width: float,
    skin: float,
    length: float,
    rng: Seed,
) -> BoolArray:
    """Finger-like radial pores: tapered channels that start under the skin and widen towards the centre.

    Parameters
    ----------
    outline
        Outline of the particle.
    shape
        Rows, columns.
    number
        Number of fingers around the particle.
    width
        Width of a finger at its broad end, px.
    skin
        Distance of the narrow end from the outline, px.
    length
        Mean length relative to the radius.
    rng
        Generator or seed; positions, lengths (±15 %), widths (±20 %) and a slight bend vary.
    """
    rng = np.random.default_rng(rng)
    distance, theta = outline.polar(shape)
    depth = outline.reach(theta) - distance
    pores = np.zeros(shape, dtype=bool)
    for index in range(number):
        centre = 2 * np.pi * (index + rng.uniform(-0.18, 0.18)) / number
        end = skin + outline.radius * length * rng.uniform(0.85, 1.15)
        broad = width * rng.uniform(0.8, 1.2)
        pores |= _finger(distance, theta, depth, centre=centre, start=skin, end=end, broad=broad, rng=rng)
    return pores


def _finger(
    distance: FloatImage,
    theta: FloatImage,
    depth: FloatImage,
    *,
    centre: float,
    start: float,
    end: float,
    broad: float,
    rng: np.random.Generator,
) -> BoolArray:
    along = (depth - start) / (end - start)
    inside = (along > 0) & (along < 1)
    s = np.clip(along, 0, 1)
    # A teardrop: narrow under the skin, broadest at 0.75 of the length, rounded at the inner end.
    half = broad / 2 * np.minimum(0.25 + s, 1.0) * np.sqrt(np.clip(1 - ((s - 0.6) / 0.4) ** 4 * (s > 0.6), 0, 1))
    bend = broad * rng.uniform(-0.5, 0.5) * np.sin(np.pi * s * rng.uniform(0.7, 1.6))
    sideways = distance * _wrapped(theta - centre) - bend
    return inside & (np.abs(sideways) < half) & (np.abs(_wrapped(theta - centre)) < np.pi / 4)


def _wrapped(angle: FloatImage) -> FloatImage:
    return (angle + np.pi) % (2 * np.pi) - np.pi
