"""Acceptance by variables, one specification limit, normal population: the form of ISO 3951.

A lot is accepted where (U − mean)/s ≥ k (upper limit; mirrored for a lower one). The chance of acceptance is exact, from the
non-central t distribution. Tabulated n and k of a standard are the user's to enter: they are not reproduced here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import optimize, stats


@dataclass(frozen=True)
class Plan:
    """Sample size and acceptability constant."""

    n: int
    k: float


@dataclass(frozen=True)
class Acceptance:
    """Outcome of one lot: the quality statistic, the constant it is held against, and whether it is accepted."""

    statistic: float
    k: float
    accepted: bool


def accept(values: npt.ArrayLike, plan: Plan, *, low: float | None = None, high: float | None = None) -> Acceptance:
    """Hold one lot against a plan with one limit (s-method).

    Parameters
    ----------
    values
        Exactly ``plan.n`` finite measurements.
    plan
        Sample size and acceptability constant.
    low, high
        The limit: exactly one of them.

    Raises
    ------
    ValueError
        If the number of values is not that of the plan, they do not differ, or not exactly one limit is given.
    """
    x = np.asarray(values, dtype=np.float64).ravel()
    if x.size != plan.n or not np.isfinite(x).all():
        raise ValueError(f"the plan needs {plan.n} finite values, not {int(np.isfinite(x).sum())} of {x.size}")
    if (low is None) == (high is None):
        raise ValueError("give exactly one limit, low or high")
    s = float(x.std(ddof=1))
    if not s > 0:
        raise ValueError("all values are equal: the s-method needs a spread")
    distance = high - float(x.mean()) if high is not None else float(x.mean()) - float(low or 0.0)
    q = distance / s
    return Acceptance(q, plan.k, q >= plan.k)


def chance_of_acceptance(fraction: float, plan: Plan) -> float:
    """Exact chance that a lot with this fraction beyond the limit is accepted (s-method).

    Raises
    ------
    ValueError
        If the fraction does not lie between 0 and 1.
    """
    if not 0 < fraction < 1:
        raise ValueError(f"fraction must lie between 0 and 1, not {fraction!r}")
    root = math.sqrt(plan.n)
    return float(stats.nct.sf(plan.k * root, plan.n - 1, -stats.norm.ppf(fraction) * root))


def design_known_sigma(*, good: float, alpha: float, poor: float, beta: float) -> tuple[float, float]:
    """Size (not rounded) and constant of the plan with known σ that accepts ``good`` with 1−α and ``poor`` with β.

    Raises
    ------
    ValueError
        If not 0 < good < poor < 1, or a risk does not lie between 0 and 1.
    """
    _check(good, alpha, poor, beta)
    zg, zp = -stats.norm.ppf(good), -stats.norm.ppf(poor)
    za, zb = -stats.norm.ppf(alpha), -stats.norm.ppf(beta)
    return float(((za + zb) / (zg - zp)) ** 2), float((zp * za + zg * zb) / (za + zb))


def design(*, good: float, alpha: float, poor: float, beta: float) -> Plan:
    """Smallest s-method plan that accepts ``good`` with chance 1−α exactly and ``poor`` with at most β.

    Raises
    ------
    ValueError
        If not 0 < good < poor < 1, or a risk does not lie between 0 and 1.
    """
    n = max(2, math.floor(design_known_sigma(good=good, alpha=alpha, poor=poor, beta=beta)[0]))
    while True:
        plan = Plan(n, _constant(n, good, alpha))
        if chance_of_acceptance(poor, plan) <= beta:
            return plan
        n += 1


def _constant(n: int, good: float, alpha: float) -> float:
    root = math.sqrt(n)
    nc = -stats.norm.ppf(good) * root
    # the quantile function of the non-central t is a slow search of its own; a bracketed root of the tail is exact
    return float(optimize.brentq(lambda k: stats.nct.sf(k * root, n - 1, nc) - (1 - alpha), -10, 20, xtol=1e-12))


def _check(good: float, alpha: float, poor: float, beta: float) -> None:
    if not 0 < good < poor < 1:
        raise ValueError(f"need 0 < good < poor < 1, not good={good!r}, poor={poor!r}")
    if not (0 < alpha < 1 and 0 < beta < 1):
        raise ValueError(f"alpha and beta must lie between 0 and 1, not {alpha!r} and {beta!r}")
