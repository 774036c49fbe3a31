from __future__ import annotations

import numpy as np
import pytest

from poroscan.render import depth
from poroscan.render.structures import paint_discs


def test_depth_below_a_plane_through_a_round_cavity() -> None:
    z, y, x = np.indices((41, 41, 41)) - 20
    cavity = z**2 + y**2 + x**2 <= 15**2
    below = depth.depth_below(cavity, plane=20)
    assert below[20, 20] == 16  # voxels 20…35 are empty
    assert below[20, 20 + 9] == pytest.approx(np.sqrt(15**2 - 9**2), abs=1.0)
    assert (below[~cavity[20]] == 0).all()


def test_depth_of_a_through_hole_ends_at_the_last_plane() -> None:
    assert depth.depth_below(np.ones((7, 3, 3), dtype=bool), plane=2).tolist() == [[5.0] * 3] * 3


def test_mouth_of_a_disc_is_its_radius() -> None:
    disc = paint_discs((60, 60), centres=np.array([[30.0, 30.0]]), radii=np.array([20.0]))
    mouth = depth.mouth_radius(disc)
    assert mouth[30, 30] == pytest.approx(20, abs=1)
    assert mouth[disc].min() >= 0.5
    assert (mouth[~disc] == 0).all()


def test_open_mouth_is_no_wall() -> None:
    particle = np.zeros((30, 30), dtype=bool)
    particle[:, 10:] = True
    pores = np.zeros_like(particle)
    pores[10:20, 10:20] = True
    assert depth.wall_distance(pores, particle=particle)[15, 10] == 5
    assert depth.wall_distance(pores)[15, 10] == 1


def test_imagined_depth_is_zero_on_polymer_and_starts_with_a_step(rng: np.random.Generator) -> None:
    discs = paint_discs((80, 80), centres=np.array([[25.0, 25.0], [55.0, 55.0]]), radii=np.array([14.0, 9.0]))
    deep = depth.imagined_depth(discs, rng=rng, struts=0.0, least=0.5)
    assert (deep[~discs] == 0).all()
    assert deep[discs].min() >= 0.5 * 8
    assert not depth.imagined_depth(np.zeros((5, 5), dtype=bool), rng=rng).any()
