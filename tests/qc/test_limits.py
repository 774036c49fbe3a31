from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from poroscan.errors import SettingsError
from poroscan.qc.comparison import BatchMean
from poroscan.qc.limits import check_limits, judge, overall
from poroscan.qc.settings import Limit, QcSettings

SETTINGS = QcSettings()


def _mean(x: np.ndarray) -> BatchMean:
    s = float(x.std(ddof=1)) if x.size > 1 else math.nan
    return BatchMean(float(x.mean()), s / math.sqrt(x.size), x.size - 1, s)


def _judge(limit: Limit, x: np.ndarray, settings: QcSettings = SETTINGS, images: int = 5):
    return judge(limit, x, _mean(x), settings, images=images)


def test_mean_uses_the_t_interval() -> None:
    x = np.array([0.50, 0.52, 0.54, 0.56, 0.58])
    v = _judge(Limit("porosity", low=0.4, high=0.7), x)
    interval = stats.ttest_1samp(x, 0).confidence_interval(0.95)
    assert (v.outcome, v.low, v.high) == ("within", pytest.approx(interval.low), pytest.approx(interval.high))
    assert _judge(Limit("porosity", low=0.6), x).outcome == "outside"
    assert _judge(Limit("porosity", high=0.5), x).outcome == "outside"


def test_further_particles_decide_it(rng: np.random.Generator) -> None:
    """With the number of particles asked for and the same mean and spread, the interval just clears the limit."""
    x = np.array([0.50, 0.52, 0.54, 0.56, 0.58] * 4)
    v = _judge(Limit("porosity", low=0.535), x)
    assert v.outcome == "not_decided"
    assert v.further is not None
    n, mean, sd = x.size + v.further, float(x.mean()), float(x.std(ddof=1))
    more = judge(
        Limit("porosity", low=0.535), np.resize(x, n), BatchMean(mean, sd / math.sqrt(n), n - 1, sd), SETTINGS, images=5
    )
    assert more.outcome == "within"
    fewer = BatchMean(mean, sd / math.sqrt(n * 0.8), n - 1, sd)
    assert judge(Limit("porosity", low=0.535), np.resize(x, n), fewer, SETTINGS, images=5).outcome == "not_decided"


def test_on_the_limit_no_number_decides() -> None:
    x = np.array([0.5, 0.6, 0.7])
    v = _judge(Limit("porosity", low=0.6), x)
    assert (v.outcome, v.further) == ("not_decided", None)


def test_too_few() -> None:
    x = np.array([0.5, 0.51])
    v = _judge(Limit("porosity", low=0.1), x, QcSettings(min_particles=5))
    assert (v.outcome, v.further, v.reason) == ("not_decided", 3, "2 of at least 5 particles")
    assert "pictures" in _judge(Limit("porosity", low=0.1), np.full(9, 0.5), QcSettings(min_images=6)).reason
    one = _judge(Limit("porosity", low=0.1), x[:1], QcSettings(min_particles=1))
    assert (one.outcome, one.reason) == ("not_decided", "too few particles for an interval")
    none = judge(Limit("porosity", low=0.1), [], BatchMean(math.nan, math.nan, 0, math.nan), SETTINGS, images=0)
    assert none.reason == "no particle has a value"
    with pytest.raises(ValueError, match="finite"):
        judge(Limit("porosity", low=0.1), [math.nan], _mean(x), SETTINGS, images=1)


def test_percentile_interval_covers_as_stated(rng: np.random.Generator) -> None:
    limit, true = Limit("pore_d50_um", high=9e9, on="percentile", percentile=75), stats.norm.ppf(0.75)
    inside = []
    for _ in range(2000):
        v = _judge(limit, rng.normal(size=60))
        inside.append(v.low <= true <= v.high)
    assert 0.94 <= np.mean(inside) <= 0.985  # order statistics step, so that it is a little above 95 %
    assert math.isinf(_judge(limit, rng.normal(size=4)).high)


def test_share_outside_uses_the_exact_interval() -> None:
    x = np.array([1.0] * 19 + [5.0])
    v = _judge(Limit("pore_d50_um", high=2.0, on="share_outside", max_share=0.3), x)
    exact = stats.binomtest(1, 20).proportion_ci(0.95, method="exact")
    assert (v.value, v.low, v.high) == pytest.approx((0.05, exact.low, exact.high))
    assert v.outcome == "within"
    assert _judge(Limit("pore_d50_um", low=2.0, on="share_outside", max_share=0.3), x).outcome == "outside"


def test_particles_of_one_picture_count_less() -> None:
    x = np.array([1.0] * 19 + [5.0])
    sd = float(x.std(ddof=1))
    alone = judge(Limit("pore_d50_um", high=2.0, on="share_outside"), x, _mean(x), SETTINGS, images=20)
    nested = BatchMean(float(x.mean()), sd / math.sqrt(5), 4, sd)
    assert judge(Limit("pore_d50_um", high=2.0, on="share_outside"), x, nested, SETTINGS, images=5).high > alone.high


def test_overall() -> None:
    x = np.array([0.50, 0.52, 0.54, 0.56, 0.58])
    within, outside, open_ = (_judge(Limit("porosity", low=v), x).outcome for v in (0.4, 0.6, 0.54))
    assert overall([within, within]) == "within"
    assert overall([within, open_]) == "not_decided"
    assert overall([within, open_, outside]) == "outside"
    with pytest.raises(ValueError, match="without limits"):
        overall([])


@pytest.mark.parametrize(
    ("limit", "message"),
    [
        (Limit("porousity", low=0.1), "nearest: porosity"),
        (Limit("pore_d50", low=1), "lacks its unit: write 'pore_d50_um'"),
        (Limit("porosity", low=40, high=60), "must be a fraction"),
    ],
)
def test_limits_are_checked_before_anything_starts(limit: Limit, message: str) -> None:
    with pytest.raises(SettingsError, match=message):
        check_limits(QcSettings(limits=(limit,)))


def test_settings_say_what_is_wrong() -> None:
    with pytest.raises(ValueError, match="low = 3 must lie below high = 2"):
        Limit("porosity", low=3, high=2)
    with pytest.raises(ValueError, match="give low, high, or both"):
        Limit("porosity")
    with pytest.raises(ValueError, match="needs plan_n and plan_k"):
        Limit("porosity", low=0, also=("acceptance_by_variables",))
    with pytest.raises(ValueError, match="percentile must lie"):
        Limit("porosity", low=0, percentile=0)
    with pytest.raises(ValueError, match="max_share is a fraction"):
        Limit("porosity", low=0, max_share=5)
    with pytest.raises(SettingsError, match="unknown regime 'fast'"):
        check_limits(QcSettings(regime="fast"), regimes=("delayed",))


def test_a_share_of_nothing_needs_as_many_as_the_exact_interval_says() -> None:
    """None of n outside: the upper end is 1 − 0.025^(1/n), at most 0.05 from n = 72 on (Clopper and Pearson 1934)."""
    x = np.full(10, 5.0) + np.tile([0.1, -0.1], 5)
    v = judge(Limit("pore_d50_um", high=9.0, on="share_outside"), x, _mean(x), SETTINGS, images=10)
    assert (v.outcome, v.further) == ("not_decided", 62)
    assert 1 - 0.025 ** (1 / 72) <= 0.05 < 1 - 0.025 ** (1 / 71)
