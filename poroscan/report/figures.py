"""The figures of the report: batches against each other, curves of a batch, curves of a particle."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from markupsafe import Markup

from poroscan.quantities import by_key
from poroscan.report.source import Key
from poroscan.report.svg import BLUE, GREY, ORANGE, Series, dot_chart, line_chart

#: Curves that are shown: name -> label of x, label of y, whether it is a cumulative share, what it shows.
SHOWN: Mapping[str, tuple[str, str, bool, str]] = {
    "pore_size_area": ("pore diameter", "share of pore area below", True, "Pore sizes"),
    "radial_porosity": ("distance from the outline", "porosity", False, "Radial profile"),
    "s2": ("distance r", "two-point correlation S₂(r)", False, "Two-point correlation"),
}

_RANGE: Mapping[bool, tuple[float, float] | None] = {True: (0.0, 1.0), False: None}

#: Quantities by which batches are set side by side.
COMPARED: tuple[str, ...] = ("porosity", "pore_d50_um", "wall_d50_um", "equivalent_diameter_um")

Curves = Mapping[tuple[Key, str], Series]
Units = Mapping[tuple[Key, str], tuple[str, str]]


def batch_comparison(batches: Sequence[Mapping[str, Any]]) -> Iterator[tuple[str, Markup]]:
    """One dot chart per quantity, batches as rows, with the interval of the mean.

    Parameters
    ----------
    batches
        Rows of batches.csv.

    Yields
    ------
    tuple
        Caption and chart.
    """
    for key in COMPARED:
        q = by_key(key)
        rows = [
            (_short(str(b["batch"])), _nan(b.get(q.key)), _nan(b.get(f"{q.key}_low")), _nan(b.get(f"{q.key}_high")))
            for b in batches
        ]
        if any(math.isfinite(r[1]) for r in rows):
            unit = f" ({q.unit_words})" if q.unit_words else ""
            words = "; ".join(f"{name} {value:.3g}" for name, value, *_ in rows if math.isfinite(value))
            yield f"{q.label}{unit}", dot_chart(rows, label=f"{q.label}{unit} by batch: {words}")


def batch_figures(keys: Sequence[Key], curves: Curves, units: Units) -> Iterator[tuple[str, Markup]]:
    """Curves of all particles of a batch, thin, with their mean.

    Parameters
    ----------
    keys
        Its particles.
    curves, units
        As ``source.read_curves`` and ``source.curve_units`` give them.

    Yields
    ------
    tuple
        Caption and chart.
    """
    for name, (x_label, y_label, share, caption) in SHOWN.items():
        present = [key for key in keys if (key, name) in curves]
        unit = _common_unit([units[key, name][0] for key in present])
        lines = [curves[key, name] for key in present if units[key, name][0] == unit]
        if not lines:
            continue
        thin = [Series(s.x, s.y, style="thin", colour=GREY) for s in lines]
        mean = [_mean(lines, share=share)] if len(lines) > 1 else []
        words = f"{caption} of {len(lines)} particles, and their mean"
        yield (
            caption,
            line_chart(
                [*thin, *mean],
                x_label=_with_unit(x_label, unit),
                y_label=y_label,
                label=words,
                y_range=_RANGE[share],
                size=(340, 220),
            ),
        )


def particle_figures(key: Key, curves: Curves, units: Units, row: Mapping[str, Any]) -> Iterator[Markup]:
    """Curves of one particle with their intervals.

    Parameters
    ----------
    key
        The particle.
    curves, units
        As ``source.read_curves`` and ``source.curve_units`` give them.
    row
        Its row of particles.csv.

    Yields
    ------
    markupsafe.Markup
        The charts.
    """
    for name, (x_label, y_label, share, caption) in SHOWN.items():
        if (key, name) not in curves:
            continue
        s = curves[key, name]
        lines = [*_reference(name, s, row), s]
        yield line_chart(
            lines,
            x_label=_with_unit(x_label, units[key, name][0]),
            y_label=y_label,
            label=f"{caption} of particle {key[2]} of {key[1]}",
            y_range=_RANGE[share],
        )


def _reference(name: str, s: Series, row: Mapping[str, Any]) -> list[Series]:
    """Where the curve would lie without structure: the mean porosity, or its square for S2."""
    porosity = row.get("porosity")
    if porosity is None or name not in ("radial_porosity", "s2") or len(s.x) == 0:
        return []
    level = porosity**2 if name == "s2" else porosity
    ends = np.array([s.x[0], s.x[-1]])
    return [Series(ends, np.full(2, level), style="dashed", colour=ORANGE)]


def _mean(lines: Sequence[Series], *, share: bool) -> Series:
    """Mean curve on a common x, where at least half of the particles reach; a share is 1 beyond its last point."""
    used = [s for s in lines if len(s.x)]
    x = np.linspace(min(float(s.x[0]) for s in used), max(float(s.x[-1]) for s in used), 60)
    beyond = 1.0 if share else math.nan
    table = np.array([np.interp(x, s.x, s.y, left=0.0 if share else math.nan, right=beyond) for s in used])
    number = np.isfinite(table).sum(axis=0)
    total = np.where(np.isfinite(table), table, 0.0).sum(axis=0)
    y = np.where(2 * number >= len(table), total / np.maximum(number, 1), math.nan)
    return Series(x, y, colour=BLUE)


def _common_unit(units: Sequence[str]) -> str:
    return "µm" if "µm" in units or not units else units[0]


def _with_unit(label: str, unit: str) -> str:
    return f"{label} ({unit})" if unit else label


def _short(text: str) -> str:
    return text if len(text) <= 34 else f"{text[:33]}…"


def _nan(value: Any) -> float:
    return math.nan if value is None else float(value)
