"""Small scenes drawn by plain formulas, with their truth: no renderer of the project is used."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import UNKNOWN_PIXEL_SIZE, Picture

Array = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]

SIZE = 360


@dataclass(frozen=True, eq=False)
class Scene:
    """A picture with its true particles (labels) and pores."""

    grey: Array
    labels: npt.NDArray[np.int32]
    pores: Mask

    @property
    def picture(self) -> Picture:
        return as_picture(self.grey)


def as_picture(grey: Array) -> Picture:
    """Eight-bit picture, as files hold it."""
    levels = np.clip(np.rint(grey * 255), 0, 255)
    return Picture((levels / 255).astype(np.float32), UNKNOWN_PIXEL_SIZE)


def disc(row: float, column: float, radius: float, shape: tuple[int, int] = (SIZE, SIZE)) -> Mask:
    rows, columns = np.ogrid[: shape[0], : shape[1]]
    return (rows - row) ** 2 + (columns - column) ** 2 <= radius**2


def lattice_pores(particle: Mask, *, radius: float = 7.0, pitch: float = 26.0, offset: float = 0.0) -> Mask:
    """Round pores on a square lattice: porosity about π r²/pitch²."""
    pores = np.zeros_like(particle)
    for row in np.arange(offset, particle.shape[0], pitch):
        for column in np.arange(offset, particle.shape[1], pitch):
            pores |= disc(row, column, radius, particle.shape)
    return pores & particle


def expose(grey: Array, rng: np.random.Generator, *, blur: float = 0.9, noise: float = 0.03) -> Array:
    return ndimage.gaussian_filter(grey, blur) + rng.normal(0, noise, grey.shape)


def particle_scene(
    rng: np.random.Generator,
    *,
    polymer: float = 0.65,
    pore: float = 0.1,
    ground: float = 0.15,
    radius: float = 125.0,
    inset: float = 12.0,
    noise: float = 0.03,
) -> Scene:
    """One round particle with closed round pores."""
    particle = disc(SIZE / 2, SIZE / 2, radius)
    pores = lattice_pores(disc(SIZE / 2, SIZE / 2, radius - inset))
    grey = np.where(particle, np.where(pores, pore, polymer), ground)
    return Scene(expose(grey, rng, noise=noise), particle.astype(np.int32), pores)


def rough(rng: np.random.Generator, *, grain: float, sd: float, shape: tuple[int, int] = (SIZE, SIZE)) -> Array:
    """Rough texture: white noise smoothed to a grain, of given standard deviation."""
    field = ndimage.gaussian_filter(rng.standard_normal(shape), grain)
    return sd * field / field.std()


def pale_on_dark(rng: np.random.Generator) -> Scene:
    return particle_scene(rng)


def dark_on_pale(rng: np.random.Generator) -> Scene:
    """Embedded and polished: dark polymer, pores darker still, pale resin around it."""
    return particle_scene(rng, polymer=0.4, pore=0.08, ground=0.8)


def resin_filled(rng: np.random.Generator) -> Scene:
    """Pores hold the resin of the surroundings, and the polymer is paler."""
    return particle_scene(rng, polymer=0.7, pore=0.35, ground=0.35)


def bright_pores(rng: np.random.Generator) -> Scene:
    """Pores shine brighter than the wall."""
    return particle_scene(rng, polymer=0.45, pore=0.75, ground=0.1)


def walls_as_grey_as_ground(rng: np.random.Generator) -> Scene:
    """Only the pores tell the particle from the ground; the last pores lie close to the outline."""
    particle = disc(SIZE / 2, SIZE / 2, 125)
    pores = lattice_pores(disc(SIZE / 2, SIZE / 2, 122), radius=5, pitch=15)
    grey = np.where(pores, 0.1, 0.5)
    return Scene(expose(grey, rng), particle.astype(np.int32), pores)


def strong_noise(rng: np.random.Generator) -> Scene:
    return particle_scene(rng, noise=0.16)


def uneven_light(rng: np.random.Generator) -> Scene:
    """Brightness falls by half from one side to the other."""
    scene = particle_scene(rng, noise=0.02)
    slope = np.linspace(1.3, 0.65, SIZE)[None, :] * np.linspace(1.1, 0.9, SIZE)[:, None]
    return Scene(scene.grey * slope, scene.labels, scene.pores)


def streaks(rng: np.random.Generator) -> Scene:
    """Vertical streaks over a third of the columns, as milling leaves them."""
    scene = particle_scene(rng)
    lines = np.where(rng.random(SIZE) < 0.33, rng.normal(0, 0.06, SIZE), 0.0)
    return Scene(scene.grey + ndimage.gaussian_filter1d(lines, 1.0)[None, :], scene.labels, scene.pores)


def bright_edges(rng: np.random.Generator) -> Scene:
    """Edges of pores and of the particle shine."""
    scene = particle_scene(rng)
    solid = (scene.labels > 0) & ~scene.pores
    inward = ndimage.distance_transform_edt(solid)
    grey = np.where(scene.labels > 0, np.where(scene.pores, 0.1, 0.5), 0.15)
    grey = grey + np.where(solid, 0.35 * np.exp(-inward / 2.0), 0.0)
    return Scene(expose(grey, rng), scene.labels, scene.pores)


def lit_bottoms(rng: np.random.Generator) -> Scene:
    """Material is seen at the bottom of every second pore: a grey floor, only a little darker than the cut face."""
    scene = particle_scene(rng)
    pores, count = ndimage.label(scene.pores)
    floor = np.isin(pores, np.arange(1, count + 1, 2))
    shade = np.where(floor, 0.45, 0.1) + np.where(floor, rough(rng, grain=3, sd=0.03), 0)
    grey = np.where(scene.labels > 0, np.where(scene.pores, shade, 0.65), 0.15)
    return Scene(expose(grey, rng), scene.labels, scene.pores)


def bright_grains(rng: np.random.Generator) -> Scene:
    """Mineral grains much brighter than the material."""
    scene = particle_scene(rng)
    grains = lattice_pores(disc(SIZE / 2, SIZE / 2, 105), radius=6, pitch=52, offset=13) & ~scene.pores
    grey = np.where(scene.labels > 0, np.where(scene.pores, 0.1, np.where(grains, 1.0, 0.55)), 0.15)
    return Scene(expose(grey, rng), scene.labels, scene.pores)


def open_pores(rng: np.random.Generator) -> Scene:
    """Pores all over, many of them cut open by the outline."""
    particle = disc(SIZE / 2, SIZE / 2, 125)
    pores = lattice_pores(particle, radius=8, pitch=26)
    grey = np.where(particle, np.where(pores, 0.1, 0.65), 0.12)
    return Scene(expose(grey, rng), particle.astype(np.int32), pores)


def holder_ring(rng: np.random.Generator) -> Scene:
    """A faint ring around the particle holds it; it is no particle."""
    scene = particle_scene(rng, radius=110, ground=0.03)
    ring = disc(SIZE / 2, SIZE / 2, 165) & ~disc(SIZE / 2, SIZE / 2, 140)
    return Scene(scene.grey + np.where(ring, 0.12, 0.0), scene.labels, scene.pores)


def dust(rng: np.random.Generator) -> Scene:
    """Crumbs of polymer on the ground."""
    scene = particle_scene(rng, radius=110)
    crumbs = disc(25, 40, 6) | disc(330, 50, 4) | disc(320, 320, 9) | disc(30, 300, 5)
    return Scene(np.where(crumbs, 0.65, scene.grey), scene.labels, scene.pores)


def dense(rng: np.random.Generator) -> Scene:
    """No pores: the grey values of the face are its roughness and noise."""
    particle = disc(SIZE / 2, SIZE / 2, 125)
    grey = np.where(particle, 0.6 + rough(rng, grain=3, sd=0.02), 0.15)
    return Scene(expose(grey, rng, noise=0.05), particle.astype(np.int32), np.zeros_like(particle))


def beads(rng: np.random.Generator) -> Scene:
    """Loose beads in section, not touching: the particle is the cluster."""
    particle = disc(SIZE / 2, SIZE / 2, 130)
    solid = lattice_pores(disc(SIZE / 2, SIZE / 2, 126), radius=9.5, pitch=21)
    grey = np.where(solid, 0.65, 0.12)
    return Scene(expose(grey, rng), particle.astype(np.int32), particle & ~solid)


def thin_walls(rng: np.random.Generator) -> Scene:
    """A foam: square cells with walls of three pixels and no flat material anywhere."""
    particle = disc(SIZE / 2, SIZE / 2, 125)
    rows, columns = np.indices((SIZE, SIZE))
    rim = particle & ~disc(SIZE / 2, SIZE / 2, 121)
    pores = particle & (rows % 18 >= 3) & (columns % 18 >= 3) & ~rim
    grey = np.where(particle, np.where(pores, 0.1, 0.65), 0.12)
    return Scene(expose(grey, rng, blur=0.7), particle.astype(np.int32), pores)


def touching(rng: np.random.Generator) -> Scene:
    """Two particles in contact."""
    labels = np.zeros((SIZE, SIZE), np.int32)
    labels[disc(180, 95, 80)] = 1
    labels[disc(180, 262, 88)] = 2
    inner = disc(180, 95, 68) | disc(180, 262, 76)
    pores = lattice_pores(inner)
    grey = np.where(labels > 0, np.where(pores, 0.1, 0.65), 0.15)
    return Scene(expose(grey, rng), labels, pores)


#: Scenes of one particle by name.
SINGLE = {
    f.__name__: f
    for f in (
        pale_on_dark,
        dark_on_pale,
        resin_filled,
        bright_pores,
        walls_as_grey_as_ground,
        strong_noise,
        uneven_light,
        streaks,
        bright_edges,
        lit_bottoms,
        bright_grains,
        open_pores,
        holder_ring,
        dust,
        dense,
        beads,
        thin_walls,
    )
}
