"""Pictures of the accuracy table: varied structure, size, look, noise, tilt and contrast, each from its own seed.

They are drawn to look like pictures from a microscope, not to be easy: edges shine, pore floors are lit to a varying degree,
light is uneven, and half of the structures open to the outside.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from poroscan.render import LOOKS, Rendered, RenderSettings, look, render_section
from poroscan.render.bodies import Body, make_body
from poroscan.render.scene import compose, scatter

SHAPE = (720, 960)

Kind = tuple[str, float, dict[str, float]]

#: (structure, skin in px or None for open, options); sizes in px.
STRUCTURES: tuple[Kind, ...] = (
    ("closed_cells", 8.0, {"diameter": 20.0, "porosity": 0.5}),
    ("sponge", 0.0, {"spacing": 22.0, "porosity": 0.5}),
    ("foam", 6.0, {"cell": 26.0, "wall": 6.0}),
    ("level_cut", 0.0, {"correlation": 12.0, "porosity": 0.35}),
    ("fingers", 8.0, {"number": 18.0, "width": 22.0}),
    ("polar", 5.0, {"correlation": 11.0, "porosity": 0.4, "amplitude": 0.6}),
    ("graded", 0.0, {"centre": 0.6, "rim": 0.25, "spacing": 22.0}),
    ("beads", 0.0, {"bead": 26.0, "jitter": 0.16}),
    ("closed_cells", 20.0, {"diameter": 16.0, "porosity": 0.3, "spread": 1.5}),
    ("discs", 0.0, {"pore_radius": 9.0, "porosity": 0.35}),
    ("closed_cells", 5.0, {"diameter": 18.0, "porosity": 0.5, "amplitude": 0.7}),
    ("sponge", 10.0, {"spacing": 28.0, "porosity": 0.65}),
    ("dense", 0.0, {}),
    ("closed_cells", 10.0, {"diameter": 30.0, "porosity": 0.55, "spread": 1.15}),
)

#: Cut faces of volumes. A pore that the plane only grazes is a shallow dish there: the truth counts it as pore, the picture
#: hardly shows it. Their limits are wider, and the table says so.
VOLUMES: tuple[Kind, ...] = (
    ("sponge_3d", 6.0, {"correlation": 12.0, "porosity": 0.45}),
    ("spheres_3d", 6.0, {"pore_radius": 12.0, "porosity": 0.35}),
)

#: Structures for looks that hide the outline or the pores; all have a skin, so that the outline is a closed line.
SKINNED: tuple[Kind, ...] = (
    ("closed_cells", 10.0, {"diameter": 22.0, "porosity": 0.5}),
    ("sponge", 8.0, {"spacing": 26.0, "porosity": 0.5}),
    ("fingers", 8.0, {"number": 18.0, "width": 22.0}),
)
HARD_LOOKS = ("bright_pores", "resin", "charging", "textured")

CASE_LOOKS = ("secondary", "ion_polished", "secondary", "backscatter", "secondary")


@dataclass(frozen=True, eq=False)
class Case:
    """One picture, its settings and what was put into it."""

    name: str
    structures: tuple[str, ...]
    settings: RenderSettings
    rendered: Rendered


def draw_case(
    index: int, *, kinds: Sequence[Kind] = STRUCTURES, looks: Sequence[str] = CASE_LOOKS, particles: int = 3
) -> Case:
    """Picture number ``index`` of the endless series; the same arguments give the same picture."""
    rng = np.random.default_rng([2026, index])
    bodies, names = [], []
    for k in range(particles):
        structure, skin, options = kinds[(particles * index + k) % len(kinds)]
        bodies.append(_body(structure, skin, options, rng))
        names.append(structure)
    settings = draw_settings(looks[index % len(looks)], rng)
    scene = compose(SHAPE, bodies, centres=scatter(SHAPE, bodies, rng=rng, gap=14.0))
    rendered = render_section(scene.pores, scene.labels, settings, rng=rng, known=scene.known, depth=scene.depth)
    return Case(f"case_{index:03d}", tuple(names), settings, rendered)


def _body(structure: str, skin: float, options: dict[str, float], rng: np.random.Generator) -> Body:
    chosen = dict(options)
    if "amplitude" in chosen:
        chosen["direction_deg"] = float(rng.uniform(-180, 180))
    if "number" in chosen:
        chosen["number"] = int(chosen["number"])
    return make_body(
        structure,
        radius=float(rng.uniform(100, 140)),
        aspect=float(rng.uniform(1.0, 1.25)),
        roughness=float(rng.uniform(0.003, 0.02)),
        skin=skin,
        rng=rng,
        **chosen,
    )


def draw_settings(name: str, rng: np.random.Generator) -> RenderSettings:
    """A look with contrast, noise, light, tilt and blur drawn at random over the range met in practice."""
    assert name in LOOKS
    pore_light = rng.uniform(0.25, 0.85) if name in ("secondary", "charging") else rng.uniform(0.05, 0.35)
    contrast = {"polymer": rng.uniform(0.42, 0.66), "ground": rng.uniform(0.08, 0.22)}
    if name in ("bright_pores", "textured"):
        contrast = {}  # their contrast is what makes these looks
    return look(
        name,
        **contrast,
        pixel_size_um=float(np.round(rng.uniform(0.1, 2.0), 4)),
        pore_light=float(pore_light),
        dose=float(np.exp(rng.uniform(np.log(90), np.log(900)))),
        detector_noise=float(rng.uniform(0.005, 0.025)),
        tilt=float(rng.uniform(0, 0.25)),
        tilt_deg=float(rng.uniform(-180, 180)),
        unevenness=float(rng.uniform(0, 0.06)),
        blur=float(rng.uniform(0.5, 1.3)),
        detector_deg=float(rng.uniform(-180, 180)),
    )
