"""What a scale-bar label says: ``20 µm``, ``5um``, ``1.0 mm``, ``500 nm``."""

from __future__ import annotations

import re

_NUMBER = r"([0-9OoQIl|]{1,5}(?:[.,][0-9OoIl]{1,3})?)"
_TRIM = " \t-–—|_:;=~.,'\"`<>[](){}«»←→↔+*/\\"

#: Readings of the micro sign, seen where letters are small. ``p`` is one of them: nobody prints a bar in picometres.
_MICRO = ("µ", "μ", "u", "U", "p", "H", "y", "j", "v", "ц", "i", "l", "L", "F", "f", "w", "h", "J")
_METRE = r"(?:m|M|rn|nn|м|n1)"

_UNITS: tuple[tuple[re.Pattern[str], float], ...] = (
    (re.compile(r"(?:micrometers?|micrometres?|microns?)$", re.IGNORECASE), 1.0),
    (re.compile(r"nm$|nrn$|NM$|Nm$"), 1e-3),
    (re.compile(r"(?:mm|mrn|rnm|rnrn|MM|Mm|mM)$"), 1e3),
    (re.compile(r"cm$|CM$"), 1e4),
    (re.compile(rf"(?:{'|'.join(_MICRO)}){_METRE}$"), 1.0),
    (re.compile(r"[µμ]$"), 1.0),
)  # fmt: skip

_ROUND = frozenset("10 12 15 20 25 30 40 50 60 70 75 80 90".split())  # noqa: SIM905 - reads better than a list of texts

_DIGITS = str.maketrans("OoQIl|", "000111")


def parse_label(text: str) -> float | None:
    """Length in micrometres that a label states; None where it is no length.

    The whole text must be a number and a unit: ``WD 10.9 mm`` is none. Misread micro signs and letters in place of digits are
    put right, and numbers with more than three significant digits are refused, since no bar carries one.

    Examples
    --------
    >>> parse_label("20 µm"), parse_label("1.0mm"), parse_label("500nm"), parse_label("5O pm")
    (20.0, 1000.0, 0.5, 50.0)
    >>> parse_label("WD 10.9 mm") is None
    True
    """
    bare = re.sub(r"\s+", "", text.strip(_TRIM))
    match = re.match(_NUMBER, bare)
    if match is None:
        return None
    unit = bare[match.end() :].strip(_TRIM)
    number = match[1].translate(_DIGITS)
    # "1" + "um" must not lose its l or I to the number: "20lm" is 20 µm
    if match[1][-1] in "Il|" and len(match[1]) > 1 and re.fullmatch(_METRE, unit):
        number, unit = match[1][:-1].translate(_DIGITS), "l" + unit
    factor = next((f for pattern, f in _UNITS if pattern.match(unit)), None)
    if factor is None or len(number.replace(".", "").replace(",", "").strip("0")) > 3:
        return None
    value = _value(number)
    return value * factor if value else None


def _value(number: str) -> float | None:
    try:
        return float(number.replace(",", ".")) or None
    except ValueError:
        return None


def plausible(um: float) -> bool:
    """True for the lengths that scale bars are drawn with: two leading digits of the usual round numbers.

    Other lengths in a banner (a working distance of 0.92 mm) are not taken for the bar's.
    """
    digits = f"{um:.6e}".split("e")[0].replace(".", "")
    return digits[:2] in _ROUND and not digits[2:].strip("0")
