from __future__ import annotations

import math

import numpy as np
import pytest

from poroscan.demix.binary import critical_point, edge_gaps, spinodal_fractions
from poroscan.demix.mixture import Mixture

# N, χ, spinodal, binodal lean and rich: solved at 40 digits
BINODALS = """
1    2.2  .34924433 .65075567 0.24852971 0.75147029
1    2.5  .27639320 .72360680 0.14479411 0.85520589
1    3    .21132487 .78867513 0.070720182 0.92927982
1    4    .14644661 .85355339 0.021247988 0.97875201
10   1.0  .11492189 .43507811 0.042797101 0.56004098
10   1.5  .051392119 .64860788 0.00070960259 0.83332474
20   0.9  .068866742 .40335548 0.013079492 0.53798176
20   1.5  .025329118 .65800421 1.5796243e-6 0.84812351
50   0.8  .035512639 .35198736 0.0018427988 0.48460858
100  0.65 .038461538 .20 0.0097680307 0.27196836
100  0.7  .026852364 .26600478 0.0015014442 0.37136268
100  1.0  .010103115 .49489689 1.0178119e-10 0.67492521
100  1.4  .0055729063 .64085567 4.840751e-24 0.83534880
1000 0.55 .011288956 .080529225 0.0016719119 0.11328809
1000 0.6  .0051323864 .16236761 1.8902934e-7 0.23577895
"""
ROWS = [tuple(map(float, row.split())) for row in BINODALS.strip().splitlines()]

# N -> critical χ and polymer fraction (closed form, Flory 1953)
CRITICAL = {
    1: (2, 0.5),
    5: (1.0472136, 0.3090170),
    10: (0.86622777, 0.24025307),
    20: (0.74860680, 0.18274400),
    50: (0.65142136, 0.12389934),
    100: (0.605, 0.09090909),
    1000: (0.53212278, 0.03065343),
    10000: (0.51005, 0.00990099),
}


@pytest.mark.parametrize("size", CRITICAL)
def test_critical_point(size: int) -> None:
    assert critical_point(size, 1) == pytest.approx(CRITICAL[size], rel=1e-6)


@pytest.mark.parametrize("row", ROWS, ids=lambda row: f"N={row[0]:g}, chi={row[1]:g}")
@pytest.mark.parametrize("edge", ["pn", "ps"])
def test_spinodal_and_binodal(row: tuple[float, ...], edge: str) -> None:
    size, chi, low, high, lean, rich = row
    assert spinodal_fractions(size, 1, chi=chi) == pytest.approx((low, high), rel=1e-6)
    other = {"pn": "chi_ps", "ps": "chi_pn"}[edge]
    mixture = Mixture(N_p=size, **{f"chi_{edge}": chi, other: 0.0}, chi_sn=0.0)
    (gap,) = edge_gaps(mixture, edge)
    assert np.exp(gap[2]) == pytest.approx([rich, lean], rel=1e-6)


@pytest.mark.parametrize("chi", [2.002, 2.2, 3.0, 4.0, 8.0])
def test_equal_sizes_obey_the_closed_form(chi: float) -> None:
    # χ = ln((1−φ)/φ)/(1−2φ)
    (gap,) = edge_gaps(Mixture(N_p=1, chi_pn=0.0, chi_ps=0.0, chi_sn=chi), "sn")
    phi = float(np.exp(gap[0]).min())
    assert math.log((1 - phi) / phi) / (1 - 2 * phi) == pytest.approx(chi, rel=1e-9)


def test_sizes_times_k_and_parameter_over_k_change_nothing() -> None:
    # two chains of 10 with χ = 0.3 are as two monomers with χ = 3
    (gap,) = edge_gaps(Mixture(N_p=10, N_n=10, chi_pn=0.3, chi_ps=0.0, chi_sn=0.0), "pn")
    assert np.exp(gap[2]) == pytest.approx([0.92927982, 0.070720182], rel=1e-7)


@pytest.mark.parametrize("size", [1, 20, 100])
def test_no_gap_and_no_spinodal_below_the_critical_point(size: int) -> None:
    critical, _ = critical_point(size, 1)
    assert edge_gaps(Mixture(N_p=size, chi_pn=critical - 1e-3, chi_ps=0.0, chi_sn=0.0), "pn") == ()
    assert spinodal_fractions(size, 1, chi=critical - 1e-3) is None


def test_two_gaps_on_one_edge_where_the_parameter_depends_on_composition() -> None:
    # χ large at both ends and small in the middle: the mixture is stable in the middle only
    from poroscan.demix.interaction import SharePolynomial

    double = SharePolynomial((5.0, -20.0, 20.0))
    gaps = edge_gaps(Mixture(N_p=1, chi_pn=0.0, chi_ps=0.0, chi_sn=double), "sn")
    assert len(gaps) == 2
    ends = sorted(sorted(np.exp(gap[1])) for gap in gaps)
    assert ends[0][1] < 0.5 < ends[1][0]
    assert ends[0] == pytest.approx([1 - x for x in reversed(ends[1])], abs=1e-10)


def test_sizes_that_are_not_positive_are_refused() -> None:
    with pytest.raises(ValueError, match="sizes must be positive"):
        critical_point(0, 1)
