from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from poroscan.measure import spheres
from poroscan.measure.stereology import (
    SALTYKOV_RATIO,
    Unfolded,
    harmonic_mean_diameter,
    kernel,
    linear_classes,
    saltykov,
    saltykov_coefficients,
    sauter_diameter,
    section_offset,
    section_probability,
    shell_bias,
    true_shell,
    unfold,
    volume_mean_diameter,
)


def log_edges(classes, top=1.0):
    return top * SALTYKOV_RATIO ** -np.arange(classes, -1.0, -1.0)


def sections(sigma, number, rng):
    """Section circles of lognormal spheres with median 1: planes meet spheres in proportion to their diameter."""
    s = math.log(sigma)
    spheres_met = np.exp(s * s + s * rng.standard_normal(number))
    return spheres_met * np.sqrt(1 - rng.random(number) ** 2)


def test_coefficients_are_the_exact_ones_not_the_printed_list():
    # trap 0.1: exact values; the list printed in many places differs in its tail by up to 2e-4
    exact = [1.646121, 0.456123, 0.116190, 0.041495, 0.017271, 0.007795, 0.003684, 0.001790, 0.000884, 0.000441, 0.000222, 0.000112]  # fmt: skip
    printed = [1.6461, 0.4561, 0.1162, 0.0415, 0.0173, 0.0079, 0.0038, 0.0018, 0.0010, 0.0003, 0.0002, 0.0002]
    a = saltykov_coefficients(12)
    assert_allclose(np.abs(a), exact, atol=5e-7)
    assert_allclose(np.abs(a), printed, atol=2e-4)
    assert np.abs(np.abs(a) - printed).max() > 5e-5
    assert a[0] > 0
    assert (a[1:] < 0).all()


def test_class_probabilities_of_one_sphere_size():
    # oracles 1.7
    wanted = [0.607489, 0.168329, 0.089521, 0.052000, 0.031344, 0.019255, 0.011954, 0.007468, 0.004683, 0.002944, 0.001853, 0.001167]  # fmt: skip
    assert_allclose(section_probability(log_edges(12), 1.0)[::-1], wanted, atol=5e-7)


def test_linear_classes_have_the_published_inverse():
    # Scheil, Schwartz, Saltykov; oracles 1.7
    inverse = np.linalg.inv(kernel(np.arange(7.0)))
    assert_allclose(inverse[0], [1, -0.154701, -0.035748, -0.013043, -0.006068, -0.003285], atol=5e-7)
    assert_allclose(inverse[1, 1:5], [0.577350, -0.152946, -0.041918, -0.017218], atol=5e-7)
    assert_allclose(inverse[2, 2:5], [0.447214, -0.138326, -0.040736], atol=5e-7)


def test_round_trip():
    # oracles 1.7, N_V from the largest class down
    edges = log_edges(8)
    n_v = np.array([0, 1, 3, 2, 0, 0, 0, 0.0])[::-1]
    n_a = kernel(edges) @ n_v
    wanted = [0, 0.482546, 1.283607, 0.998665, 0.379486, 0.213061, 0.126749, 0.077361]
    assert_allclose(n_a[::-1], wanted, atol=5e-7)
    assert_allclose(unfold(n_a, edges).density, n_v, atol=1e-9)


@pytest.mark.parametrize("edges", [np.linspace(0, 3, 13), log_edges(20, 7.0), np.array([0.0, 1, 1.5, 4, 9])])
def test_round_trip_of_any_classes(edges, rng):
    n_v = rng.random(edges.size - 1)
    assert_allclose(unfold(kernel(edges) @ n_v, edges).density, n_v, atol=1e-9)


@pytest.mark.parametrize("sigma", [1.2, 1.5])
def test_lognormal_spheres_from_20000_circles(sigma, rng):
    # oracles 1.5 and 1.7: D[3,2] = exp(2.5 s²), D[4,3] = exp(3.5 s²), volume median exp(3 s²), E[D] = exp(s²/2)
    s2 = math.log(sigma) ** 2
    d = sections(sigma, 20_000, rng)
    log, linear = saltykov(d, area=1.0), linear_classes(d, area=1.0)
    rows = [
        ("D[3,2] from moments", sauter_diameter(d), math.exp(2.5 * s2), 0.03),
        ("D[4,3] from moments", volume_mean_diameter(d), math.exp(3.5 * s2), 0.03),
        ("D[3,2], Saltykov classes", log.mean(3, 2), math.exp(2.5 * s2), 0.03),
        ("D[4,3], Saltykov classes", log.mean(4, 3), math.exp(3.5 * s2), 0.03),
        ("D[3,2], linear classes", linear.mean(3, 2), math.exp(2.5 * s2), 0.03),
        ("D[4,3], linear classes", linear.mean(4, 3), math.exp(3.5 * s2), 0.04),
        ("volume median, Saltykov classes", log.quantile(0.5), math.exp(3 * s2), 0.04),
        ("E[D], harmonic mean", harmonic_mean_diameter(d), math.exp(0.5 * s2), 0.05),
    ]
    print(f"\nlognormal spheres, σ_g {sigma}, 20 000 circles")
    for words, got, truth, _ in rows:
        print(f"{words:34s} {got:9.4f} {truth:9.4f} {100 * (got / truth - 1):+6.2f} %")
    for words, got, truth, tolerance in rows:
        assert got == pytest.approx(truth, rel=tolerance), words


def test_moments_of_one_sphere_size(rng):
    # oracles 1.7 for D = 1: E d = π/4, and the estimators give D back
    d = np.sqrt(1 - rng.random(200_000) ** 2)
    assert d.mean() == pytest.approx(math.pi / 4, abs=0.002)
    assert sauter_diameter(d) == pytest.approx(1, abs=0.003)
    assert volume_mean_diameter(d) == pytest.approx(1, abs=0.003)
    assert harmonic_mean_diameter(d) == pytest.approx(1, abs=0.02)


def test_weights_count_sections_more_than_once(rng):
    d = sections(1.3, 500, rng)
    w = rng.integers(0, 4, 500)
    assert sauter_diameter(d, weights=w) == pytest.approx(sauter_diameter(np.repeat(d, w)))
    assert_allclose(saltykov(d, area=2, weights=w).moment(1), w.sum() / 2, rtol=1e-9)


def test_scale_and_count():
    d = np.array([1.0, 2, 3, 4, 5])
    one, two = saltykov(d, area=100.0), saltykov(2 * d, area=400.0)
    assert two.mean(4, 3) == pytest.approx(2 * one.mean(4, 3))
    assert one.moment(1) == pytest.approx(5 / 100)  # N_A = N_V E[D]


def test_hatch_choate_moments_of_classes():
    # oracles 1.5: d = 1…5, counts 5, 10, 20, 10, 5
    u = Unfolded(np.arange(6.0), np.arange(1.0, 6), np.array([5.0, 10, 20, 10, 5]))
    assert u.mean(1, 0) == pytest.approx(3)
    assert u.mean(3, 0) == pytest.approx(3.356067, abs=1e-6)
    assert u.mean(3, 2) == pytest.approx(3.705882, abs=1e-6)
    assert u.mean(4, 3) == pytest.approx(3.952381, abs=1e-6)


def test_shell_is_seen_too_thick():
    # oracles 1.9: mean apparent over true thickness, all planes that hit the core, and those with radius > 0.9 R
    for share, every, large in (
        (0.02, 1.4512, 1.0355),
        (0.05, 1.3919, 1.0368),
        (0.1, 1.3318, 1.0390),
        (0.2, 1.2562, 1.0446),
    ):
        assert shell_bias(share) == pytest.approx(every, abs=6e-5)
        assert shell_bias(share, least_section=0.9) == pytest.approx(large, abs=6e-5)


def test_true_shell_undoes_an_off_centre_cut():
    radius, shell, h = 10.0, 1.5, 0.6
    section = radius * math.sqrt(1 - h**2)
    apparent = section - math.sqrt((radius - shell) ** 2 - (radius * h) ** 2)
    assert apparent > shell
    assert section_offset(2 * section, 2 * radius) == pytest.approx(h)
    assert true_shell(apparent, section, h) == pytest.approx(shell, rel=1e-12)
    assert math.isnan(section_offset(11, 10))


def test_intervals_of_sphere_sizes_cover(rng):
    inside = np.zeros(4)
    s2 = math.log(1.3) ** 2
    truth = [math.exp(3 * s2), math.exp(2.5 * s2), math.exp(3.5 * s2)]
    for _ in range(100):
        d = 20 * sections(1.3, 1500, rng)
        got = spheres.estimates(d, rng.integers(1, 50, d.size), block_area=np.full(49, 1e4), rng=rng, replicates=100)
        for k, (base, t) in enumerate(zip(spheres.BASES, truth, strict=False)):
            inside[k] += got[base].low <= 20 * t <= got[base].high
    assert np.all(inside[1:3] >= 88)
    assert inside[0] >= 86


def test_frame_weight():
    # oracles 1.4 for a square feature: frame 1000 × 800, both Feret diameters 50
    got = spheres.frame_weight(np.array([50.0, 5000.0]), (1000, 800))
    assert got[0] == pytest.approx(1 / (0.95 * 0.9375))
    assert math.isfinite(got[1])


def test_no_pores_is_undefined(rng):
    got = spheres.estimates([], [], block_area=np.ones(9), rng=rng)
    assert all(math.isnan(e.value) for e in got.values())
    assert set(got) == set(spheres.BASES)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: sauter_diameter([]), "not empty"),
        (lambda: sauter_diameter([1.0, 0.0]), "diameters must be positive and finite"),
        (lambda: sauter_diameter([1.0, math.nan]), "diameters must be positive and finite"),
        (lambda: sauter_diameter([1.0], weights=[-1.0]), "weights must be finite and not negative"),
        (lambda: saltykov([1.0], area=0), "area must be positive"),
        (lambda: linear_classes([1.0], area=-1), "area must be positive"),
        (lambda: kernel([2.0, 1.0]), "growing class limits"),
        (lambda: unfold([1.0, 2.0], [0.0, 1.0]), "one value per class"),
        (lambda: unfold([math.nan], [0.0, 1.0]), "density must be finite"),
        (lambda: section_offset(0, 1), "must be positive"),
        (lambda: true_shell(1, 5, 1.0), "offset must be at least 0 and below 1"),
        (lambda: true_shell(6, 5, 0.1), "apparent must lie between"),
        (lambda: shell_bias(1.0), "share must lie between 0 and 1"),
        (lambda: shell_bias(0.1, least_section=1.0), "least_section must be below 1"),
    ],
)
def test_wrong_arguments_are_refused(call, message):
    with pytest.raises(ValueError, match=message):
        call()
