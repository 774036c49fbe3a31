"""Accuracy on rendered truth: from the written picture to the measured values, against the exact masks.

Truth of porosity, diameter, pore D50, skin and polar direction is what ``measure_section`` gives on the exact masks (what is
tested here is reading and segmentation), and the closed form where the structure has one.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from rendered_cases import HARD_LOOKS, SKINNED, VOLUMES, Case, draw_case

from poroscan.intake import load_picture
from poroscan.measure import Measurement, measure_section
from poroscan.render.writing import write_tiff
from poroscan.section import PixelSize, Section
from poroscan.segment import segment_picture

#: Demands of the accuracy page on the whole table (at least 60 particles).
BIAS, SPREAD_95 = 0.01, 0.03
#: A mean over six particles of two pictures scatters more than one over sixty: the demand is on the whole table.
BIAS_OF_SIX = 0.02
#: What is reached where a demand is not met in full; docs/accuracy.md says so. Pore bodies of connected networks join or
#: part at a shift of the border by a fraction of a pixel, which moves the median of 40 bodies by a whole body.
D50_SHARE, DIAMETER_SHARE, DIAMETER_WORST = 0.8, 0.95, 0.015
DIAMETER, POSITION_D50 = 0.01, 0.05
SKIN_PX, SKIN_RELATIVE = 2.0, 0.05
POLAR_DEG, POLAR_FROM = 10.0, 0.1
#: Wider limits where the picture itself hides something (ours; the table demands nothing of these).
HARD_POROSITY, HARD_DIAMETER = 0.06, 0.02
VOLUME_POROSITY = 0.06
#: Looks whose pores ``auto`` does not find; docs/accuracy.md says so.
PORES_NOT_FOUND = ("bright_pores",)


@dataclass(frozen=True)
class Row:
    """Errors of one particle (found minus true); NaN where the truth is not defined."""

    case: str
    structure: str
    porosity_true: float
    porosity: float
    diameter: float
    pore_d50: float
    skin_true: float
    skin: float
    polar: float


@dataclass(frozen=True)
class Outcome:
    rows: tuple[Row, ...]
    missed: tuple[str, ...]
    invented: tuple[str, ...]


def measure_case(case: Case, folder: Path) -> Outcome:
    """Write the picture, read it, segment it, measure it, and set it against its truth."""
    path = folder / f"{case.name}.tif"
    write_tiff(path, case.rendered.grey, pixel_size_um=case.rendered.pixel_size_um)
    picture = load_picture(path)
    assert picture.banner_rows == case.rendered.banner_rows
    assert picture.pixel_size.um == pytest.approx(case.rendered.pixel_size_um, rel=1e-6)
    found = segment_picture(picture)
    labels = case.rendered.labels
    partner = _partners(labels, found.labels)
    rows, missed, used = [], [], set()
    for number, structure in enumerate(case.structures, start=1):
        other = partner.get(number)
        if other is None:
            missed.append(f"{case.name}/{structure}")
            continue
        used.add(other)
        truth = measure_section(_section(case.rendered.pores, labels, number, picture.pixel_size), rng=0)
        mine = measure_section(_section(found.pores, found.labels, other, picture.pixel_size), rng=0)
        rows.append(_row(case, structure, truth, mine))
    numbers = set(np.unique(found.labels[found.labels > 0]).tolist())
    invented = tuple(f"{case.name}/{n}" for n in sorted(numbers - used))
    return Outcome(tuple(rows), tuple(missed), invented)


def _partners(true: np.ndarray, found: np.ndarray) -> dict[int, int]:
    """True number -> found number whose overlap is at least half of their union."""
    pairs = {}
    for number in np.unique(true[true > 0]).tolist():
        inside = true == number
        candidates, counts = np.unique(found[inside & (found > 0)], return_counts=True)
        if len(candidates) == 0:
            continue
        best = int(candidates[np.argmax(counts)])
        union = int((inside | (found == best)).sum())
        if counts.max() >= 0.5 * union:
            pairs[number] = best
    return pairs


def _section(pores: np.ndarray, labels: np.ndarray, number: int, pixel_size: PixelSize) -> Section:
    inside = labels == number
    rows, columns = np.nonzero(inside)
    window = (
        slice(max(rows.min() - 2, 0), rows.max() + 3),
        slice(max(columns.min() - 2, 0), columns.max() + 3),
    )
    particle = inside[window]
    return Section(pores=(pores[window] & particle), particle=particle, pixel_size=pixel_size, name=str(number))


def _row(case: Case, structure: str, truth: Measurement, mine: Measurement) -> Row:
    def value(of: Measurement, base: str) -> float:
        return of.record[base].value if base in of.record.estimates else math.nan

    polar = math.nan
    if value(truth, "polar_asymmetry") > POLAR_FROM:
        turn = value(mine, "polar_direction") - value(truth, "polar_direction")
        polar = abs((turn + 180) % 360 - 180)
    true_d50 = value(truth, "pore_d50")
    return Row(
        case.name,
        structure,
        value(truth, "porosity"),
        value(mine, "porosity") - value(truth, "porosity"),
        value(mine, "equivalent_diameter") / value(truth, "equivalent_diameter") - 1,
        value(mine, "pore_d50") / true_d50 - 1 if true_d50 > 0 else math.nan,
        value(truth, "skin_thickness"),
        value(mine, "skin_thickness") - value(truth, "skin_thickness"),
        polar,
    )


def table(rows: tuple[Row, ...]) -> str:
    """The rows as text, worst values last."""
    lines = ["case      structure     porosity   error   diam.%   D50 %  skin px  error  polar°"]
    lines += [
        f"{r.case}  {r.structure:12s} {r.porosity_true:8.3f} {r.porosity:+8.3f} {100 * r.diameter:+7.2f} "
        f"{100 * r.pore_d50:+7.1f} {r.skin_true:8.1f} {r.skin:+6.1f} {r.polar:7.1f}"
        for r in rows
    ]
    errors = np.array([r.porosity for r in rows])
    lines.append(
        f"{len(rows)} particles: porosity bias {errors.mean():+.4f}, 95 % of |error| within "
        f"{np.quantile(abs(errors), 0.95):.4f}, worst {abs(errors).max():.4f}; "
        f"worst diameter {100 * _worst(r.diameter for r in rows):.2f} %, "
        f"pore D50 beyond 5 % in {sum(abs(r.pore_d50) > POSITION_D50 for r in rows)}, "
        f"worst {100 * _worst(r.pore_d50 for r in rows):.1f} %, worst skin {_worst(r.skin for r in rows):.1f} px, "
        f"worst polar direction {_worst(r.polar for r in rows):.1f}°"
    )
    return "\n".join(lines)


def _worst(values) -> float:
    finite = [abs(v) for v in values if math.isfinite(v)]
    return max(finite, default=0.0)


def check(outcome: Outcome, *, bias: float) -> None:
    """The demands of the accuracy table, and for diameter and pore D50 the share of particles that meet them."""
    rows = outcome.rows
    assert outcome.missed == ()
    assert outcome.invented == ()
    errors = np.array([r.porosity for r in rows])
    assert abs(errors.mean()) <= bias
    assert np.quantile(abs(errors), 0.95) <= SPREAD_95
    outside = [f"{r.case}/{r.structure}: {words}" for r in rows for words in _beyond(r)]
    assert outside == []
    assert np.mean([abs(r.diameter) <= DIAMETER for r in rows]) >= DIAMETER_SHARE
    sizes = np.array([abs(r.pore_d50) for r in rows if math.isfinite(r.pore_d50)])
    assert np.mean(sizes <= POSITION_D50) >= D50_SHARE
    assert np.median(sizes) <= POSITION_D50 / 2


def _beyond(r: Row) -> list[str]:
    found = []
    if not abs(r.diameter) <= DIAMETER_WORST:
        found.append(f"diameter {100 * r.diameter:+.2f} %")
    if abs(r.skin) > max(SKIN_PX, SKIN_RELATIVE * r.skin_true):
        found.append(f"skin {r.skin:+.1f} of {r.skin_true:.1f} px")
    if r.polar > POLAR_DEG:
        found.append(f"polar direction {r.polar:.1f}°")
    return found


def run_cases(cases: Iterable[Case], folder: Path) -> Outcome:
    outcomes = [measure_case(case, folder) for case in cases]
    return Outcome(
        tuple(r for o in outcomes for r in o.rows),
        tuple(m for o in outcomes for m in o.missed),
        tuple(i for o in outcomes for i in o.invented),
    )


def test_six_rendered_particles(tmp_path: Path) -> None:
    outcome = run_cases(map(draw_case, range(2)), tmp_path)
    print("\n" + table(outcome.rows))
    check(outcome, bias=BIAS_OF_SIX)


@pytest.mark.slow
def test_sixty_rendered_particles(tmp_path: Path) -> None:
    """The table of the accuracy page: python -m pytest tests/accuracy -m slow -s."""
    outcome = run_cases(map(draw_case, range(22)), tmp_path)
    print("\n" + table(outcome.rows))
    assert len(outcome.rows) >= 60
    check(outcome, bias=BIAS)


@pytest.mark.slow
@pytest.mark.parametrize("look", HARD_LOOKS)
def test_hard_looks(look: str, tmp_path: Path) -> None:
    """Pores full of resin, charging bands, ground as rough and nearly as grey as the wall; and pores brighter than the wall.

    The last are shaded and stand out by two spreads of the noise only: ``auto`` finds the outline but not the pores, the table
    shows by how much, and docs/accuracy.md says so. Strokes of the user are the remedy.
    """
    cases = [draw_case(100 + k, kinds=SKINNED, looks=(look,), particles=2) for k in range(2)]
    outcome = run_cases(cases, tmp_path)
    print(f"\n{look}\n" + table(outcome.rows))
    assert outcome.missed == outcome.invented == ()
    assert max(abs(r.diameter) for r in outcome.rows) <= HARD_DIAMETER
    if look not in PORES_NOT_FOUND:
        assert max(abs(r.porosity) for r in outcome.rows) <= HARD_POROSITY


@pytest.mark.slow
def test_cut_faces_of_volumes(tmp_path: Path) -> None:
    """Pores seen into, down to the material that truly lies below."""
    cases = [draw_case(200 + k, kinds=VOLUMES, particles=2) for k in range(4)]
    outcome = run_cases(cases, tmp_path)
    print("\n" + table(outcome.rows))
    assert outcome.missed == outcome.invented == ()
    assert max(abs(r.porosity) for r in outcome.rows) <= VOLUME_POROSITY
    assert max(abs(r.diameter) for r in outcome.rows) <= DIAMETER
