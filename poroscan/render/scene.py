"""Several particles in one picture: apart, touching, or cut by the frame."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.render.bodies import Body
from poroscan.section import BoolArray


@dataclass(frozen=True, eq=False)
class Scene:
    """Masks of one picture.

    Parameters
    ----------
    labels
        int32, particle number 1, 2, … in the order of the bodies; 0 for surroundings.
    pores
        bool, of the same shape.
    known
        What is known of each particle by construction, by number.
    depth
        Depth of the material under each pore pixel, px; NaN where it is to be imagined. None imagines all of it.
    """

    labels: npt.NDArray[np.int32]
    pores: BoolArray
    known: Mapping[int, Mapping[str, float]]
    depth: npt.NDArray[np.float64] | None = None


def compose(shape: tuple[int, int], bodies: Sequence[Body], *, centres: Sequence[tuple[float, float]]) -> Scene:
    """Put bodies at given places; what lies outside the frame is cut off.

    Parameters
    ----------
    shape
        Rows, columns of the picture.
    bodies
        Particles in their windows.
    centres
        Row and column of the centre of each window; may lie outside the frame.

    Raises
    ------
    ValueError
        If there is not one place for each body.

    Notes
    -----
    Where two bodies overlap, the pixels stay with the one that comes first: a small overlap makes a flat contact. A body
    wholly outside the frame leaves no label.
    """
    if len(bodies) != len(centres):
        raise ValueError(f"centres must hold one place per body ({len(bodies)}), not {len(centres)}")
    labels = np.zeros(shape, dtype=np.int32)
    pores = np.zeros(shape, dtype=bool)
    depth = np.full(shape, np.nan)
    for number, (body, centre) in enumerate(zip(bodies, centres, strict=True), start=1):
        target, source = _overlap(shape, body.particle.shape, centre)
        if target is None or source is None:
            continue
        free = body.particle[source] & (labels[target] == 0)
        labels[target][free] = number
        pores[target][free] = body.pores[source][free]
        if body.depth is not None:
            depth[target][free] = body.depth[source][free]
    return Scene(labels, pores, {n: body.known for n, body in enumerate(bodies, start=1)}, depth)


_Window = tuple[slice, slice]


def _overlap(
    shape: tuple[int, int], window: tuple[int, ...], centre: tuple[float, float]
) -> tuple[_Window | None, _Window | None]:
    target, source = [], []
    for size, extent, place in zip(shape, window, centre, strict=True):
        start = round(place) - extent // 2
        low, high = max(start, 0), min(start + extent, size)
        if low >= high:
            return None, None
        target.append(slice(low, high))
        source.append(slice(low - start, high - start))
    return (target[0], target[1]), (source[0], source[1])


def scatter(
    shape: tuple[int, int],
    bodies: Sequence[Body],
    *,
    rng: np.random.Generator | int | None,
    gap: float = 12.0,
    inside: bool = True,
) -> list[tuple[float, float]]:
    """Places for bodies that do not touch, drawn at random.

    Parameters
    ----------
    shape
        Rows, columns.
    bodies
        Particles; their windows' inscribed circles are kept apart.
    rng
        Generator or seed.
    gap
        Least distance between two windows' circles, px, and from the frame.
    inside
        True keeps all of them whole; False lets the frame cut them.

    Raises
    ------
    ValueError
        If no place is found for one of them.
    """
    rng = np.random.default_rng(rng)
    for _ in range(300):
        places = _one_try(shape, bodies, rng=rng, gap=gap, inside=inside)
        if places is not None:
            return places
    raise ValueError(f"{len(bodies)} particles do not fit into a picture of {shape[0]}×{shape[1]} pixels")


def _one_try(
    shape: tuple[int, int], bodies: Sequence[Body], *, rng: np.random.Generator, gap: float, inside: bool
) -> list[tuple[float, float]] | None:
    places: list[tuple[float, float]] = []
    for body in bodies:
        reach = max(body.particle.shape) / 2
        margin = reach + gap / 2 if inside else 0.0
        if min(shape) <= 2 * margin:
            return None
        for _ in range(40):
            trial = (rng.uniform(margin, shape[0] - margin), rng.uniform(margin, shape[1] - margin))
            apart = (
                np.hypot(trial[0] - row, trial[1] - column) >= reach + max(other.particle.shape) / 2 + gap
                for (row, column), other in zip(places, bodies, strict=False)
            )
            if all(apart):
                places.append((float(trial[0]), float(trial[1])))
                break
        else:
            return None
    return places
