"""Charts of quality control as inline SVG: particles against their limits, and batches in order of time.

Limits are dashed and named, signals are ringed, instruments differ in the shape of their marks: nothing is told by colour alone.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from markupsafe import Markup

from poroscan.qc.trend import Trend
from poroscan.report.svg import BLUE, GREY, HAIR, INK, ORANGE, element, text, tick_label, ticks

Array = npt.NDArray[np.float64]

_LEFT, _RIGHT, _TOP, _BOTTOM = 46.0, 12.0, 20.0, 36.0
_MOST_BARS = 24
#: Names of the shapes of marks, in their order.
SHAPE_NAMES = ("circle", "square", "triangle", "diamond")
#: Shapes of marks, one per instrument; ``{r}`` is the radius.
_SHAPES = (
    "M{x0} {y}a{r} {r} 0 1 0 {d} 0a{r} {r} 0 1 0 -{d} 0",
    "M{x0} {y0}h{d}v{d}h-{d}z",
    "M{x} {y0}L{x1} {y1}H{x0}z",
    "M{x} {y0}L{x1} {y}L{x} {y1}L{x0} {y}z",
)


@dataclass(frozen=True)
class _Panel:
    """A stretch of the picture with its axes: value ranges and pixel ranges (top is smaller than bottom)."""

    x0: float
    x1: float
    y0: float
    y1: float
    left: float
    right: float
    top: float
    bottom: float

    def x(self, value: float) -> float:
        return self.left + (value - self.x0) / (self.x1 - self.x0) * (self.right - self.left)

    def y(self, value: float) -> float:
        return self.bottom - (value - self.y0) / (self.y1 - self.y0) * (self.bottom - self.top)


def distribution_chart(
    values: Array,
    *,
    limits: tuple[float | None, float | None],
    mean: tuple[float, float, float],
    x_label: str,
    label: str,
    size: tuple[int, int] = (340, 200),
) -> Markup:
    """Histogram of the particles with the limits, and the mean with its interval above it.

    Parameters
    ----------
    values
        One finite value per particle; none give a sentence.
    limits
        Lower and upper limit; None where there is none.
    mean
        Mean and the ends of its interval; NaN ends draw none.
    x_label
        What the axis shows, with unit.
    label
        What the chart shows, for those who cannot see it.
    size
        Width and height in units of the page's pixels.
    """
    if values.size == 0:
        return Markup('<p class="nothing">{}</p>').format(f"{x_label}: no particle has a value")
    edges = _edges(values)
    counts, _ = np.histogram(values, edges)
    ends = [float(edges[0]), float(edges[-1]), *(v for v in (*limits, *mean) if v is not None and math.isfinite(v))]
    pad = 0.05 * (max(ends) - min(ends))
    panel = _Panel(
        min(ends) - pad, max(ends) + pad, 0.0, counts.max() * 1.05, _LEFT, size[0] - _RIGHT, 50.0, size[1] - _BOTTOM
    )
    body = [*_outside(panel, limits), *_count_axis(panel), *_value_axis(panel, x_label, size[1])]
    for number, a, b in zip(counts, edges[:-1], edges[1:], strict=True):
        if number:
            x, y = panel.x(float(a)), panel.y(float(number))
            width = max(panel.x(float(b)) - x - 1, 1.5)
            body.append(
                f'<path d="M{x:.1f} {panel.bottom:.1f}V{y:.1f}h{width:.1f}V{panel.bottom:.1f}z" fill="{BLUE}" fill-opacity=".75"/>'
            )
    body += [*_limit_lines(panel, limits), *_mean_mark(panel, mean)]
    return element(body, label=label, size=size)


def _edges(values: Array) -> Array:
    """Edges of the bars: as the Freedman–Diaconis rule asks, at most so many, and one bar where all are equal."""
    low, high = float(values.min()), float(values.max())
    if not high > low:
        half = 0.02 * abs(low) or 0.5
        return np.array([low - half, high + half])
    wanted = np.histogram_bin_edges(values, "auto").size - 1
    return np.linspace(low, high, max(4, min(_MOST_BARS, wanted)) + 1)


def _outside(panel: _Panel, limits: tuple[float | None, float | None]) -> Iterator[str]:
    spans = [(panel.left, limits[0]), (panel.right, limits[1])]
    for edge, limit in spans:
        if limit is not None:
            a, b = sorted((edge, panel.x(limit)))
            yield f'<path d="M{a:.1f} {panel.top:.1f}H{b:.1f}V{panel.bottom:.1f}H{a:.1f}z" fill="{ORANGE}" fill-opacity=".10"/>'


def _limit_lines(panel: _Panel, limits: tuple[float | None, float | None]) -> Iterator[str]:
    """Each limit has its own line of text, so that limits close to each other stay readable."""
    for limit, word, y in ((limits[0], "lower limit", 28.0), (limits[1], "upper limit", 14.0)):
        if limit is not None:
            x = panel.x(limit)
            left = x < (panel.left + panel.right) / 2
            yield f'<path d="M{x:.1f} {y - 8:.1f}V{panel.bottom:.1f}" stroke="{ORANGE}" stroke-width="1.8" stroke-dasharray="6 3"/>'
            yield text(x + 4 if left else x - 4, y, f"{word} {limit:g}", anchor="start" if left else "end", fill=INK)


def _mean_mark(panel: _Panel, mean: tuple[float, float, float]) -> Iterator[str]:
    value, low, high = mean
    y = panel.top - 9
    if math.isfinite(low) and math.isfinite(high):
        yield f'<path d="M{panel.x(low):.1f} {y}H{panel.x(high):.1f}" stroke="{INK}" stroke-width="3"/>'
    if math.isfinite(value):
        yield f'<path d="{_mark(3, panel.x(value), y, 5.5)}" fill="{INK}" stroke="#fff"/>'


def _count_axis(panel: _Panel) -> Iterator[str]:
    yield text(2, panel.top - 4, "particles", fill=INK)
    for tick in ticks(panel.y0, panel.y1, most=4):
        if tick == int(tick):
            y = panel.y(tick)
            yield f'<path d="M{panel.left:.0f} {y:.1f}H{panel.right:.0f}" stroke="{HAIR}"/>'
            yield text(panel.left - 5, y + 3.5, f"{tick:.0f}", anchor="end")


def _value_axis(panel: _Panel, x_label: str, height: float) -> Iterator[str]:
    for tick in ticks(panel.x0, panel.x1):
        x = panel.x(tick)
        if x > panel.right - 8:
            continue
        yield f'<path d="M{x:.1f} {panel.bottom:.0f}v4" stroke="{GREY}"/>'
        yield text(x, panel.bottom + 14, tick_label(tick, panel.x0, panel.x1), anchor="middle")
    yield f'<path d="M{panel.left:.0f} {panel.bottom:.0f}H{panel.right:.0f}" stroke="{GREY}"/>'
    yield text(panel.right, height - 5, x_label, anchor="end", fill=INK)


def control_chart(
    trend: Trend,
    *,
    y_label: str,
    label: str,
    current: Sequence[str] = (),
    numbers: Sequence[int] | None = None,
    width: int = 560,
) -> Markup:
    """Individuals chart over its moving-range chart.

    Parameters
    ----------
    trend
        The trend; without limits the points stand alone.
    y_label
        What the values are, with unit.
    label
        What the chart shows, for those who cannot see it.
    current
        Names of the batches of this run, whose marks are filled.
    numbers
        Number of each batch, as the axis shows it; None counts from 1.
    width
        Width in units of the page's pixels.
    """
    points = trend.points
    if not points:
        return Markup('<p class="nothing">{}</p>').format(f"{y_label}: no batch in the ledger has a value")
    values = np.array([p.estimate.value for p in points])
    last = len(points) - 1
    upper = _Panel(-0.5, last + 0.5, *_span(trend, values), _LEFT, width - 70, _TOP, 170)
    body = [text(2, 12, y_label, fill=INK), *_horizontal(upper), *_chart_lines(trend, upper)]
    body.append(f'<path d="M{_line(upper, values)}" fill="none" stroke="{GREY}" stroke-width="1.2"/>')
    shapes = {g.name: i % len(_SHAPES) for i, g in enumerate(trend.instruments)}
    ringed = set() if trend.chart is None else {i for found in trend.chart.signals.values() for i in found}
    for i, point in enumerate(points):
        x, y, fill = upper.x(i), upper.y(point.estimate.value), BLUE if point.batch in current else "#fff"
        if i in ringed:
            body.append(f'<circle cx="{x:.1f}" cy="{y:.1f}" r="9" fill="none" stroke="{ORANGE}" stroke-width="2"/>')
        mark = _mark(shapes.get(point.instrument or "", 0), x, y, 4.0)
        body.append(f'<path d="{mark}" fill="{fill}" stroke="{BLUE}" stroke-width="1.5"/>')
    bottom = 190.0
    if trend.chart is not None:
        lower = _Panel(-0.5, last + 0.5, 0.0, max(trend.chart.range_upper, float(trend.chart.moving_range.max())) * 1.08,
                       _LEFT, width - 70, 200, 262)  # fmt: skip
        body += [text(2, 192, "moving range", fill=INK), *_horizontal(lower, most=3), *_range_lines(trend, lower)]
        path = " ".join(f"{lower.x(i + 1):.1f} {lower.y(v):.1f}" for i, v in enumerate(trend.chart.moving_range))
        body.append(f'<path d="M{path}" fill="none" stroke="{BLUE}" stroke-width="1.5"/>')
        bottom = 280.0
    body += _batch_axis(upper, list(numbers or range(1, last + 2)), bottom)
    return element(body, label=label, size=(width, int(bottom + 16)))


def _span(trend: Trend, values: Array) -> tuple[float, float]:
    ends = [float(values.min()), float(values.max())]
    if trend.chart is not None:
        ends += [trend.chart.lower, trend.chart.upper]
    pad = 0.08 * (max(ends) - min(ends)) or 0.1 * abs(ends[0]) or 1.0
    return min(ends) - pad, max(ends) + pad


def _line(panel: _Panel, values: Array) -> str:
    return " ".join(f"{panel.x(i):.1f} {panel.y(float(v)):.1f}" for i, v in enumerate(values))


def _horizontal(panel: _Panel, *, most: int = 5) -> Iterator[str]:
    for tick in ticks(panel.y0, panel.y1, most=most):
        y = panel.y(tick)
        yield f'<path d="M{panel.left:.0f} {y:.1f}H{panel.right:.0f}" stroke="{HAIR}"/>'
        yield text(panel.left - 5, y + 3.5, tick_label(tick, panel.y0, panel.y1), anchor="end")


def _chart_lines(trend: Trend, panel: _Panel) -> Iterator[str]:
    if trend.chart is None:
        return
    c = trend.chart
    for value, word, dash in ((c.centre, "mean", ""), (c.upper, "+3 sigma", "6 3"), (c.lower, "−3 sigma", "6 3")):
        yield from _reference(panel, value, word, dash)


def _range_lines(trend: Trend, panel: _Panel) -> Iterator[str]:
    if trend.chart is not None:
        yield from _reference(panel, trend.chart.range_centre, "mean", "")
        yield from _reference(panel, trend.chart.range_upper, "limit", "6 3")


def _reference(panel: _Panel, value: float, word: str, dash: str) -> Iterator[str]:
    y, dashes = panel.y(value), f' stroke-dasharray="{dash}"' if dash else ""
    yield f'<path d="M{panel.left:.0f} {y:.1f}H{panel.right:.0f}" stroke="{ORANGE}" stroke-width="1.3"{dashes}/>'
    yield text(panel.right + 4, y + 3.5, word, fill=INK)


def _batch_axis(panel: _Panel, numbers: Sequence[int], y: float) -> Iterator[str]:
    step = max(1, math.ceil(len(numbers) / 12))
    for i in range(0, len(numbers), step):
        yield text(panel.x(i), y, str(numbers[i]), anchor="middle")
    yield text(panel.right, y + 13, "batch, in order of time", anchor="end", fill=INK)


def _mark(shape: int, x: float, y: float, r: float) -> str:
    parts = {"x": x, "y": y, "r": r, "d": 2 * r, "x0": x - r, "x1": x + r, "y0": y - r, "y1": y + r}
    return _SHAPES[shape].format(**{name: f"{value:.1f}" for name, value in parts.items()})
