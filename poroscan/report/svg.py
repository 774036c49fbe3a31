"""Line charts and dot charts as compact inline SVG: no script, no font, a few kilobytes each.

Colours are blue, orange and grey, told apart by lightness as well. Every chart is one ``img`` for a screen reader, with its
message as label.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from markupsafe import Markup, escape

from poroscan.report.numbers import fixed

BLUE, ORANGE, GREY, INK, HAIR = "#00618a", "#c75a00", "#8a949e", "#3a4651", "#dfe4e8"

_LEFT, _RIGHT, _TOP, _BOTTOM = 40.0, 10.0, 24.0, 36.0
_MOST_POINTS = 64

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Series:
    """One line of a chart, with its band where low and high are given.

    Parameters
    ----------
    x, y
        Points; those that are not finite break the line.
    low, high
        Ends of the interval at each x, or None.
    style
        ``main``, ``thin`` (one of many) or ``dashed`` (a reference).
    colour
        Colour of line and band.
    """

    x: Array
    y: Array
    low: Array | None = None
    high: Array | None = None
    style: Literal["main", "thin", "dashed"] = "main"
    colour: str = BLUE


@dataclass(frozen=True)
class _Frame:
    """Where values lie in the picture."""

    x0: float
    x1: float
    y0: float
    y1: float
    width: float
    height: float
    log: bool

    def x(self, value: Array | float) -> Array:
        v, a, b = np.asarray(value, dtype=np.float64), self.x0, self.x1
        if self.log:
            with np.errstate(divide="ignore", invalid="ignore"):
                v, a, b = np.log10(v), math.log10(a), math.log10(b)
        return _LEFT + (v - a) / (b - a) * (self.width - _LEFT - _RIGHT)

    def y(self, value: Array | float) -> Array:
        v = np.asarray(value, dtype=np.float64)
        return self.height - _BOTTOM - (v - self.y0) / (self.y1 - self.y0) * (self.height - _TOP - _BOTTOM)


def line_chart(
    series: Sequence[Series],
    *,
    x_label: str,
    y_label: str,
    label: str,
    x_log: bool = False,
    y_range: tuple[float, float] | None = None,
    size: tuple[int, int] = (260, 180),
) -> Markup:
    """A chart of lines over one axis.

    Parameters
    ----------
    series
        Lines, drawn in order.
    x_label, y_label
        What the axes show, with unit.
    label
        What the chart shows, for those who cannot see it.
    x_log
        Whether the x axis is logarithmic.
    y_range
        Ends of the y axis; None takes 0 and what the lines need.
    size
        Width and height in units of the page's pixels.

    Returns
    -------
    markupsafe.Markup
        The SVG element; a sentence where there is nothing to draw.
    """
    drawn = [s for s in series if _good(s, x_log).any()]
    if not drawn:
        return Markup('<p class="nothing">{}</p>').format(f"{y_label}: nothing to show")
    frame = _frame(drawn, x_log=x_log, y_range=y_range, size=size)
    body = [*_axes(frame, x_label=x_label, y_label=y_label)]
    for s in drawn:
        body += [*_band(s, frame), *_line(s, frame)]
    return element(body, label=label, size=size)


def dot_chart(rows: Sequence[tuple[str, float, float, float]], *, label: str, width: int = 260) -> Markup:
    """Values with intervals, one row each, each name above its line.

    Parameters
    ----------
    rows
        Name, value, low, high; NaN ends draw no interval, a NaN value no dot.
    label
        What the chart shows, for those who cannot see it.
    width
        Width in units of the page's pixels.
    """
    ends = [v for _, *values in rows for v in values if math.isfinite(v)]
    if not ends:
        return Markup('<p class="nothing">Nothing to show</p>')
    height = 32 * len(rows) + 30
    low, high = min(ends), max(ends)
    pad = 0.08 * (high - low) or 0.1 * abs(high) or 1.0
    frame = _Frame(low - pad, high + pad, 0.0, 1.0, width + _LEFT, height, False)
    bottom = height - 22
    body = []
    for tick in ticks(frame.x0, frame.x1):
        x = float(frame.x(tick)) - _LEFT
        body.append(f'<path d="M{x:.1f} 0V{bottom}" stroke="{HAIR}"/>')
        body.append(text(x, bottom + 14, tick_label(tick, frame.x0, frame.x1), anchor="middle"))
    for number, (name, *values) in enumerate(rows):
        body += _dot(name, [float(frame.x(v)) - _LEFT for v in values], 12 + 32 * number)
    return element(body, label=label, size=(width, height))


def _dot(name: str, places: Sequence[float], y: int) -> Iterable[str]:
    """One row of a dot chart: the name on a white ground, the interval, the dot."""
    x, low, high = places
    yield f'<g paint-order="stroke" stroke="#fff" stroke-width="4">{text(0, y, name, fill=INK)}</g>'
    if math.isfinite(low) and math.isfinite(high):
        yield f'<path d="M{low:.1f} {y + 10}H{high:.1f}" stroke="{BLUE}" stroke-width="3"/>'
    if math.isfinite(x):
        yield f'<circle cx="{x:.1f}" cy="{y + 10}" r="4.5" fill="{BLUE}" stroke="#fff" stroke-width="1.5"/>'


def ticks(low: float, high: float, *, most: int = 5) -> list[float]:
    """Round numbers within a range, at most so many.

    Parameters
    ----------
    low, high
        Ends of the range.
    most
        Largest number of ticks.

    Examples
    --------
    >>> ticks(0.0, 1.0)
    [0.0, 0.25, 0.5, 0.75, 1.0]
    """
    span = high - low
    if not (math.isfinite(span) and span > 0):
        return [low]
    power = 10.0 ** math.floor(math.log10(span / most))
    step = next(f * power for f in (1, 2, 2.5, 5, 10, 20) if span / (f * power) <= most - 0.5 or f == 20)
    first = math.ceil(low / step - 1e-9)
    return [round(k * step, 12) for k in range(first, math.floor(high / step + 1e-9) + 1)]


def log_ticks(low: float, high: float) -> list[float]:
    """Ticks of a logarithmic axis: 1, 2 and 5 of each decade where there is room, else decades.

    Parameters
    ----------
    low, high
        Ends of the range, both positive.
    """
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    for steps in ((1, 2, 5), (1, 3), (1,)):
        found = [f * 10.0**d for d in decades for f in steps if low <= f * 10.0**d <= high]
        if len(found) <= 6:
            break
    return found if len(found) >= 2 else [low, high]


def _good(s: Series, log: bool) -> npt.NDArray[np.bool_]:
    good = np.isfinite(s.x) & np.isfinite(s.y)
    return good & (s.x > 0) if log else good


def _frame(
    series: Sequence[Series], *, x_log: bool, y_range: tuple[float, float] | None, size: tuple[int, int]
) -> _Frame:
    xs = np.concatenate([s.x[_good(s, x_log)] for s in series])
    ys = np.concatenate([v[np.isfinite(v)] for s in series for v in (s.y, s.high, s.low) if v is not None])
    x0, x1 = float(xs.min()), float(xs.max())
    if not x_log:
        x0 = min(0.0, x0)
    if x1 <= x0:
        x0, x1 = (x0 / 2, x0 * 2) if x_log else (x0 - 0.5, x0 + 0.5)
    y0, y1 = y_range or (min(0.0, float(ys.min())), float(ys.max()) * 1.05)
    return _Frame(x0, x1, y0, y1 if y1 > y0 else y0 + 1.0, float(size[0]), float(size[1]), x_log)


def _axes(frame: _Frame, *, x_label: str, y_label: str) -> Iterable[str]:
    right, bottom = frame.width - _RIGHT, frame.height - _BOTTOM
    for tick in ticks(frame.y0, frame.y1):
        y = float(frame.y(tick))
        yield f'<path d="M{_LEFT:.0f} {y:.1f}H{right:.0f}" stroke="{HAIR}"/>'
        yield text(_LEFT - 5, y + 3.5, tick_label(tick, frame.y0, frame.y1), anchor="end")
    for tick in log_ticks(frame.x0, frame.x1) if frame.log else ticks(frame.x0, frame.x1):
        x = float(frame.x(tick))
        yield f'<path d="M{x:.1f} {bottom:.0f}v4" stroke="{GREY}"/>'
        words = _significant(tick) if frame.log else tick_label(tick, frame.x0, frame.x1)
        yield text(x, bottom + 14, words, anchor="middle")
    yield f'<path d="M{_LEFT:.0f} {bottom:.0f}H{right:.0f}" stroke="{GREY}"/>'
    yield text(right, frame.height - 5, x_label, anchor="end", fill=INK)
    yield text(2, 12, y_label, fill=INK)


def _band(s: Series, frame: _Frame) -> Iterable[str]:
    if s.low is None or s.high is None:
        return
    for piece in _pieces(_good(s, frame.log) & np.isfinite(s.low) & np.isfinite(s.high)):
        there = _points(frame.x(s.x[piece]), _clipped(frame, s.high[piece]))
        back = _points(frame.x(s.x[piece][::-1]), _clipped(frame, s.low[piece][::-1]))
        yield f'<path d="M{there}L{back}Z" fill="{s.colour}" fill-opacity=".16"/>'


def _line(s: Series, frame: _Frame) -> Iterable[str]:
    look = {
        "main": 'stroke-width="2"',
        "thin": 'stroke-width="1" stroke-opacity=".38"',
        "dashed": 'stroke-width="1.2" stroke-dasharray="4 3"',
    }[s.style]
    path = "".join(
        f"M{_points(frame.x(s.x[p]), _clipped(frame, s.y[p]))}" for p in _pieces(_good(s, frame.log)) if len(p) > 1
    )
    if path:
        yield f'<path d="{path}" fill="none" stroke="{s.colour}" {look}/>'


def _clipped(frame: _Frame, values: Array) -> Array:
    return frame.y(np.clip(values, frame.y0, frame.y1))


def _pieces(good: npt.NDArray[np.bool_]) -> list[npt.NDArray[np.intp]]:
    """Runs of consecutive good points, thinned evenly where there are very many."""
    index = np.flatnonzero(good)
    if index.size == 0:
        return []
    runs = np.split(index, np.flatnonzero(np.diff(index) > 1) + 1)
    return [
        r if r.size <= _MOST_POINTS else r[np.unique(np.linspace(0, r.size - 1, _MOST_POINTS).round().astype(int))]
        for r in runs
    ]


def _points(x: Array, y: Array) -> str:
    return " ".join(f"{a:.1f} {b:.1f}" for a, b in zip(x, y, strict=True))


def text(x: float, y: float, words: str, *, anchor: str = "start", fill: str = "#5b6673") -> str:
    """One line of text.

    Parameters
    ----------
    x, y
        Place of the anchor on the base line.
    words
        The text; escaped here.
    anchor
        ``start``, ``middle`` or ``end``.
    fill
        Colour.
    """
    end = "" if anchor == "start" else f' text-anchor="{anchor}"'
    return f'<text x="{x:.1f}" y="{y:.1f}" fill="{fill}"{end}>{escape(words)}</text>'


def tick_label(tick: float, low: float, high: float) -> str:
    """A tick with as many decimals as the ticks of its axis need.

    Parameters
    ----------
    tick
        The tick.
    low, high
        Ends of the axis.
    """
    steps = ticks(low, high)
    step = steps[1] - steps[0] if len(steps) > 1 else abs(tick) or 1.0
    decimals = next((d for d in range(7) if abs(step * 10**d - round(step * 10**d)) < 1e-6), 6)
    return fixed(tick, decimals)


def _significant(tick: float) -> str:
    return fixed(tick, max(0, -math.floor(math.log10(tick))))


def element(body: Iterable[str], *, label: str, size: tuple[int, int]) -> Markup:
    """The SVG element around its parts, one picture for a screen reader.

    Parameters
    ----------
    body
        Its parts.
    label
        What it shows, in words.
    size
        Width and height in units of the page's pixels.
    """
    head = f'<svg viewBox="0 0 {size[0]} {size[1]}" role="img" aria-label="{escape(label)}" font-size="11">'
    return Markup(head + "".join(body) + "</svg>")
