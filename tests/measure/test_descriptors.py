from __future__ import annotations

import math

import numpy as np
import pytest

from poroscan.measure.descriptors import DESCRIPTORS, descriptors, texture_length
from poroscan.quantities import CATALOGUE, Curve, Estimate, Record


def record(scale=1.0, **changes):
    """A record in which every quantity has its own value, lengths times ``scale``."""
    estimates = {q.base: Estimate((0.3 + 0.01 * k) * scale**q.power) for k, q in enumerate(CATALOGUE)}
    estimates |= {name: Estimate(value) for name, value in changes.items()}
    return Record(estimates)


def curves(scale=1.0):
    x = np.linspace(0, 40, 400)
    unknown = np.full(400, math.nan)
    return (
        Curve("s2", x * scale, 0.2 + 0.1 * np.exp(-x), unknown, unknown),
        Curve("lineal_path", x * scale, 0.3 * np.exp(-x), unknown, unknown),
        Curve("radial_porosity_normalised", x / 40, 0.3 + 0.1 * x / 40, unknown, unknown, x_power=0),
    )


def test_names_are_unique_and_order_is_fixed():
    names = [d.name for d in DESCRIPTORS]
    assert len(set(names)) == len(names)
    assert list(descriptors(record(), curves())) == names
    assert all(d.name.startswith(("particle_", "texture_")) and d.words for d in DESCRIPTORS)
    assert not {d.name for d in DESCRIPTORS} & {q.base for q in CATALOGUE}


def test_every_descriptor_is_without_length():
    one, hundred = descriptors(record(), curves()), descriptors(record(100.0), curves(100.0))
    assert all(math.isfinite(v) for v in one.values())
    for name, value in one.items():
        assert hundred[name] == pytest.approx(value, rel=1e-9), name


def test_values_by_hand():
    r = record(pore_d50=6.0, equivalent_diameter=120.0, chord_pore_mean=5.0, chord_wall_mean=7.0, euler_density=0.002)
    d = descriptors(r, curves())
    assert texture_length(r) == 12
    assert d["particle_pore_d50"] == pytest.approx(0.05)
    assert d["texture_pore_d50"] == pytest.approx(0.5)
    assert d["texture_euler"] == pytest.approx(0.288)


def test_interior_view_keeps_the_pore_scale():
    r = record(equivalent_diameter=math.nan, skin_thickness=math.nan)
    d = descriptors(r, curves()[:2])
    assert math.isnan(d["particle_skin_thickness"])
    assert math.isnan(d["particle_profile_40"])
    assert all(math.isfinite(v) for v in descriptors(r, curves()[:2], group="pore").values())


def test_nothing_measured_gives_nan_and_no_warning():
    empty = descriptors(Record({}), ())
    assert set(empty) == {d.name for d in DESCRIPTORS}
    assert all(math.isnan(v) for v in empty.values())
    zero = descriptors(
        record(equivalent_diameter=0.0, porosity=0.0, chord_pore_mean=0.0, chord_wall_mean=0.0), curves()
    )
    assert not any(math.isinf(v) for v in zero.values())


def test_unknown_group_is_refused():
    with pytest.raises(ValueError, match="group must be 'particle', 'pore' or None"):
        descriptors(record(), (), group="texture")
