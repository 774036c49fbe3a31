from __future__ import annotations

import mpmath
import numpy as np
import pytest

from poroscan.demix.interaction import ChiFunction, SharePolynomial, ShareRational
from poroscan.demix.mixture import Mixture, site_potential_slopes, site_potentials

SIZES = {"N_p": 20.0, "N_s": 3.0, "N_n": 1.5}
CONSTANT = Mixture(**SIZES, chi_pn=1.5, chi_ps=0.5, chi_sn=1.0)
VARYING = Mixture(
    **SIZES,
    chi_pn=ShareRational(1.2, 0.3, 0.6),
    chi_ps=ChiFunction(
        lambda n, s, p: 0.4 + 0.2 * p**2,
        lambda n, s, p: (0 * n, 0 * n, 0.4 * p),
        lambda n, s, p: (0 * n, 0 * n, 0 * n, 0 * n, 0 * n, 0.4 + 0 * p),
    ),
    chi_sn=SharePolynomial((0.5, 0.04, 0.8, -1.2, 0.8)),
)
MIXTURES = [CONSTANT, VARYING]


def inside(rng: np.random.Generator, count: int) -> np.ndarray:
    return rng.dirichlet([1, 1, 1], count).T


def reference_energy(mixture: Mixture, n: float, p: float) -> mpmath.mpf:
    """The free energy written out once more, at 40 digits."""
    s = 1 - n - p
    u = s / (s + n)
    if mixture is CONSTANT:
        pn, ps, sn = mpmath.mpf(1.5), mpmath.mpf(0.5), mpmath.mpf(1)
    else:
        pn = mpmath.mpf(1.2) + mpmath.mpf(0.3) / (1 - mpmath.mpf(0.6) * u)
        ps = mpmath.mpf(0.4) + mpmath.mpf(0.2) * p**2
        sn = sum(mpmath.mpf(c) * u**k for k, c in enumerate((0.5, 0.04, 0.8, -1.2, 0.8)))
    entropy = n * mpmath.log(n) / 1.5 + s * mpmath.log(s) / 3 + p * mpmath.log(p) / 20
    return entropy + pn * p * n + ps * p * s + sn * s * n


@pytest.mark.parametrize("mixture", MIXTURES, ids=["constant", "varying"])
def test_derivatives_agree_with_forty_digit_differences(mixture: Mixture, rng: np.random.Generator) -> None:
    for n, _, p in inside(rng, 5).T:
        with mpmath.workdps(40):
            point = (mpmath.mpf(n), mpmath.mpf(p))
            f = lambda a, b: reference_energy(mixture, a, b)  # noqa: E731
            energy = float(f(*point))
            first = [float(mpmath.diff(f, point, order)) for order in ((1, 0), (0, 1))]
            second = [float(mpmath.diff(f, point, order)) for order in ((2, 0), (1, 1), (0, 2))]
        assert mixture.free_energy(n, p) == pytest.approx(energy, abs=1e-14)
        np.testing.assert_allclose(mixture.exchange_potentials(n, p), first, rtol=1e-11, atol=1e-12)
        np.testing.assert_allclose(mixture.hessian(n, p), second, rtol=1e-10, atol=1e-10)


def test_potentials_of_constant_parameters_have_their_closed_form(rng: np.random.Generator) -> None:
    # μ_i/N_i = (ln φ_i + 1)/N_i − Σ φ_j/N_j + Σ χ_ij φ_j − Σ χ_jk φ_j φ_k (Flory 1953; Tompa 1956)
    phi = inside(rng, 50)
    n, s, p = phi
    chi = np.array([[0, 1.0, 1.5], [1.0, 0, 0.5], [1.5, 0.5, 0]])
    sizes = np.array([1.5, 3.0, 20.0])[:, None]
    pairs = 1.0 * n * s + 1.5 * n * p + 0.5 * s * p
    expected = (np.log(phi) + 1) / sizes - (phi / sizes).sum(axis=0) + chi @ phi - pairs
    np.testing.assert_allclose(CONSTANT.potentials(n, p), expected, rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize("mixture", MIXTURES, ids=["constant", "varying"])
def test_fractions_times_potentials_sum_to_the_free_energy(mixture: Mixture, rng: np.random.Generator) -> None:
    phi = inside(rng, 50)
    potentials = mixture.potentials(phi[0], phi[2])
    np.testing.assert_allclose((phi * potentials).sum(axis=0), mixture.free_energy(phi[0], phi[2]), atol=1e-13)


@pytest.mark.parametrize("mixture", MIXTURES, ids=["constant", "varying"])
def test_gibbs_duhem(mixture: Mixture, rng: np.random.Generator) -> None:
    # Σ φ_i ∂(μ_i/N_i)/∂x = 0 along every direction that keeps the sum of the fractions
    phi = inside(rng, 20)
    slopes = site_potential_slopes(mixture, np.log(phi))
    per_fraction = np.einsum("i...,ij...->j...", phi, slopes) / phi
    np.testing.assert_allclose(per_fraction - per_fraction[:1], 0, atol=1e-10)


@pytest.mark.parametrize("mixture", MIXTURES, ids=["constant", "varying"])
def test_slopes_by_logarithm_agree_with_differences(mixture: Mixture, rng: np.random.Generator) -> None:
    logs = np.log(inside(rng, 10))
    slopes = site_potential_slopes(mixture, logs)
    for j in range(3):
        step = np.zeros((3, 1))
        step[j] = 1e-6
        differenced = (site_potentials(mixture, logs + step) - site_potentials(mixture, logs - step)) / 2e-6
        np.testing.assert_allclose(slopes[:, j], differenced, atol=1e-8)


def test_hessian_of_published_mixture() -> None:
    # N=20, χ = 1.5, 0.5, 1 at (0.4, 0.2): [[3, 2.5], [2.5, 1.75]], by hand
    mixture = Mixture(N_p=20, chi_pn=1.5, chi_ps=0.5, chi_sn=1.0)
    np.testing.assert_allclose(mixture.hessian(0.4, 0.2), [3, 2.5, 1.75], rtol=1e-12)


def test_determinant_of_the_hessian_has_its_closed_form(rng: np.random.Generator) -> None:
    # det H · N φn φs φp = φn + φs + N φp − 2[…] − N φn φs φp Δ for N_n = N_s = 1 (Tompa 1956)
    size, sn, ps, pn = 20, 1.0, 0.5, 1.5
    n, s, p = inside(rng, 100)
    nn, cross, pp = Mixture(N_p=size, chi_pn=pn, chi_ps=ps, chi_sn=sn).hessian(n, p)
    delta = sn**2 + ps**2 + pn**2 - 2 * (sn * ps + sn * pn + ps * pn)
    expected = n + s + size * p - 2 * (sn * n * s + size * ps * p * s + size * pn * n * p) - size * n * s * p * delta
    # the determinant cancels digits against its two products: compare on their scale
    scale = size * n * s * p * (np.abs(nn * pp) + cross**2)
    np.testing.assert_allclose((size * n * s * p * (nn * pp - cross**2)) / scale, expected / scale, atol=1e-12)


@pytest.mark.parametrize("mixture", MIXTURES, ids=["constant", "varying"])
def test_stability_has_the_sign_of_the_least_eigenvalue_of_the_hessian(
    mixture: Mixture, rng: np.random.Generator
) -> None:
    n, _, p = inside(rng, 500)
    nn, cross, pp = mixture.hessian(n, p)
    least = np.linalg.eigvalsh(np.moveaxis(np.array([[nn, cross], [cross, pp]]), -1, 0))[:, 0]
    assert (np.sign(mixture.stability(n, p)) == np.sign(least)).all()
    assert (least < 0).any()
    assert (least > 0).any()


def test_stability_is_finite_on_edges_and_corners() -> None:
    corners = CONSTANT.stability([1, 0, 0], [0, 0, 1])
    assert np.isfinite(corners).all()
    # on the edge without solvent: negative exactly where the binary mixture is unstable, 1/(N1 φ) + 1/(N2 (1−φ)) < 2χ
    p = np.linspace(0.01, 0.99, 99)
    binary = 1 / (20 * p) + 1 / (1.5 * (1 - p)) - 2 * 1.5
    assert (np.sign(CONSTANT.stability(1 - p, p)) == np.sign(np.minimum(binary, 1))).all()


def test_traces_far_below_the_smallest_float() -> None:
    # (ln φ_p)/N_p is the only term that a trace of polymer feels: the rest is that of the polymer-free liquid
    logs = np.array([np.log(0.6), np.log(0.4), -2000.0])
    less = np.array([np.log(0.6), np.log(0.4), -1000.0])
    difference = site_potentials(CONSTANT, logs) - site_potentials(CONSTANT, less)
    np.testing.assert_allclose(difference, [0, 0, -1000 / 20], atol=1e-12)


def test_constant_share_form_equals_the_number() -> None:
    as_form = Mixture(**SIZES, chi_pn=1.5, chi_ps=0.5, chi_sn=SharePolynomial((1.0,)))
    n, p = np.array([0.2, 0.5, 0.05]), np.array([0.3, 0.1, 0.9])
    np.testing.assert_allclose(as_form.potentials(n, p), CONSTANT.potentials(n, p), rtol=1e-14)
    np.testing.assert_allclose(as_form.hessian(n, p), CONSTANT.hessian(n, p), rtol=1e-13)


@pytest.mark.parametrize("size", [0.5, 0, -3, float("nan"), float("inf"), "many", True])
@pytest.mark.parametrize("name", ["N_p", "N_s", "N_n"])
def test_sizes_below_one_are_refused(name: str, size: object) -> None:
    with pytest.raises(ValueError, match=f"{name} must be a finite number of sites per molecule, at least 1"):
        Mixture(**{**SIZES, name: size}, chi_pn=1.5, chi_ps=0.5, chi_sn=1.0)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("chi", "words"), [(float("nan"), "chi_sn must be finite"), ("1", "must be a number or an object")]
)
def test_parameters_that_are_no_numbers_are_refused(chi: object, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        Mixture(**SIZES, chi_pn=1.5, chi_ps=0.5, chi_sn=chi)  # type: ignore[arg-type]


def _function(value, gradient=None, hessian=None) -> ChiFunction:
    nothing = lambda count: lambda n, s, p: (0 * n,) * count  # noqa: E731
    return ChiFunction(value, gradient or nothing(3), hessian or nothing(6))


@pytest.mark.parametrize(
    ("chi", "words"),
    [
        (_function(lambda n, s, p: np.sqrt(0.5 - p + 0 * n)), r"chi_sn.value is not a finite number at phi_n="),
        (_function(lambda n, s, p: n), r"the derivative of chi_sn by phi_n is 0 at .* but differences .* give 1"),
        (
            _function(lambda n, s, p: n * s, lambda n, s, p: (s, n, 0 * n)),
            r"the second derivative ns of chi_sn is 0 at .* correct the derivative",
        ),
        (_function(lambda n, s, p: 0 * n, lambda n, s, p: (0 * n,)), r"chi_sn.gradient must return 3 arrays, got 1"),
        (_function(lambda n, s, p: "?"), r"chi_sn.value must return"),
    ],
    ids=["not a number", "wrong slope", "wrong curvature", "too few", "text"],
)
@pytest.mark.filterwarnings("ignore:invalid value")  # the root of a negative number, on purpose
def test_wrong_functions_of_composition_are_refused(chi: ChiFunction, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        Mixture(**SIZES, chi_pn=1.5, chi_ps=0.5, chi_sn=chi)


@pytest.mark.parametrize(("n", "p"), [(-0.1, 0.5), (0.7, 0.5), (float("nan"), 0.1), ([0.1, 0.2], [0.95, 0.1])])
def test_fractions_off_the_triangle_are_refused(n: object, p: object) -> None:
    with pytest.raises(ValueError, match="phi_n and phi_p must be"):
        CONSTANT.free_energy(n, p)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "make", [lambda: SharePolynomial(()), lambda: ShareRational(1, 1, 1), lambda: ShareRational(1, 1, 2)]
)
def test_share_forms_with_a_pole_or_nothing_are_refused(make) -> None:
    with pytest.raises(ValueError, match="must be"):
        make()
