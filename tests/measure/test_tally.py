"""Counts and sums by label against numpy's own."""

from __future__ import annotations

import numpy as np
import pytest

from poroscan.measure.tally import label_counts, label_sums, tally


@pytest.mark.parametrize("kind", [np.int32, np.int64, np.uint8])
def test_counts_and_sums(rng: np.random.Generator, kind: type) -> None:
    labels = rng.integers(0, 7, (30, 41)).astype(kind)
    assert np.array_equal(label_counts(labels, number=9), np.bincount(labels.ravel(), minlength=9))
    for values in (rng.random((30, 41)), rng.random((30, 41)).astype(np.float32), rng.random((30, 41)) < 0.3):
        expected = np.bincount(labels.ravel(), values.ravel(), 9)
        assert np.array_equal(label_sums(labels, values, number=9), expected)
        assert np.array_equal(
            label_sums(labels.T, values.T, number=9), np.bincount(labels.T.ravel(), values.T.ravel(), 9)
        )


def test_two_labels_at_once(rng: np.random.Generator) -> None:
    blocks, classes = rng.integers(0, 5, (20, 30)).astype(np.int32), rng.integers(-1, 3, (20, 30))
    pores = rng.random((20, 30)) < 0.5
    hits, pixels = tally(pores, blocks, classes, number=3)
    for b in range(1, 5):
        for k in range(3):
            here = (blocks == b) & (classes == k)
            assert (hits[b - 1, k], pixels[b - 1, k]) == (np.count_nonzero(here & pores), np.count_nonzero(here))


def test_labels_out_of_range_and_other_shapes_are_refused() -> None:
    labels = np.array([[0, 3]], dtype=np.int32)
    with pytest.raises(ValueError, match="labels must be integers 0…2, not 0…3"):
        label_counts(labels, number=3)
    with pytest.raises(ValueError, match="labels must be integers 0…3, not -1…3"):
        label_counts(np.array([-1, 3], dtype=np.int32), number=4)
    with pytest.raises(ValueError, match="values must have the shape of labels"):
        label_sums(labels, np.ones(2), number=4)
