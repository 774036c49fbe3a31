"""Squared distances against the definition, computed pair by pair, and against a second implementation."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import array_shapes, arrays
from scipy import ndimage

from poroscan.measure.distance import distance_inside
from poroscan.measure.squared_distance import squared_distance


def by_definition(mask: np.ndarray) -> np.ndarray:
    """min |x − y|² over the False pixels y."""
    points = np.stack(np.indices(mask.shape), axis=-1).reshape(-1, mask.ndim)
    outside = points[~mask.ravel()]
    return np.min(((points[:, None] - outside[None]) ** 2).sum(axis=2), axis=1).reshape(mask.shape)


masks = st.one_of(
    arrays(bool, array_shapes(min_dims=2, max_dims=2, max_side=14)),
    arrays(bool, array_shapes(min_dims=3, max_dims=3, max_side=6)),
)


@settings(max_examples=60, deadline=None)
@given(masks)
def test_against_the_definition(mask: np.ndarray) -> None:
    expected = np.full(mask.shape, 2**31 - 1) if mask.all() else by_definition(mask)
    assert np.array_equal(squared_distance(mask), expected)


@pytest.mark.parametrize("shape", [(61, 90), (90, 61), (1, 200), (200, 1), (21, 30, 17), (1, 40, 1)])
@pytest.mark.parametrize("share", [0.02, 0.5, 0.9, 0.999])
def test_against_a_second_implementation(rng: np.random.Generator, shape: tuple[int, ...], share: float) -> None:
    mask = rng.random(shape) < share
    mask.flat[0] = False
    assert np.array_equal(squared_distance(mask), np.rint(ndimage.distance_transform_edt(mask) ** 2))


def test_one_outside_pixel_far_away() -> None:
    """Truth: the law of Pythagoras; a line of 70 000 pixels needs more than 32 bits."""
    mask = np.ones((3, 70_000), dtype=bool)
    mask[1, 0] = False
    row, column = np.indices(mask.shape)
    assert np.array_equal(squared_distance(mask), (row - 1) ** 2 + column**2)


def test_layout_does_not_matter(rng: np.random.Generator) -> None:
    mask = rng.random((40, 50)) < 0.8
    expected = squared_distance(mask)
    frozen = np.asfortranarray(mask)
    frozen.setflags(write=False)
    assert np.array_equal(squared_distance(frozen), expected)
    assert np.array_equal(squared_distance(np.repeat(mask, 2, axis=1)[:, ::2]), expected)
    assert np.array_equal(squared_distance(mask.T), expected.T)


def test_distances_are_the_roots(rng: np.random.Generator) -> None:
    mask = rng.random((70, 80)) < 0.9
    assert np.array_equal(distance_inside(mask), np.sqrt(squared_distance(mask)).astype(np.float32))
    assert np.all(np.isinf(distance_inside(np.ones((4, 5), dtype=bool))))


@pytest.mark.parametrize("mask", [np.ones((3, 3)), np.ones(5, dtype=bool), [[True]]])
def test_other_arrays_are_refused(mask: object) -> None:
    with pytest.raises(ValueError, match="mask must be a 2-D or 3-D bool array"):
        squared_distance(mask)  # type: ignore[arg-type]
