from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from poroscan.batch.summary import AVERAGED, BatchCollector, batch_columns, batch_schema
from poroscan.batch.tables import particle_columns
from poroscan.qc.estimate import weighted_mean
from poroscan.qc.interval import mean_interval


def _row(**values: object) -> dict[str, object]:
    row = dict.fromkeys(particle_columns())
    return row | {"particle": "1", "view": "whole", "touches_frame": False, "frame_weight": 1.0} | values


def test_one_particle_per_picture_gives_the_t_interval(rng: np.random.Generator) -> None:
    values = rng.normal(5.0, 2.0, 12)
    result = weighted_mean(values, np.full(12, 3.0), np.arange(12))
    low, high = stats.ttest_1samp(values, 0.0).confidence_interval(0.95)
    assert (result.mean, *mean_interval(result)) == pytest.approx((values.mean(), low, high))
    assert result.sd == pytest.approx(values.std(ddof=1))


def test_weights_count_as_copies_in_the_mean() -> None:
    result = weighted_mean(np.array([1.0, 4.0]), np.array([2.0, 1.0]), np.arange(2))
    assert result.mean == pytest.approx(np.mean([1.0, 1.0, 4.0]))


def test_intervals_hold_the_mean_as_often_as_they_say(rng: np.random.Generator) -> None:
    """Six pictures of three particles, pictures differing as much as particles do, weights unrelated to the values."""
    held, naive = [], []
    for _ in range(1500):
        values = (rng.normal(0.0, 1.0, (6, 1)) + rng.normal(0.0, 1.0, (6, 3))).ravel()
        low, high = mean_interval(weighted_mean(values, rng.uniform(1.0, 1.3, 18), np.repeat(np.arange(6), 3)))
        held.append(low <= 0.0 <= high)
        low, high = stats.ttest_1samp(values, 0.0).confidence_interval(0.95)
        naive.append(low <= 0.0 <= high)
    assert np.mean(held) == pytest.approx(0.95, abs=0.025)
    assert np.mean(naive) < 0.85  # what happens when pictures are forgotten


def test_one_particle_has_no_interval() -> None:
    result = weighted_mean(np.array([0.4]), np.array([1.0]), np.array([0]))
    assert result.mean == 0.4
    assert math.isnan(mean_interval(result)[0])
    assert math.isnan(weighted_mean(np.array([]), np.array([]), np.array([], dtype=int)).mean)


def test_cut_particles_are_left_out_and_counted() -> None:
    collector = BatchCollector("b")
    cut = _row(porosity=0.9, touches_frame=True, frame_weight=None)
    collector.add_image([_row(porosity=0.4), cut], measured=True)
    collector.add_image([_row(porosity=0.6), _row(particle=None, view=None)], measured=True)
    collector.add_image([], measured=False)
    row = collector.row()
    assert row["porosity"] == pytest.approx(0.5)
    assert (row["particles"], row["particles_used"], row["particles_cut_by_frame"]) == (3, 2, 1)
    assert (row["images"], row["images_measured"], row["porosity_n"]) == (3, 2, 2)


def test_interior_views_count_although_they_reach_the_frame() -> None:
    collector = BatchCollector("b")
    collector.add_image([_row(porosity=0.4, view="interior", touches_frame=True, frame_weight=None)], measured=True)
    assert collector.row()["porosity"] == 0.4


def test_pixels_of_different_size_are_not_averaged() -> None:
    collector = BatchCollector("b")
    for um in (1.0, 2.0):
        row = _row(pore_d50_um=4.0, pore_d50_px=4.0 / um, pixel_size_um=um)
        collector.add_image([row], measured=True)
    assert collector.row()["pore_d50_um"] == 4.0
    assert collector.row()["pore_d50_px"] is None


def test_empty_batch_is_a_row_without_numbers() -> None:
    row = BatchCollector("b").row()
    assert tuple(row) == batch_columns() == tuple(batch_schema().names)
    assert row["porosity"] is None
    assert row["porosity_n"] == 0


def test_directions_are_not_averaged() -> None:
    assert all(q.unit != "°" for q in AVERAGED)


def test_no_interval_leaves_what_the_quantity_can_be() -> None:
    """Two dense particles, one with a speck of pore: Student's interval would run from below −1 to above 1."""
    collector = BatchCollector("b")
    for porosity in (0.0, 0.1):
        collector.add_image([_row(porosity=porosity, pore_d50_um=10 * porosity + 0.1)], measured=True)
    row = collector.row()
    assert row["porosity"] == pytest.approx(0.05)
    assert row["porosity_low"] is None
    assert row["porosity_high"] is None
    assert row["pore_d50_um_low"] is None
