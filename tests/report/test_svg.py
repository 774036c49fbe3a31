from __future__ import annotations

import xml.etree.ElementTree as ET

import numpy as np
import pytest

from poroscan.report.svg import Series, dot_chart, line_chart, log_ticks, ticks


def _chart(*series: Series, **options: object) -> ET.Element:
    text = line_chart(series, x_label="x (µm)", y_label="y", label='a "chart" <of> y', **options)  # type: ignore[arg-type]
    return ET.fromstring(text)


def test_line_goes_through_its_points() -> None:
    chart = _chart(Series(np.array([0.0, 10.0]), np.array([0.0, 1.0])), y_range=(0.0, 1.0), size=(150, 160))
    path = next(p for p in chart.iter("path") if p.get("fill") == "none")
    # the plot area is the picture less 40, 10, 24 and 36 at left, right, top and bottom
    assert path.get("d") == "M40.0 124.0 140.0 24.0"
    assert chart.get("aria-label") == 'a "chart" <of> y'
    assert chart.get("role") == "img"


def test_gaps_break_the_line() -> None:
    y = np.array([1.0, 2.0, np.nan, 2.0, 3.0])
    path = next(p for p in _chart(Series(np.arange(5.0), y)).iter("path") if p.get("fill") == "none")
    assert path.get("d", "").count("M") == 2


def test_log_axis_is_even_in_decades() -> None:
    chart = _chart(Series(np.array([1.0, 10.0, 100.0]), np.array([0.0, 0.5, 1.0])), x_log=True)
    path = next(p for p in chart.iter("path") if p.get("fill") == "none")
    x = [float(v) for v in path.get("d", "")[1:].split()[::2]]
    assert x[1] - x[0] == pytest.approx(x[2] - x[1])


def test_band_closes_around_the_interval() -> None:
    s = Series(np.array([0.0, 1.0]), np.array([0.4, 0.5]), np.array([0.3, 0.4]), np.array([0.5, 0.6]))
    assert any(p.get("fill-opacity") and p.get("d", "").endswith("Z") for p in _chart(s).iter("path"))


def test_long_curves_stay_small() -> None:
    x = np.linspace(0, 1, 100_000)
    assert len(line_chart([Series(x, x)], x_label="x", y_label="y", label="l")) < 3000


@pytest.mark.parametrize("values", [[], [np.nan], [np.nan, np.inf]])
def test_nothing_to_show_is_said(values: list[float]) -> None:
    y = np.array(values)
    text = line_chart([Series(np.arange(float(len(y))), y)], x_label="x", y_label="<y>", label="l")
    assert text == '<p class="nothing">&lt;y&gt;: nothing to show</p>'


def test_one_point_and_flat_lines_do_not_divide_by_zero() -> None:
    _chart(Series(np.array([1.0]), np.array([0.0])))
    _chart(Series(np.array([1.0, 2.0]), np.array([0.0, 0.0])))
    _chart(Series(np.array([2.0, 2.0]), np.array([0.0, 1.0])), x_log=True)


def test_names_are_escaped() -> None:
    text = dot_chart([("<b>&", 1.0, 0.5, 1.5), ("none", np.nan, np.nan, np.nan)], label='"')
    assert "&lt;b&gt;&amp;" in text
    ET.fromstring(text)


@pytest.mark.parametrize(("low", "high"), [(0, 1), (0, 3.7), (-0.2, 0.31), (123.0, 127.5), (0, 1e-6), (0, 8e5)])
def test_ticks_are_round_and_few(low: float, high: float) -> None:
    found = ticks(low, high)
    assert 2 <= len(found) <= 5
    assert all(low - 1e-9 <= t <= high + 1e-9 for t in found)
    step = found[1] - found[0]
    assert round(step / 10 ** np.floor(np.log10(step)), 6) in (1, 2, 2.5, 5, 10)


def test_log_ticks() -> None:
    assert log_ticks(0.9, 60.0) == [1.0, 2.0, 5.0, 10.0, 20.0, 50.0]
    assert log_ticks(1.0, 1e6)[:2] == [1.0, 10.0]
