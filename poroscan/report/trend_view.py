"""The trend as the report shows it: control charts, what they say in words, and the numbers behind them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from markupsafe import Markup

from poroscan.qc.charts import RULES
from poroscan.qc.comparison import BatchMean
from poroscan.qc.interval import bounds_of, mean_interval
from poroscan.qc.ledger import LedgerPoint, history
from poroscan.qc.settings import QcSettings
from poroscan.qc.trend import FEWEST_FOR_LIMITS, GroupMean, Trend, trend
from poroscan.report.numbers import UNDEFINED, interval, plain
from poroscan.report.qc_charts import SHAPE_NAMES, control_chart
from poroscan.report.words import count, labelled

#: Charted where the recipe has no limits.
DEFAULT_QUANTITIES: tuple[str, ...] = ("porosity", "pore_d50_um", "wall_d50_um", "equivalent_diameter_um")

Rows = tuple[tuple[str, ...], ...]
#: A batch in the ledger: digest and name.
_Batch = tuple[str, str]


@dataclass(frozen=True, eq=False)
class TrendView:
    """Trend of one quantity for the report.

    Parameters
    ----------
    title
        Quantity with its unit.
    chart
        The control chart.
    caption
        What its marks stand for.
    sentences
        What it says.
    signals
        Number, batch and rules of each batch with a signal.
    groups
        Heading (instrument or operator) with rows of name, number of batches, mean with interval.
    """

    title: str
    chart: Markup
    caption: str
    sentences: tuple[str, ...]
    signals: Rows
    groups: tuple[tuple[str, Rows], ...]


@dataclass(frozen=True, eq=False)
class TrendSection:
    """All trends, the rules with their sources, and one table of the batches behind all charts (heads and rows)."""

    views: tuple[TrendView, ...]
    rules: tuple[str, ...]
    heads: tuple[str, ...]
    rows: Rows


def trend_section(ledger: str | Path, settings: QcSettings, *, current: Sequence[str]) -> TrendSection:
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
    points = {(p.digest, p.batch): p for t in made for p in t.points}
    order = sorted(points, key=lambda b: (points[b].measured_on or points[b].added_utc, points[b].added_utc))
    number = {batch: i for i, batch in enumerate(order, start=1)}
    return TrendSection(
        tuple(_view(t, number, current) for t in made),
        tuple(f"{RULES[rule].words} ({RULES[rule].source})" for rule in settings.runs_rules),
        ("No.", "Batch", "Measured on", "Instrument", "Operator", *(labelled(key) for key in keys)),
        tuple(_batch_row(number[b], points[b], made) for b in order),
    )


def _view(t: Trend, number: Mapping[_Batch, int], current: Sequence[str]) -> TrendView:
    title, sentences = labelled(t.quantity), tuple(_sentences(t))
    numbers = [number[p.digest, p.batch] for p in t.points]
    chart = control_chart(
        t, y_label=title, label=f"Control chart of {title}. {' '.join(sentences)}", current=current, numbers=numbers
    )
    groups = (("Instrument", t.instruments), ("Operator", t.operators))
    return TrendView(
        title,
        chart,
        _caption(t),
        sentences,
        tuple(_signals(t, numbers)),
        tuple((head, _group_rows(rows)) for head, rows in groups if rows),
    )


def _caption(t: Trend) -> str:
    parts = ["filled marks: batches of this run"]
    if t.chart is not None and any(t.chart.signals.values()):
        parts.append("rings: signals")
    parts += [f"{SHAPE_NAMES[i % len(SHAPE_NAMES)]}: {g.name}" for i, g in enumerate(t.instruments)]
    text = "; ".join(parts)
    return f"{text[:1].upper()}{text[1:]}."


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
        signals = {i for found in c.signals.values() for i in found}
        yield f"{count(len(signals), 'batch', 'batches')} with a signal." if signals else "No signal."
    if t.drift is not None:
        d = t.drift
        per = f"{interval(d.slope, d.low, d.high)} per batch"
        if d.low > 0 or d.high < 0:
            yield f"Drift {'upwards' if d.slope > 0 else 'downwards'}: {per}."
        else:
            yield f"No drift shows: {per}."
    if t.measured_again:
        yield f"{count(t.measured_again, 'earlier measurement')} of the same batches passed over: the last one counts."


def _signals(t: Trend, numbers: Sequence[int]) -> Iterator[tuple[str, ...]]:
    if t.chart is None:
        return
    for i, point in enumerate(t.points):
        rules = [RULES[rule].words for rule, found in t.chart.signals.items() if i in found]
        if rules:
            yield f"{numbers[i]}", point.batch, "; ".join(rules)


def _group_rows(groups: Sequence[GroupMean]) -> Rows:
    return tuple((g.name, f"{g.number}", interval(g.mean, g.low, g.high)) for g in groups)


def _batch_row(number: int, p: LedgerPoint, trends: Sequence[Trend]) -> tuple[str, ...]:
    about = (p.measured_on or UNDEFINED, p.instrument or UNDEFINED, p.operator or UNDEFINED)
    found = [next((q for q in t.points if (q.digest, q.batch) == (p.digest, p.batch)), None) for t in trends]
    return (f"{number}", p.batch, *about, *(_value(q, t.quantity) for q, t in zip(found, trends, strict=True)))


def _value(p: LedgerPoint | None, key: str) -> str:
    if p is None:
        return UNDEFINED
    e = p.estimate
    mean = BatchMean(e.value, e.standard_error, e.df, e.sd)
    return interval(e.value, *mean_interval(mean, bounds=bounds_of(key)))
