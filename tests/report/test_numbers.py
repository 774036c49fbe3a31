from __future__ import annotations

import math

import pytest

from poroscan.report.numbers import fixed, interval, plain


@pytest.mark.parametrize(
    ("value", "low", "high", "text"),
    [
        # half-width 0.01348 -> two digits, 0.013 -> third decimal place (JCGM 100:2008, 7.2.6)
        (0.43219, 0.41871, 0.44567, "0.432 (0.419 to 0.446)"),
        (12.3456, 10.1, 14.6, "12.3 (10.1 to 14.6)"),
        (1234.5, 1001.0, 1468.0, "1230 (1000 to 1470)"),
        (0.000123456, 0.000121, 0.000126, "0.0001235 (0.0001210 to 0.0001260)"),
        (-0.13, -0.16, -0.10, "−0.130 (−0.160 to −0.100)"),
        (123456.0, 120000.0, 127000.0, "123\u202f500 (120\u202f000 to 127\u202f000)"),
        (0.5, math.nan, math.nan, "0.500"),
        (0.5, None, None, "0.500"),
        (math.nan, 0.1, 0.2, "–"),
        (None, None, None, "–"),
        (0.3, 0.3, 0.3, "0.300 (0.300 to 0.300)"),
    ],
)
def test_rounded_to_the_uncertainty(value: float, low: float, high: float, text: str) -> None:
    assert interval(value, low, high) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0.00"),
        (9.996, "10.0"),
        (99.96, "100"),
        (0.09996, "0.100"),
        (123.4, "123"),
        (-2.0, "−2.00"),
        (1.0, "1.00"),
    ],
)
def test_three_digits_without_an_interval(value: float, text: str) -> None:
    assert plain(value) == text


def test_no_minus_zero() -> None:
    assert fixed(-0.0001, 2) == "0.00"
