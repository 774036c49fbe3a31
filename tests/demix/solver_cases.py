"""Small cases for the tests of the particle solver."""

from __future__ import annotations

import itertools

import numpy as np

from poroscan.demix.formulation import Component, Composition, Formulation
from poroscan.demix.mixture import Mixture
from poroscan.demix.simulation_settings import SimulationSettings

TERNARY = Mixture(N_p=20, chi_pn=1.5, chi_ps=0.5, chi_sn=1.0)  # oracles: T3
BINARY = Mixture(N_p=1, chi_pn=0.0, chi_ps=3.0, chi_sn=0.0)


def quiet_settings(**changes) -> SimulationSettings:
    """No noise, no arrest, double precision."""
    values = {"noise": 0.0, "arrest_fraction": 5.0, "precision": "float64", "cells": 64, "radius": 20.0, **changes}
    return SimulationSettings(**values)


def formulation(*, dope=0.3, dope_n=0.0, bath_s=0.0, N=20.0, pn=2.5, ps=0.5, sn=0.5, **settings) -> Formulation:
    parts = [Component(name, chain_length=size) for name, size in (("p", N), ("s", 1.0), ("n", 1.0))]
    return Formulation(
        name="test",
        polymer=parts[0],
        solvent=parts[1],
        nonsolvent=parts[2],
        mixture=Mixture(N_p=N, chi_pn=pn, chi_ps=ps, chi_sn=sn),
        dope=Composition(polymer=dope, solvent=1 - dope - dope_n, nonsolvent=dope_n),
        bath=Composition(solvent=bath_s, nonsolvent=1 - bath_s),
        simulation=SimulationSettings(**{"cells": 64, "radius": 22.0, **settings}),
    )


def links(ndim):
    """Link vectors (one of each opposite pair) and weights, written out anew."""
    for step in itertools.product((-1, 0, 1), repeat=ndim):
        length = sum(abs(s) for s in step)
        if length not in (1, 2) or next(s for s in step if s) < 0:
            continue
        yield step, {(2, 1): 2 / 3, (2, 2): 1 / 6, (3, 1): 1 / 3, (3, 2): 1 / 6}[(ndim, length)]


def shifted(field, step):
    """Value of the neighbour at ``step``."""
    return np.roll(field, [-s for s in step], axis=tuple(range(field.ndim)))


def slow_laplacian(field):
    return sum(w * (shifted(field, s) + shifted(field, [-x for x in s]) - 2 * field) for s, w in links(field.ndim))


def slow_rates(mixture, settings, p, n):
    """dφ/dt by whole-array operations and the formulas of docs/simulation.md."""
    s = 1 - p - n
    e_s = mixture.chi_ps * p + mixture.chi_sn * n
    e_p = mixture.chi_pn * n + mixture.chi_ps * s - settings.kappa_polymer * slow_laplacian(p) - e_s
    e_n = mixture.chi_pn * p + mixture.chi_sn * s - settings.kappa_nonsolvent * slow_laplacian(n) - e_s
    y = np.clip((p - settings.arrest_fraction) / settings.arrest_width, -14, 14)
    stiff = settings.arrest_floor + (1 - settings.arrest_floor) / (1 + np.exp(y))
    e = {"p": e_p, "n": e_n, "s": np.zeros_like(p)}
    phi = {"p": p, "n": n, "s": s}
    size = {"p": mixture.N_p, "n": mixture.N_n, "s": mixture.N_s}
    change = {"p": np.zeros_like(p), "n": np.zeros_like(n), "s": np.zeros_like(s)}
    for step, weight in links(p.ndim):
        for a, b in (("p", "n"), ("p", "s"), ("n", "s")):
            m = settings.polymer_mobility * stiff if "p" in (a, b) else np.ones_like(p)
            m = np.sqrt(m * shifted(m, step))
            a0, a1, b0, b1 = phi[a], shifted(phi[a], step), phi[b], shifted(phi[b], step)
            mean_a, mean_b = link_mean(a0, a1), link_mean(b0, b1)
            ideal = mean_b * (a1 - a0) / size[a] - mean_a * (b1 - b0) / size[b]
            drive = (shifted(e[a], step) - e[a]) - (shifted(e[b], step) - e[b])
            flux = weight * m * (ideal + mean_a * mean_b * drive)
            for name, sign in ((a, 1), (b, -1)):
                change[name] += sign * (flux - shifted(flux, [-x for x in step]))
    return change["p"], change["n"]


def link_mean(x, y):
    """Logarithmic mean of two positive arrays that differ."""
    return (y - x) / (np.log(y) - np.log(x))
