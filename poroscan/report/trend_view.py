"""The trend as the report shows it: control charts, what they say in words, and the numbers behind them."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from markupsafe import Markup

from poroscan.qc.charts import RULES
from poroscan.qc.ledger import history
from poroscan.qc.settings import QcSettings
from poroscan.qc.trend import FEWEST_FOR_LIMITS, GroupMean, Trend, trend
from poroscan.quantities import by_key
from poroscan.report.numbers import UNDEFINED, interval, plain
from poroscan.report.qc_charts import control_chart
from poroscan.report.words import count

#: Charted where the recipe has no limits.
DEFAULT_QUANTITIES: tuple[str, ...] = ("porosity", "pore_d50_um", "wall_d50_um", "equivalent_diameter_um")

Rows = tuple[tuple[str, ...], ...]


@dataclass(frozen=True, eq=False)
class TrendView:
    """Trend of one quantity for the report.

    Parameters
    ----------
    title
        Quantity with its unit.
    chart
        The control chart.
    sentences
        What it says.
    signals
        Batch, rule and source of each signal.
    groups
        Heading (instrument or operator) with rows of name, number of batches, mean with interval.
    batches
        Number, batch, day, instrument, operator, value with interval.
    """

    title: str
    chart: Markup
    sentences: tuple[str, ...]
    signals: Rows
    groups: tuple[tuple[str, Rows], ...]
    batches: Rows


def trend_views(ledger: str | Path, settings: QcSettings, *, current: Sequence[str]) -> list[TrendView]:
    """Trends of the limited quantities, or of the usual ones where there are no limits.

    Parameters
    ----------
    ledger
        Ledger file.
    settings
        Limits and runs rules of the recipe.
    current
        Batches of this run.

    Raises
    ------
    StoreError
        If the ledger cannot be read.
    """
    keys = tuple(dict.fromkeys(limit.quantity for limit in settings.limits)) or DEFAULT_QUANTITIES
    made = [trend(key, history(ledger, key), rules=settings.runs_rules) for key in keys]
    return [_view(t, current) for t in made]


def _view(t: Trend, current: Sequence[str]) -> TrendView:
    title = _label(t.quantity)
    sentences = tuple(_sentences(t))
    return TrendView(
        title,
        control_chart(t, y_label=title, label=f"Control chart of {title}. {' '.join(sentences)}", current=current),
        sentences,
        tuple(_signals(t)),
        tuple(
            (head, _group_rows(rows))
            for head, rows in (("Instrument", t.instruments), ("Operator", t.operators))
            if rows
        ),
        tuple(_batch_rows(t)),
    )


def _sentences(t: Trend) -> Iterator[str]:
    n = len(t.points)
    if n == 0:
        yield "No batch in the ledger has a value."
        return
    if t.chart is None:
        yield f"{count(n, 'batch', 'batches')}; control limits are drawn from {FEWEST_FOR_LIMITS} batches on."
    else:
        c = t.chart
        yield (
            f"{count(n, 'batch', 'batches')}; mean {plain(c.centre)}, three-sigma limits {plain(c.lower)} to {plain(c.upper)} "
            "from the mean moving range."
        )
        signals = sorted({i for found in c.signals.values() for i in found})
        yield f"{count(len(signals), 'batch', 'batches')} with a signal." if signals else "No signal."
    if t.drift is not None:
        d = t.drift
        per = f"{plain(d.slope)} per batch, 95\u00a0% interval {plain(d.low)} to {plain(d.high)}"
        if d.low > 0 or d.high < 0:
            yield f"Drift {'upwards' if d.slope > 0 else 'downwards'}: {per}."
        else:
            yield f"No drift shows ({per})."
    if t.measured_again:
        yield f"{count(t.measured_again, 'earlier measurement')} of the same batches passed over: the last one counts."


def _signals(t: Trend) -> Iterator[tuple[str, ...]]:
    if t.chart is None:
        return
    for rule, found in t.chart.signals.items():
        for i in found:
            yield f"{i + 1}", t.points[i].batch, RULES[rule].words, RULES[rule].source


def _group_rows(groups: Sequence[GroupMean]) -> Rows:
    return tuple((g.name, f"{g.number}", interval(g.mean, g.low, g.high)) for g in groups)


def _batch_rows(t: Trend) -> Iterator[tuple[str, ...]]:
    for number, p in enumerate(t.points, start=1):
        e = p.estimate
        half = math.nan
        if e.df > 0 and math.isfinite(e.standard_error):
            from poroscan.measure.uncertainty import t_quantile

            half = t_quantile(e.df) * e.standard_error
        value = interval(e.value, e.value - half, e.value + half)
        yield (
            f"{number}",
            p.batch,
            p.measured_on or UNDEFINED,
            p.instrument or UNDEFINED,
            p.operator or UNDEFINED,
            value,
        )


def _label(key: str) -> str:
    q = by_key(key)
    unit = q.unit_words.replace("µm", "px") if key == q.pixel_key else q.unit_words
    return f"{q.label} ({unit})" if unit else q.label
