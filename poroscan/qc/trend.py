"""The trend of one quantity over the batches of a ledger: control chart, drift, and instruments and operators apart."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats

from poroscan.qc.charts import IndividualsChart, individuals_chart
from poroscan.qc.ledger import LedgerPoint

#: Batches from which on control limits are drawn; fewer set limits that alarm or sleep at random.
FEWEST_FOR_LIMITS = 8


@dataclass(frozen=True)
class Drift:
    """Slope of a straight line through the batches in their order, per batch, with its 95 % interval."""

    slope: float
    low: float
    high: float


@dataclass(frozen=True)
class GroupMean:
    """Batches of one instrument or operator: their number, mean and its 95 % interval (NaN with one batch)."""

    name: str
    number: int
    mean: float
    low: float
    high: float


@dataclass(frozen=True, eq=False)
class Trend:
    """History of one quantity.

    Parameters
    ----------
    quantity
        Key with its unit.
    points
        Batches in order of time; of a batch that was measured more than once the last measurement.
    measured_again
        Earlier measurements that were passed over.
    chart
        Individuals and moving-range chart; None below ``FEWEST_FOR_LIMITS`` batches.
    drift
        None below 3 batches.
    instruments, operators
        Groups where at least two are named; else empty.
    """

    quantity: str
    points: tuple[LedgerPoint, ...]
    measured_again: int
    chart: IndividualsChart | None
    drift: Drift | None
    instruments: tuple[GroupMean, ...]
    operators: tuple[GroupMean, ...]


def trend(quantity: str, points: Sequence[LedgerPoint], *, rules: tuple[str, ...] = ("beyond_limits",)) -> Trend:
    """Trend of one quantity.

    Parameters
    ----------
    quantity
        Key with its unit.
    points
        As ``ledger.history`` gives them.
    rules
        Names from ``charts.RULES``.

    Raises
    ------
    ValueError
        If a rule is unknown.
    """
    kept = last_measured(points)
    values = [p.estimate.value for p in kept]
    return Trend(
        quantity,
        kept,
        len(points) - len(kept),
        individuals_chart(values, rules=rules) if len(kept) >= FEWEST_FOR_LIMITS else None,
        drift(values) if len(kept) >= 3 else None,
        _groups([(p.instrument, p.estimate.value) for p in kept]),
        _groups([(p.operator, p.estimate.value) for p in kept]),
    )


def last_measured(points: Sequence[LedgerPoint]) -> tuple[LedgerPoint, ...]:
    """Points in their order; of those with the same name and day measured only the one that was added last.

    Parameters
    ----------
    points
        As ``ledger.history`` gives them.
    """
    last: dict[tuple[str, str | None], LedgerPoint] = {}
    for point in points:
        known = last.get((point.batch, point.measured_on))
        if known is None or point.added_utc >= known.added_utc:
            last[point.batch, point.measured_on] = point
    kept = {id(point) for point in last.values()}
    return tuple(p for p in points if id(p) in kept)


def drift(values: Sequence[float]) -> Drift:
    """Least-squares slope over the order of the batches, with Student's 95 % interval.

    Parameters
    ----------
    values
        At least 3 values in order.
    """
    y = np.asarray(values, dtype=np.float64)
    x = np.arange(y.size, dtype=np.float64) - (y.size - 1) / 2
    slope = float(x @ y / (x @ x))
    residual = y - y.mean() - slope * x
    error = math.sqrt(float(residual @ residual) / (y.size - 2) / float(x @ x))
    half = float(stats.t.ppf(0.975, y.size - 2)) * error
    return Drift(slope, slope - half, slope + half)


def _groups(named: Sequence[tuple[str | None, float]]) -> tuple[GroupMean, ...]:
    groups: dict[str, list[float]] = {}
    for name, value in named:
        if name:
            groups.setdefault(name, []).append(value)
    return tuple(_group(name, groups[name]) for name in sorted(groups)) if len(groups) > 1 else ()


def _group(name: str, values: list[float]) -> GroupMean:
    mean = float(np.mean(values))
    if len(values) < 2:
        return GroupMean(name, 1, mean, math.nan, math.nan)
    half = float(stats.t.ppf(0.975, len(values) - 1)) * float(np.std(values, ddof=1)) / math.sqrt(len(values))
    return GroupMean(name, len(values), mean, mean - half, mean + half)
