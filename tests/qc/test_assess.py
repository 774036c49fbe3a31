from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest

from poroscan.errors import SettingsError
from poroscan.measure.nested import nested_mean
from poroscan.qc.assess import assess, exit_outside
from poroscan.qc.compare import compare
from poroscan.qc.estimate import sample
from poroscan.qc.settings import Limit, QcSettings


def _rows(rng: np.random.Generator, batch: str, mean: float, images: int = 5, each: int = 4) -> pd.DataFrame:
    n = images * each
    porosity = mean + np.repeat(rng.normal(0, 0.01, images), each) + rng.normal(0, 0.01, n)
    return pd.DataFrame(
        {
            "batch": batch, "image": np.repeat([f"{batch}{i}.tif" for i in range(images)], each), "particle": 1,
            "view": "whole", "touches_frame": False, "frame_weight": 1.0, "porosity": porosity,
            "pore_d50_um": 3 + rng.normal(0, 0.1, n),
        }
    )  # fmt: skip


def test_the_sample_leaves_out_what_the_frame_cuts(rng: np.random.Generator) -> None:
    rows = _rows(rng, "a", 0.5)
    cut = rows.assign(touches_frame=True, porosity=0.9)
    empty = rows.assign(particle=None, porosity=np.nan)
    interior = rows.iloc[:2].assign(touches_frame=True, view="interior", porosity=0.5)
    together = pd.concat([rows, cut, empty, interior], ignore_index=True)
    assert sample(together, "porosity").values.size == len(rows) + 2
    plain = sample(rows, "porosity")
    direct = nested_mean(rows["porosity"], rows["image"])
    assert (plain.mean.mean, plain.mean.standard_error) == pytest.approx((direct.mean, direct.sd))


def test_frame_weights_undo_the_loss_of_large_particles(rng: np.random.Generator) -> None:
    """A large particle is seen whole with chance P and then weighs 1/P: the weighted mean is the mean of all."""
    size = rng.choice([1.0, 3.0], 4000)
    seen = rng.random(4000) < np.where(size == 1, 0.9, 0.4)
    rows = pd.DataFrame(
        {"batch": "a", "image": "x", "particle": 1, "view": "whole", "touches_frame": ~seen,
         "frame_weight": np.where(size == 1, 1 / 0.9, 1 / 0.4), "porosity": size}
    )  # fmt: skip
    s = sample(rows, "porosity")
    assert s.mean.mean == pytest.approx(2.0, abs=0.08)
    assert s.values.mean() < 1.75


def test_verdicts_per_batch(rng: np.random.Generator) -> None:
    rows = pd.concat([_rows(rng, "good", 0.55), _rows(rng, "drifted", 0.45)], ignore_index=True)
    also = ("tolerance_interval", "capability")
    made = assess(rows, QcSettings(limits=(Limit("porosity", low=0.5, high=0.6, also=also),)))
    assert {k: v.outcome for k, v in made.items()} == {"good": "within", "drifted": "outside"}
    assert exit_outside(made)
    result = made["good"].results[0]
    assert result.capability is not None
    assert result.tolerance is not None
    assert result.capability.cpk > 0
    assert result.tolerance.low < result.verdict.low
    assert assess(rows, QcSettings())["good"].outcome is None


def test_acceptance_takes_the_first_particles(rng: np.random.Generator) -> None:
    rows = _rows(rng, "a", 0.55)
    limit = Limit("porosity", low=0.5, also=("acceptance_by_variables",), plan_n=5, plan_k=1.24)
    lot = assess(rows, QcSettings(limits=(limit,)))["a"].results[0].acceptance
    first = rows["porosity"].to_numpy()[:5]
    assert lot is not None
    assert lot.statistic == pytest.approx((first.mean() - 0.5) / first.std(ddof=1))
    assert assess(rows.iloc[:4], QcSettings(limits=(limit,)))["a"].results[0].acceptance is None


@pytest.mark.parametrize("n", [0, 1, 2])
def test_hardly_any_particles(rng: np.random.Generator, n: int) -> None:
    rows = _rows(rng, "a", 0.55).iloc[: max(n, 1)]
    rows = rows.assign(particle=None, porosity=np.nan) if n == 0 else rows
    limit = Limit("porosity", low=0.5, also=("tolerance_interval", "capability"))
    made = assess(rows, QcSettings(limits=(limit,)))["a"]
    assert made.outcome == "not_decided"
    assert made.particles == n


def test_compare(rng: np.random.Generator) -> None:
    batches = {"a": _rows(rng, "a", 0.50), "b": _rows(rng, "b", 0.60), "c": _rows(rng, "c", 0.50)}
    made = compare(batches, quantities=["porosity", "pore_d50_um"], margins={"pore_d50_um": 0.5}, rounds=99)
    by = {(p.quantity, p.second): p for p in made.pairs}
    assert by["porosity", "b"].p_holm < 0.01 < by["porosity", "c"].p_holm
    assert by["pore_d50_um", "b"].equivalence is not None
    assert by["pore_d50_um", "b"].equivalence.equivalent
    assert made.overall["porosity"][2] < 0.01
    assert by["porosity", "b"].earth_mover == pytest.approx(0.1, abs=0.04)


def test_the_interval_of_a_difference_covers_as_stated(rng: np.random.Generator) -> None:
    covered = []
    for _ in range(200):
        pair = compare({"a": _rows(rng, "a", 0.5), "b": _rows(rng, "b", 0.6)}, quantities=["porosity"], rounds=1).pairs[
            0
        ]
        covered.append(pair.difference.low < 0.1 < pair.difference.high)
    assert np.mean(covered) == pytest.approx(0.95, abs=4 * math.sqrt(0.95 * 0.05 / 200))


def test_compare_says_what_is_wrong(rng: np.random.Generator) -> None:
    a = _rows(rng, "a", 0.5)
    with pytest.raises(SettingsError, match="at least 2 batches"):
        compare({"a": a})
    with pytest.raises(SettingsError, match="nearest: porosity"):
        compare({"a": a, "b": a}, quantities=["porositi"])
    with pytest.raises(SettingsError, match="lacks its unit"):
        compare({"a": a, "b": a}, quantities=["pore_d50"])
    with pytest.raises(SettingsError, match="not compared"):
        compare({"a": a, "b": a}, quantities=["porosity"], margins={"pore_d50_um": 1})
    empty = a.assign(porosity=np.nan)
    made = compare({"a": a, "b": empty}, quantities=["porosity"])
    assert math.isnan(made.pairs[0].p_holm)


@pytest.mark.parametrize(("n", "outcome"), [(2, "not_decided"), (3, "outside")])
def test_a_regime_of_few_particles_decides_nothing(rng: np.random.Generator, n: int, outcome: str) -> None:
    found = {"regime": "delayed", "regime_set": "delayed"}
    rows = _rows(rng, "a", 0.5, images=n, each=1)
    made = assess(rows, QcSettings(regime="spinodal"), batches={"a": found})["a"]
    assert made.outcome == outcome
    many = assess(rows, QcSettings(regime="spinodal", min_particles=1, min_images=9), batches={"a": found})["a"]
    assert many.regime is not None
    assert many.regime.reason == f"{n} of at least 9 pictures"
