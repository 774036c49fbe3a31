from __future__ import annotations

import math

import edt
import numpy as np
import pytest
from media import gaussian_field
from skimage.morphology import opening

from poroscan.measure.granulometry import opening_curve, opening_entropy, opening_mode, pattern_spectrum
from poroscan.measure.thickness import thickness_table


def test_separate_discs_give_exact_steps() -> None:
    # Opening curve of discs that do not touch: share of the area in discs of at least that diameter.
    y, x = np.mgrid[:200, :200]
    mask, areas = np.zeros((200, 200), bool), []
    for centre, radius in (((40, 40), 10.0), ((40, 120), 20.0), ((130, 80), 30.0)):
        one = (y - centre[0]) ** 2 + (x - centre[1]) ** 2 <= radius**2
        mask |= one
        areas.append(one.sum())
    share = np.array(areas) / sum(areas)
    table = thickness_table(mask)
    # Half-way between the sizes, and up to the corner pixels of digital discs.
    np.testing.assert_allclose(opening_curve(table, [5, 30, 50, 70]), [1, share[1] + share[2], share[2], 0], atol=0.01)


def test_equals_openings_by_the_distance_transform(rng: np.random.Generator) -> None:
    # Second implementation: opening with {|x| < r} by two distance transforms, one for each radius.
    mask = gaussian_field((150, 160), length=5, rng=rng) > 0.2
    table = thickness_table(mask)
    distance = edt.edt(mask, black_border=False)
    for r in (2.0, 3.0, 4.5, 6.0):
        opened = edt.edt(~(distance >= r), black_border=False) < r
        # A disc of pixels |x| < r has the thickness 2 r − 1.
        assert opening_curve(table, [2 * r - 1])[0] == pytest.approx((opened & mask).sum() / mask.sum(), abs=0.02)


def test_never_more_than_a_smaller_opening(rng: np.random.Generator) -> None:
    mask = gaussian_field((80, 80), length=4, rng=rng) > 0
    curve = opening_curve(thickness_table(mask), np.linspace(0, 40, 100))
    assert curve[0] == 1.0
    assert curve[-1] == 0.0
    assert (np.diff(curve) <= 0).all()


def test_square_opening() -> None:
    # Square of side a: share opened by a disc of diameter d is 1 − (1 − π/4)(d/a)² (closed form).
    mask = np.pad(np.ones((151, 151), bool), 2)
    table = thickness_table(mask)
    for d in (31.0, 75.0, 121.0):
        assert opening_curve(table, [d])[0] == pytest.approx(1 - (1 - math.pi / 4) * (d / 151) ** 2, abs=0.01)


def test_opening_against_scikit_image() -> None:
    mask = np.zeros((60, 60), bool)
    mask[5:30, 5:50] = mask[35:42, 10:55] = True
    y, x = np.mgrid[-4:5, -4:5]
    disc = y**2 + x**2 < 25  # pixels of the disc whose squared distance to the outside is 25
    share = opening(mask, disc).sum() / mask.sum()
    assert opening_curve(thickness_table(mask), [9.0])[0] == pytest.approx(share)


def test_stripes_have_one_size() -> None:
    mask = np.zeros((60, 200), bool)
    for start in range(5, 190, 20):
        mask[:, start : start + 9] = True
    table = thickness_table(mask)
    assert opening_entropy(table) == pytest.approx(0.0, abs=1e-12)
    assert opening_mode(table) == pytest.approx(9.0, rel=0.1)
    assert pattern_spectrum(table, np.arange(12)).sum() == pytest.approx(1.0)


def test_two_sizes_have_some_entropy() -> None:
    mask = np.zeros((60, 60), bool)
    mask[5:10, :] = mask[20:41, :] = True
    table = thickness_table(mask)
    share = np.array([5, 21]) / 26
    assert opening_entropy(table) == pytest.approx(-(share * np.log(share)).sum() / math.log(21), rel=1e-9)


def test_empty_phase() -> None:
    table = thickness_table(np.zeros((5, 5), bool))
    assert math.isnan(opening_mode(table))
    assert math.isnan(opening_entropy(table))
    assert np.isnan(opening_curve(table, [1.0])).all()
