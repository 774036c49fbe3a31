"""Interaction parameters that depend on composition, with their derivatives, and the check of those derivatives.

A parameter is either a number or an object with the three methods of :class:`Interaction`. The functions take the three
volume fractions as if they were independent; the thermodynamics of :mod:`poroscan.demix.mixture` does not depend on how
they are continued off the composition triangle.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.floating[Any]]

#: Order of the six second derivatives of an interaction parameter.
SECOND_DERIVATIVES = ("nn", "ns", "np", "ss", "sp", "pp")

#: Below this sum of solvent and non-solvent their shares have no meaning and no effect (the product φnφs vanishes).
_SMALLEST_LIQUID = 1e-90

# Interior points of the triangle (phi_n, phi_s, phi_p) at which derivatives are compared with differences.
_CHECK_POINTS = np.array(
    [[1 / 3, 1 / 3, 1 / 3], [0.8, 0.1, 0.1], [0.1, 0.8, 0.1], [0.1, 0.1, 0.8], [0.45, 0.5, 0.05], [0.05, 0.35, 0.6]]
).T
_CHECK_STEP = 1e-5
_CHECK_TOLERANCE = 1e-5


@runtime_checkable
class Interaction(Protocol):
    """An interaction parameter that depends on composition."""

    def value(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> FloatArray:
        """Parameter at the given volume fractions."""

    def gradient(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> tuple[FloatArray, ...]:
        """First derivatives by phi_n, phi_s, phi_p."""

    def hessian(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> tuple[FloatArray, ...]:
        """Second derivatives in the order nn, ns, np, ss, sp, pp."""


Parameter = float | Interaction


@dataclass(frozen=True)
class ChiFunction:
    """An interaction parameter made of three functions of (phi_n, phi_s, phi_p).

    Parameters
    ----------
    value
        Returns the parameter.
    gradient
        Returns its three first derivatives, by phi_n, phi_s, phi_p.
    hessian
        Returns its six second derivatives: nn, ns, np, ss, sp, pp.

    Notes
    -----
    The derivatives are compared with differences of ``value`` when a mixture is made from it.
    """

    value: Callable[..., Any]
    gradient: Callable[..., Any]
    hessian: Callable[..., Any]


@dataclass(frozen=True)
class SharePolynomial:
    """``scale · (c0 + c1 u + c2 u² + …)`` with ``u = φs/(φs + φn)``, the solvent's share of the liquid.

    The form in which solvent–non-solvent parameters ``g12(u2)`` are tabulated for membrane systems.

    Parameters
    ----------
    coefficients
        c0, c1, c2, …
    scale
        Factor from the convention of the source to that of the mixture.
    """

    coefficients: tuple[float, ...]
    scale: float = 1.0

    def __post_init__(self) -> None:
        if not self.coefficients or not all(math.isfinite(c) for c in self.coefficients):
            raise ValueError(f"coefficients must be one or more finite numbers, got {self.coefficients!r}")

    def __str__(self) -> str:
        powers = ["", " u", *(f" u^{k}" for k in range(2, len(self.coefficients)))]
        return _scaled(_sum_in_words(self.coefficients, powers), self.scale)

    def value(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> FloatArray:
        """Parameter at the given volume fractions."""
        return self.scale * np.polynomial.Polynomial(self.coefficients)(_share(phi_n, phi_s))

    def gradient(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> tuple[FloatArray, ...]:
        """First derivatives by phi_n, phi_s, phi_p."""
        return _share_gradient(phi_n, phi_s, self._slope(phi_n, phi_s, 1))

    def hessian(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> tuple[FloatArray, ...]:
        """Second derivatives: nn, ns, np, ss, sp, pp."""
        return _share_hessian(phi_n, phi_s, self._slope(phi_n, phi_s, 1), self._slope(phi_n, phi_s, 2))

    def _slope(self, phi_n: FloatArray, phi_s: FloatArray, order: int) -> FloatArray:
        return self.scale * np.polynomial.Polynomial(self.coefficients).deriv(order)(_share(phi_n, phi_s))


@dataclass(frozen=True)
class ShareRational:
    """``scale · (a + b/(1 − c u))`` with ``u = φs/(φs + φn)``, the solvent's share of the liquid.

    Parameters
    ----------
    a, b, c
        Constants of the form; ``c`` must be below 1 so that no pole lies between the pure liquids.
    scale
        Factor from the convention of the source to that of the mixture.
    """

    a: float
    b: float
    c: float
    scale: float = 1.0

    def __post_init__(self) -> None:
        if not all(math.isfinite(x) for x in (self.a, self.b, self.c)) or self.c >= 1:
            raise ValueError(f"a, b, c must be finite and c below 1, got a={self.a}, b={self.b}, c={self.c}")

    def __str__(self) -> str:
        pole = _sum_in_words((1.0, -self.c), ("", " u"))
        return _scaled(_sum_in_words((self.a, self.b), ("", f"/({pole})")), self.scale)

    def value(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> FloatArray:
        """Parameter at the given volume fractions."""
        return self.scale * (self.a + self.b / (1 - self.c * _share(phi_n, phi_s)))

    def gradient(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> tuple[FloatArray, ...]:
        """First derivatives by phi_n, phi_s, phi_p."""
        return _share_gradient(phi_n, phi_s, self._slope(phi_n, phi_s, 1))

    def hessian(self, phi_n: FloatArray, phi_s: FloatArray, phi_p: FloatArray) -> tuple[FloatArray, ...]:
        """Second derivatives: nn, ns, np, ss, sp, pp."""
        return _share_hessian(phi_n, phi_s, self._slope(phi_n, phi_s, 1), self._slope(phi_n, phi_s, 2))

    def _slope(self, phi_n: FloatArray, phi_s: FloatArray, order: int) -> FloatArray:
        inverse = 1 / (1 - self.c * _share(phi_n, phi_s))
        return self.scale * self.b * math.factorial(order) * self.c**order * inverse ** (order + 1)


def _sum_in_words(numbers: Sequence[float], factors: Sequence[str]) -> str:
    first, *rest = (f"{abs(n):g}{factor}" for n, factor in zip(numbers, factors, strict=False))
    signs = ["−" if n < 0 else "+" for n in numbers]
    return ("−" if numbers[0] < 0 else "") + first + "".join(f" {s} {t}" for s, t in zip(signs[1:], rest, strict=True))


def _scaled(words: str, scale: float) -> str:
    return words if scale == 1 else f"{scale:g} ({words})"


def _liquid(phi_n: FloatArray, phi_s: FloatArray) -> FloatArray:
    return np.maximum(phi_n + phi_s, _SMALLEST_LIQUID)


def _share(phi_n: FloatArray, phi_s: FloatArray) -> FloatArray:
    return phi_s / _liquid(phi_n, phi_s)


def _share_gradient(phi_n: FloatArray, phi_s: FloatArray, slope: FloatArray) -> tuple[FloatArray, ...]:
    liquid = _liquid(phi_n, phi_s)
    return -slope * phi_s / liquid**2, slope * phi_n / liquid**2, np.zeros_like(liquid)


def _share_hessian(
    phi_n: FloatArray, phi_s: FloatArray, slope: FloatArray, curvature: FloatArray
) -> tuple[FloatArray, ...]:
    liquid = _liquid(phi_n, phi_s)
    by_n, by_s = -phi_s / liquid**2, phi_n / liquid**2
    nothing = np.zeros_like(liquid)
    return (
        curvature * by_n**2 + slope * 2 * phi_s / liquid**3,
        curvature * by_n * by_s + slope * (phi_s - phi_n) / liquid**3,
        nothing,
        curvature * by_s**2 - slope * 2 * phi_n / liquid**3,
        nothing,
        nothing,
    )


def check_parameter(parameter: object, name: str) -> None:
    """Refuse an interaction parameter that is no number, gives no number, or whose derivatives are wrong.

    Parameters
    ----------
    parameter
        Number or :class:`Interaction`.
    name
        Used in the message.

    Raises
    ------
    ValueError
        With what was found and at which composition.
    """
    if isinstance(parameter, bool) or not isinstance(parameter, int | float | Interaction | np.floating):
        raise ValueError(
            f"{name} must be a number or an object with value, gradient and hessian (poroscan.demix.ChiFunction makes "
            f"one from three functions), got {type(parameter).__name__}"
        )
    if isinstance(parameter, Interaction):
        _check_derivatives(parameter, name)
    elif not math.isfinite(parameter):
        raise ValueError(f"{name} must be finite, got {parameter}")


def _check_derivatives(parameter: Interaction, name: str) -> None:
    points = _CHECK_POINTS
    value = _evaluated(parameter.value(*points), (), f"{name}.value")
    gradient = _evaluated(parameter.gradient(*points), (3,), f"{name}.gradient")
    hessian = _evaluated(parameter.hessian(*points), (6,), f"{name}.hessian")
    scale = 1 + np.abs(value).max() + np.abs(gradient).max()
    rows = {(0, 0): 0, (0, 1): 1, (0, 2): 2, (1, 1): 3, (1, 2): 4, (2, 2): 5}
    for i in range(3):
        step = np.zeros((3, 1))
        step[i] = _CHECK_STEP
        up, down = points + step, points - step
        slope = (np.asarray(parameter.value(*up)) - np.asarray(parameter.value(*down))) / (2 * _CHECK_STEP)
        _compare(gradient[i], slope, scale, f"the derivative of {name} by phi_{'nsp'[i]}")
        bend = (
            _evaluated(parameter.gradient(*up), (3,), f"{name}.gradient")
            - _evaluated(parameter.gradient(*down), (3,), f"{name}.gradient")
        ) / (2 * _CHECK_STEP)
        for j in range(i, 3):
            label = f"the second derivative {'nsp'[i]}{'nsp'[j]} of {name}"
            _compare(hessian[rows[i, j]], bend[j], scale + np.abs(hessian).max(), label)


def _evaluated(result: object, lead: tuple[int, ...], name: str) -> FloatArray:
    """The result as one float array, or an error that says where it is not finite."""
    count = _CHECK_POINTS.shape[1]
    try:
        parts = [result] if lead == () else list(result)  # type: ignore[call-overload]
        stacked = np.stack([np.broadcast_to(np.asarray(part, dtype=float), (count,)) for part in parts])
    except (TypeError, ValueError) as error:
        raise ValueError(f"{name} must return {lead or 1} numbers or arrays of the shape of its arguments") from error
    if lead and len(parts) != lead[0]:
        raise ValueError(f"{name} must return {lead[0]} arrays, got {len(parts)}")
    bad = ~np.isfinite(stacked).all(axis=0)
    if bad.any():
        n, s, p = _CHECK_POINTS[:, np.argmax(bad)]
        raise ValueError(
            f"{name} is not a finite number at phi_n={n:.3g}, phi_s={s:.3g}, phi_p={p:.3g}; "
            "it must be finite everywhere inside the composition triangle"
        )
    return stacked if lead else stacked[0]


def _compare(given: FloatArray, differenced: FloatArray, scale: float, label: str) -> None:
    worst = int(np.argmax(np.abs(given - differenced)))
    if not abs(given[worst] - differenced[worst]) <= _CHECK_TOLERANCE * scale:
        n, s, p = _CHECK_POINTS[:, worst]
        raise ValueError(
            f"{label} is {given[worst]:.6g} at phi_n={n:.3g}, phi_s={s:.3g}, phi_p={p:.3g}, but differences of the "
            f"function give {differenced[worst]:.6g}; correct the derivative"
        )
