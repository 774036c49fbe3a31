"""Limits and verdicts: is the batch within, outside, or is that not decided?

A verdict is about the batch, not about the particles that happened to be cut: it is *within* only where the whole interval lies
inside the limits and *outside* only where the whole interval lies beyond one of them. Otherwise it is *not decided*, with the
number of further particles that would decide it if the estimate stayed where it is.

Particles of one picture are not independent. The mean's interval comes from the nested estimate; percentiles and shares use the
effective number of particles sd²/se² of that estimate (Kish 1965, *Survey Sampling*).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import stats

from poroscan.errors import SettingsError
from poroscan.qc.comparison import BatchMean
from poroscan.qc.interval import bounds_of, mean_interval
from poroscan.qc.sample_size import clopper_pearson_interval
from poroscan.qc.settings import Limit, QcSettings
from poroscan.quantities import Quantity, by_key

Outcome = Literal["within", "outside", "not_decided"]
FloatArray = npt.NDArray[np.float64]

#: Nobody cuts more particles than this to have a share decided.
_MOST_FURTHER = 100_000


@dataclass(frozen=True)
class Verdict:
    """Verdict of one limit on one batch.

    Parameters
    ----------
    limit
        The limit.
    outcome
        ``within``, ``outside`` or ``not_decided``.
    value, low, high
        What was held against the limit, with its interval; NaN where it could not be estimated.
    n
        Particles that entered.
    further
        Particles more that would decide it, the estimate staying where it is; None where it is decided or no number would do.
    reason
        Why it is not decided, in words; empty otherwise.
    """

    limit: Limit
    outcome: Outcome
    value: float
    low: float
    high: float
    n: int
    further: int | None = None
    reason: str = ""


def check_limits(settings: QcSettings, *, regimes: Sequence[str] = ()) -> None:
    """Hold the limits against the catalogue before anything starts.

    Parameters
    ----------
    settings
        Limits to check.
    regimes
        Known regimes; empty skips that check.

    Raises
    ------
    SettingsError
        If a quantity is unknown (the nearest are named) or lacks its unit, a fraction is given as percent, or the
        regime wanted is unknown.
    """
    for limit in settings.limits:
        _check_quantity(limit)
    if settings.regime is not None and regimes and settings.regime not in regimes:
        raise SettingsError(f"qc: unknown regime {settings.regime!r}; known: {', '.join(regimes)}")


def judge(limit: Limit, values: npt.ArrayLike, estimate: BatchMean, settings: QcSettings, *, images: int) -> Verdict:
    """Verdict of one limit on the particles of one batch.

    Parameters
    ----------
    limit
        The limit.
    values
        One finite value per particle, in the unit of the limit.
    estimate
        Nested estimate of their mean.
    settings
        Confidence level and smallest counts.
    images
        Number of pictures the particles come from.

    Raises
    ------
    ValueError
        If a value is not finite.
    """
    x = np.asarray(values, dtype=np.float64).ravel()
    if not np.isfinite(x).all():
        raise ValueError("values must be finite (leave out particles without a value before calling)")
    if x.size == 0:
        return _undecided(limit, 0, "no particle has a value")
    value, low, high = _STATEMENTS[limit.on](limit, x, estimate, settings.level)
    if x.size < settings.min_particles:
        return _undecided(
            limit, x.size, f"{x.size} of at least {settings.min_particles} particles", value, low, high,
            further=settings.min_particles - x.size,
        )  # fmt: skip
    if images < settings.min_images:
        return _undecided(limit, x.size, f"{images} of at least {settings.min_images} pictures", value, low, high)
    if not (math.isfinite(value) and not math.isnan(low) and not math.isnan(high)):
        return _undecided(limit, x.size, "too few particles for an interval", value, low, high)
    made = _decide(limit, value, low, high, int(x.size))
    if limit.on == "share_outside" and made.outcome == "not_decided":
        effective = _effective(x, estimate)
        return replace(made, further=_further_for_share(limit, value, x.size, effective / x.size, settings.level))
    return made


def overall(outcomes: Sequence[Outcome]) -> Outcome:
    """Verdict of a batch: outside where any limit is, else not decided where any is not, else within.

    Raises
    ------
    ValueError
        If there is no verdict: a batch without limits has none.
    """
    if not outcomes:
        raise ValueError("a batch without limits has no verdict")
    return "outside" if "outside" in outcomes else "not_decided" if "not_decided" in outcomes else "within"


def _decide(limit: Limit, value: float, low: float, high: float, n: int) -> Verdict:
    bottom, top = _bounds(limit)
    if high < bottom or low > top:
        return Verdict(limit, "outside", value, low, high, n)
    if low >= bottom and high <= top:
        return Verdict(limit, "within", value, low, high, n)
    further = _further(value, low, high, bottom, top, n)
    return Verdict(limit, "not_decided", value, low, high, n, further, "the interval straddles a limit")


def _further(value: float, low: float, high: float, bottom: float, top: float, n: int) -> int | None:
    """Half-widths shrink with 1/√n: particles until the side that straddles a limit just clears it."""
    need = 0.0
    for edge in (bottom, top):
        if not (low < edge < high):
            continue
        reach, room = (value - low, value - edge) if edge < value else (high - value, edge - value)
        if room <= 0 or not math.isfinite(reach):
            return None
        need = max(need, (reach / room) ** 2)
    return max(1, math.ceil(n * (need - 1))) if need > 1 else None


def _further_for_share(limit: Limit, share: float, n: int, effect: float, level: float) -> int | None:
    """Particles until the Clopper–Pearson interval of this share clears the largest share: found by halving."""

    def decided(m: int) -> bool:
        low, high = clopper_pearson_interval(share * m * effect, m * effect, level=level)
        return high <= limit.max_share or low > limit.max_share

    if not decided(_MOST_FURTHER):
        return None
    few, many = n, _MOST_FURTHER
    while many - few > 1:
        middle = (few + many) // 2
        few, many = (few, middle) if decided(middle) else (middle, many)
    return many - n


def _bounds(limit: Limit) -> tuple[float, float]:
    if limit.on == "share_outside":
        return -math.inf, limit.max_share
    return (-math.inf if limit.low is None else limit.low), (math.inf if limit.high is None else limit.high)


def _mean(limit: Limit, _x: FloatArray, estimate: BatchMean, level: float) -> tuple[float, float, float]:
    return estimate.mean, *mean_interval(estimate, level=level, bounds=bounds_of(limit.quantity))


def _percentile(limit: Limit, x: FloatArray, estimate: BatchMean, level: float) -> tuple[float, float, float]:
    """Order-statistic interval (distribution-free) with the effective number of particles."""
    share, n = limit.percentile / 100, _effective(x, estimate)
    value = float(np.quantile(x, share, method="hazen"))
    whole = int(n)
    if whole < 2:
        return value, math.nan, math.nan
    a = (1 - level) / 2
    below, above = stats.binom.ppf(a, whole, share), stats.binom.ppf(1 - a, whole, share) + 1
    low = -math.inf if below < 1 else float(np.quantile(x, (below - 0.5) / whole, method="hazen"))
    high = math.inf if above > whole else float(np.quantile(x, (above - 0.5) / whole, method="hazen"))
    return value, low, high


def _share_outside(limit: Limit, x: FloatArray, estimate: BatchMean, level: float) -> tuple[float, float, float]:
    beyond = np.zeros(x.shape, dtype=bool)
    if limit.low is not None:
        beyond |= x < limit.low
    if limit.high is not None:
        beyond |= x > limit.high
    share, n = float(beyond.mean()), _effective(x, estimate)
    return share, *clopper_pearson_interval(share * n, n, level=level)


def _effective(x: FloatArray, estimate: BatchMean) -> float:
    """Effective number of independent particles: never more than were counted."""
    if x.size < 2 or not (estimate.standard_error > 0 and estimate.sd > 0):
        return float(x.size)
    return float(min(x.size, (estimate.sd / estimate.standard_error) ** 2))


_STATEMENTS: dict[str, Callable[[Limit, FloatArray, BatchMean, float], tuple[float, float, float]]] = {
    "mean": _mean,
    "percentile": _percentile,
    "share_outside": _share_outside,
}


def _undecided(
    limit: Limit,
    n: int,
    reason: str,
    value: float = math.nan,
    low: float = math.nan,
    high: float = math.nan,
    *,
    further: int | None = None,
) -> Verdict:
    return Verdict(limit, "not_decided", value, low, high, n, further, reason)


def _check_quantity(limit: Limit) -> Quantity:
    try:
        q = by_key(limit.quantity)
    except KeyError as error:
        raise SettingsError(f"qc: limit: {error.args[0]}") from None
    if limit.quantity not in (q.key, q.pixel_key):
        raise SettingsError(f"qc: limit on {limit.quantity!r} lacks its unit: write {q.key!r}")
    is_fraction = q.base.endswith("porosity")
    for side in ("low", "high"):
        value = getattr(limit, side)
        if is_fraction and value is not None and not 0 <= value <= 1:
            raise SettingsError(
                f"qc: limit on {limit.quantity!r}: {side} = {value} must be a fraction between 0 and 1 (55 % is 0.55)"
            )
    return q
