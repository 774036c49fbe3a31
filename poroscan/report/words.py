"""Sentences for people: what a batch looks like, what a flag means, what was left out.

Fractions are per cent here and nowhere else. A sentence says more than its interval allows in no case: a difference is named
only where the interval excludes none.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from poroscan.quantities import FLAGS, Quantity, by_key
from poroscan.report.numbers import UNDEFINED, decimals_of, fixed, interval, plain

Row = Mapping[str, Any]

#: What the report says of the limits of its own statements.
CAUTIONS: tuple[str, ...] = (
    "A section is a sample of one plane. Porosity, size and regime carry the sampling error that is shown; what the "
    "interval does not name, it does not cover.",
    "A regime is an inference from simulations with stated assumptions, not a measurement.",
    "Outlines and pores were found by a program. Look at the pictures: numbers from a wrong outline are wrong however "
    "narrow their interval.",
    "Particles for medicine, food, or pressure and safety duty are released by validated methods, local rules and "
    "licensed people. This report is not such a release.",
)

OUTCOMES: Mapping[str, str] = {
    "measured": "measured",
    "no_particle": "no particle found",
    "unreadable": "not read",
    "failed": "failed",
    "lost": "lost",
}


def count(number: float, one: str, many: str | None = None) -> str:
    """A number with its noun.

    Parameters
    ----------
    number
        How many.
    one, many
        The noun; the plural is made with an s where it is not given.

    Examples
    --------
    >>> count(1, "picture"), count(3, "batch", "batches")
    ('1 picture', '3 batches')
    """
    return f"{int(number)} {one if number == 1 else many or one + 's'}"


def cell(row: Row, key: str) -> str:
    """A quantity of a row with its interval, in micrometres where known and else in pixels.

    Parameters
    ----------
    row
        Row of particles or batches.
    key
        Micrometre key.
    """
    q = by_key(key)
    if row.get(q.key) is None and q.pixel_key and _finite(row.get(q.pixel_key)):
        return f"{plain(row[q.pixel_key])} {pixel_unit(q)}"
    return interval(row.get(q.key), row.get(f"{q.key}_low"), row.get(f"{q.key}_high"))


def parted(text: str) -> tuple[str, str]:
    """A value and the words of its interval, without brackets, so that they can be set apart.

    Parameters
    ----------
    text
        As ``cell`` gives it.

    Examples
    --------
    >>> parted("0.43 (0.41 to 0.45)")
    ('0.43', '0.41 to 0.45')
    """
    value, _, ends = text.partition(" (")
    return value, ends.removesuffix(")")


def labelled(key: str) -> str:
    """Label of a quantity with the unit of its column.

    Parameters
    ----------
    key
        Column in micrometres or pixels.

    Examples
    --------
    >>> labelled("pore_d50_px")
    'Pore D50 (px)'
    """
    q = by_key(key)
    unit = pixel_unit(q) if key == q.pixel_key else q.unit_words
    return f"{q.label} ({unit})" if unit else q.label


def in_words(pattern: str, row: Row, key: str) -> str:
    """A sentence around a length, with its interval at the end; empty where the length is undefined.

    Parameters
    ----------
    pattern
        Sentence with ``{}`` for value and unit, without full stop.
    row, key
        As in ``cell``.
    """
    q, (value, ends) = by_key(key), parted(cell(row, key))
    if value == UNDEFINED:
        return ""
    unit = f"\u00a0{q.unit_words}" if _finite(row.get(q.key)) and q.unit_words else ""
    if ends:
        return pattern.format(f"{value}{unit}") + f" (95\u00a0% interval {ends}{unit})."
    return pattern.format(f"{value}{unit}") + _no_interval(row, q.key)


def pixel_unit(q: Quantity) -> str:
    """Unit of the pixel twin in words.

    Parameters
    ----------
    q
        Catalogue entry.
    """
    return q.unit_words.replace("µm", "px")


def per_cent(pattern: str, row: Row, key: str) -> str:
    """A sentence around a fraction in per cent, with its interval at the end; empty where it is undefined.

    Parameters
    ----------
    pattern, row, key
        As in ``in_words``.
    """
    value, low, high = (_hundredfold(row.get(k)) for k in (key, f"{key}_low", f"{key}_high"))
    if value is None:
        return ""
    decimals = decimals_of(value, low, high)
    sentence = pattern.format(f"{fixed(value, decimals)}\u00a0%")
    if low is None or high is None:
        return sentence + _no_interval(row, key)
    return f"{sentence} (95\u00a0% interval {fixed(low, decimals)} to {fixed(high, decimals)}\u00a0%)."


def batch_counts(row: Row) -> str:
    """How much was looked at, in one sentence.

    Parameters
    ----------
    row
        Row of batches.csv.
    """
    text = f"{count(row['particles'], 'particle')} in {count(row['images'], 'picture')}"
    if row["particles_cut_by_frame"]:
        cut = count(row["particles_cut_by_frame"], "particle")
        verb = "is" if row["particles_cut_by_frame"] == 1 else "are"
        text += f"; {cut} {verb} cut by the frame and left out of the means"
    return text + "."


def batch_sentences(row: Row) -> list[str]:
    """What the batch looks like, in plain words with numbers and intervals.

    Parameters
    ----------
    row
        Row of batches.csv.
    """
    if not row["particles"]:
        return ["No particle was measured."]
    if not row["particles_used"]:
        return ["No particle of this batch counts towards a mean; the particles below stand for themselves."]
    sentences = [
        per_cent("Pores take up {} of the section", row, "porosity"),
        in_words("Half of the pore area lies in pores wider than {}", row, "pore_d50_um"),
        in_words("The walls between them have a median thickness of {}", row, "wall_d50_um"),
        in_words("The skin is {} thick", row, "skin_thickness_um"),
        _asymmetry(row),
        in_words("Sections have an equivalent diameter of {}", row, "equivalent_diameter_um"),
    ]
    if row["particles_used"] == 1:
        sentences.append("With one particle there is no interval for the batch: nothing says how far others differ.")
    elif row["images_measured"] == 1:
        sentences.append("All particles come from one picture: the intervals say nothing of other pictures.")
    return [s for s in sentences if s]


def short_sentences(row: Row) -> list[str]:
    """What the batch looks like in one line, for a page with many batches.

    Parameters
    ----------
    row
        Row of batches.csv.
    """
    return [" ".join(batch_sentences(row)[:2])]


def _no_interval(row: Row, key: str) -> str:
    """End of a sentence without an interval; one particle is spoken of once and not in every sentence."""
    several = (row.get(f"{key}_n") or 0) > 1
    return " (too few particles for an interval)." if several else "."


def flag_words(flags: str, *, leave_out: tuple[str, ...] = ("no_atlas",)) -> list[tuple[str, str]]:
    """Words and remedies of flags.

    Parameters
    ----------
    flags
        Keys, separated by spaces.
    leave_out
        Keys that are said elsewhere.
    """
    return [(FLAGS[f].words, FLAGS[f].remedy) for f in (flags or "").split() if f in FLAGS and f not in leave_out]


def _asymmetry(row: Row) -> str:
    value, low, high = (_number(row.get(f"radial_asymmetry{end}")) for end in ("", "_low", "_high"))
    if math.isnan(value + low + high):
        return ""
    shown, ends = parted(interval(value, low, high))
    text = f"radial asymmetry {shown}, 95\u00a0% interval {ends}"
    if low > 0:
        return f"The outer half of the section is more porous than the inner half ({text})."
    if high < 0:
        return f"The outer half of the section is less porous than the inner half ({text})."
    return f"No difference between outer and inner half shows ({text})."


def _hundredfold(value: Any) -> float | None:
    return 100.0 * value if _finite(value) else None


def _number(value: Any) -> float:
    return float(value) if _finite(value) else math.nan


def _finite(value: Any) -> bool:
    return isinstance(value, int | float) and math.isfinite(value)
