"""Axes, points and proposals."""

from __future__ import annotations

import numpy as np
import pytest

from poroscan.atlas.plan import Known, deficits, propose
from poroscan.atlas.space import AXES, NAMES, Space, formulation_at, shares_of, sobol
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.errors import SettingsError


def test_share_and_value_are_inverse_on_every_axis() -> None:
    for axis in AXES:
        for share in (0.0, 0.3, 1.0):
            assert axis.share(axis.value(share)) == pytest.approx(share)
        middle = axis.value(0.5)
        expected = (axis.low * axis.high) ** 0.5 if axis.logarithmic else (axis.low + axis.high) / 2
        assert middle == pytest.approx(expected)


def test_a_longer_sequence_begins_with_the_shorter_one() -> None:
    assert np.array_equal(sobol(64, 3, seed=4)[:16], sobol(16, 3, seed=4))
    space = Space({})
    assert space.points(8, start=4, seed=1)[0] == space.points(12, start=0, seed=1)[4]


def test_points_fill_every_axis_evenly() -> None:
    shares = np.array([shares_of(p) for p in Space({}).points(64, start=0, seed=2)])
    counts = np.stack([np.histogram(shares[:, j], bins=4, range=(0, 1))[0] for j in range(len(AXES))])
    assert (counts == 16).all()  # a scrambled (0, m, s)-net: each quarter of each axis holds a quarter of the points


def test_pinned_values_stay_and_unknown_names_are_refused() -> None:
    assert {p["chi_pn"] for p in Space({"chi_pn": 2.5}).points(5, start=0, seed=0)} == {2.5}
    with pytest.raises(SettingsError, match=r"'chi_xy' is no axis.*chi_pn"):
        Space({"chi_xy": 1.0})


def test_a_point_becomes_its_formulation() -> None:
    point = Space({}).points(1, start=0, seed=3)[0]
    f = formulation_at(point, SimulationSettings(cells=64, radius=20))
    assert f.dope.polymer == point["polymer"]
    assert f.bath.solvent == point["bath_solvent"]
    assert (f.mixture.chi_pn, f.mixture.chi_ps, f.mixture.chi_sn) == tuple(
        point[n] for n in ("chi_pn", "chi_ps", "chi_sn")
    )
    assert (f.simulation.noise, f.simulation.arrest_fraction) == (point["noise"], point["arrest_fraction"])
    assert f.simulation.cells == 64


def test_deficits_count_what_is_missing() -> None:
    known = [Known({}, "spinodal")] * 3 + [Known({}, "dissolved")] * 5
    assert deficits(known, per_regime=4) == {
        "undemixed": 4, "delayed": 4, "lean_nucleation": 4, "spinodal": 1, "rich_nucleation": 4
    }  # fmt: skip


def test_proposals_go_where_the_missing_regime_lies() -> None:
    # the regime depends on the polymer fraction alone: beads below a third of its range, no demixing above
    known = []
    for point in Space({}).points(128, start=0, seed=0):
        low = shares_of(point)[NAMES.index("polymer")] < 0.33
        known.append(Known(point, "rich_nucleation" if low else "undemixed"))
    wanted = [k for k in known if k.outcome == "undemixed"] + [k for k in known if k.outcome == "rich_nucleation"][:5]
    points = propose(Space({}), wanted, n=40, per_regime=60, seed=1)
    asked = np.array([shares_of(p)[NAMES.index("polymer")] for p in points])
    # regimes that nobody has seen are asked for as well, and land anywhere
    assert (asked < 0.4).mean() > 0.4
    assert points == propose(Space({}), wanted, n=40, per_regime=60, seed=1)
    with pytest.raises(ValueError, match="none is made"):
        propose(Space({}), [], n=4, per_regime=3, seed=0)
