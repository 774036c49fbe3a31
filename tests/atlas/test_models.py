"""Classifier, calibration, prediction sets, distance and intervals against closed forms and slow versions."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import log_softmax

from poroscan.atlas.calibration import calibrate, calibration_error, conformal_level, softmax
from poroscan.atlas.model import Classifier, folds, logistic, row_weights
from poroscan.atlas.novelty import INSIDE, Novelty
from poroscan.atlas.parameters import INFERRED, fit_parameters


def test_logistic_regression_is_at_its_optimum(rng) -> None:
    """Against the definition: the gradient of the penalised likelihood, by finite differences, vanishes."""
    x = np.concatenate([rng.standard_normal((60, 3)), np.ones((60, 1))], axis=1)
    label = rng.integers(0, 3, 60)
    weight = rng.random(60)
    found = logistic(x, label, weight, classes=3, penalty=0.01)

    def loss(c: np.ndarray) -> float:
        log_p = log_softmax(x @ c, axis=1)[np.arange(60), label]
        return -float(weight @ log_p / weight.sum()) + 0.005 * float((c**2).sum())

    for _ in range(5):
        step = 1e-4 * rng.standard_normal(found.shape)
        assert abs(loss(found + step) - loss(found - step)) < 1e-8


def test_classifier_tells_a_ring_from_its_middle(rng) -> None:
    """No straight line does: the kernel must."""
    x = rng.standard_normal((400, 2))
    label = (np.hypot(*x.T) > 1.2).astype(np.intp)
    model = Classifier.fit(x[:200], label[:200], np.ones(200), classes=2)
    right = model.logits(x[200:]).argmax(axis=1) == label[200:]
    assert right.mean() > 0.93
    again = Classifier.fit(x[:200], label[:200], np.ones(200), classes=2)
    assert np.array_equal(again.logits(x), model.logits(x))


def test_every_class_and_every_group_within_it_weighs_alike() -> None:
    label = np.array([0, 0, 0, 1, 1])
    group = np.array([0, 0, 1, 2, 2])
    weight = row_weights(label, group, classes=2)
    assert weight[label == 0].sum() == pytest.approx(weight[label == 1].sum())
    assert weight[group == 0].sum() == pytest.approx(weight[group == 1].sum())


def test_folds_keep_groups_whole_and_share_out_every_class() -> None:
    group = np.repeat(np.arange(40), 3)
    label = np.repeat(np.repeat(np.arange(4), 10), 3)
    fold = folds(group, label, n=5)
    for g in range(40):
        assert len(set(fold[group == g])) == 1
    counts = [[len(set(group[(label == c) & (fold == k)])) for k in range(5)] for c in range(4)]
    assert counts == [[2] * 5] * 4


def _drawn(rng: np.random.Generator, n: int, *, sharpness: float = 1.0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """True probabilities, labels drawn from them, and logits that exaggerate them by 1/sharpness."""
    logits = 2 * rng.standard_normal((n, 5))
    p = softmax(logits)
    label = np.array([rng.choice(5, p=row) for row in p])
    return p, label, logits / sharpness


def test_calibration_undoes_an_exaggeration(rng) -> None:
    p, label, logits = _drawn(rng, 4000, sharpness=0.25)
    found = calibrate(logits, label, np.ones(4000))
    assert found.slope == pytest.approx(0.25, rel=0.08)
    assert np.abs(found.probabilities(logits) - p).max() < 0.05


def test_calibration_error_of_true_probabilities_is_small_and_of_boasts_large(rng) -> None:
    p, label, logits = _drawn(rng, 6000)
    assert calibration_error(p, label, np.ones(6000)) < 0.02
    sure = softmax(20 * logits)
    assert calibration_error(sure, label, np.ones(6000)) == pytest.approx(
        1 - (sure.argmax(axis=1) == label).mean(), abs=0.04
    )
    # by hand: always 0.8 sure and right in half of the cases
    half = np.tile([0.8, 0.2], (10, 1))
    assert calibration_error(half, np.repeat([0, 1], 5), np.ones(10), bins=1) == pytest.approx(0.3)


def test_sets_hold_the_truth_as_often_as_they_promise(rng) -> None:
    """Split conformal: the coverage on exchangeable unseen rows is at least 90 %, and at most 1/(n + 1) more."""
    reached = []
    for _ in range(200):
        _, label, logits = _drawn(rng, 120)
        found = calibrate(logits[:100], label[:100], np.ones(100))
        members = found.members(found.probabilities(logits[100:]))
        reached.append(members[np.arange(20), label[100:]].mean())
    assert np.mean(reached) == pytest.approx(0.905, abs=0.02)


def test_conformal_level_is_the_order_statistic_of_its_definition(rng) -> None:
    true = rng.random(99)
    # equal weights: floor((n + 1)(1 - coverage)) = 10 of 100; the tenth smallest score
    assert conformal_level(true, np.ones(99), coverage=0.9) == pytest.approx(np.sort(true)[9])


def test_distance_against_a_slow_version(rng) -> None:
    x = rng.standard_normal((60, 4)) * [3, 2, 1, 0.5]
    group = np.repeat(np.arange(30), 2)
    model = Novelty.of(x, group)
    point = rng.standard_normal(4)
    white = (point - model.mean) @ model.directions
    by_group = [min(np.linalg.norm(white - row) for row in model.rows[group == g]) for g in range(30)]
    assert model.distance(point) * model.unit == pytest.approx(np.mean(np.sort(by_group)[:3]))
    nearest = model.nearest(point, n=5)
    assert [g for g, _ in nearest] == list(np.argsort(by_group)[:5])
    assert nearest[0][1] == pytest.approx(min(by_group) / model.unit)


def test_the_unit_is_what_most_of_the_atlas_lies_within(rng) -> None:
    x, group = rng.standard_normal((400, 5)), np.arange(400)
    model = Novelty.of(x, group)
    own = np.array([model.distance(row, without=i) for i, row in enumerate(x)])
    assert (own <= 1).mean() == pytest.approx(INSIDE, abs=0.005)
    assert model.distance(np.full(5, 8.0)) > 2


def test_parameters_are_determined_where_features_carry_them(rng) -> None:
    n = 400
    features = np.concatenate([rng.standard_normal((n, 3)), np.ones((n, 1))], axis=1)
    target = rng.random((n, len(INFERRED)))
    target[:, 0] = 0.3 + 0.05 * features[:, 0] + 0.005 * rng.standard_normal(n)
    model = fit_parameters(
        features[:300], target[:300], np.zeros(300, dtype=np.intp), np.ones(300), np.arange(300) % 5, coverage=0.9
    )
    inside = []
    for row, truth in zip(features[300:], target[300:], strict=True):
        found = model.intervals(row, 0)
        assert found[INFERRED[0]].determined
        assert not found[INFERRED[1]].determined
        assert np.isnan(found[INFERRED[1]].value)
        inside.append(found[INFERRED[0]].low <= truth[0] <= found[INFERRED[0]].high)
    assert np.mean(inside) == pytest.approx(0.9, abs=0.08)
