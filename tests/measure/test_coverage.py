"""Do the stated 95 % intervals hold the truth in 95 % of random pictures?"""

from __future__ import annotations

import math

import numpy as np
import pytest
from media import boolean_discs, disc, level_cut
from scipy import special

from poroscan.measure import pore_size, porosity, surface
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.section import PixelSize, Section

SIZE, PICTURES = 288, 400


def pictures(medium, rng):
    """Pictures of one medium, and its closed-form porosity and surface per volume (None where pixels have none)."""
    whole = np.ones((SIZE, SIZE), bool)
    if medium == "level cut":
        u, length = special.ndtri(0.7), 4.0
        truth = 0.3, 2 / math.pi / length * math.exp(-(u**2) / 2)  # oracles 2.5
        return truth, whole, lambda: level_cut((SIZE, SIZE), length=length, fraction=0.3, rng=rng)
    # Boolean discs in a round section; their corners lose boundary on a pixel grid (oracles 2.1), so no closed form for S_V
    section = disc(140)
    truth = 1 - math.exp(-0.3), None
    return truth, section, lambda: boolean_discs(section.shape, radius=5.0, eta=0.3, rng=rng) & section


def weighted_median(values, weights):
    order = np.argsort(values)
    share = (np.cumsum(weights[order]) - weights[order] / 2) / weights.sum()
    return float(np.interp(0.5, share, values[order]))


@pytest.mark.slow
@pytest.mark.parametrize("medium", ["level cut", "boolean discs"])
def test_intervals_of_400_pictures(medium, rng):
    (phi, s_v), particle, draw = pictures(medium, rng)
    settings = MeasureSettings()
    estimates = {"porosity": [], "surface_per_volume": [], "pore_d50": []}
    pores_d, pores_a, naive = [], [], 0
    for _ in range(PICTURES):
        pores = draw()
        section = Section(pores, particle, PixelSize(1.0), view="interior" if particle.all() else "whole")
        shared = Shared(section, settings)
        for module in (porosity, surface, pore_size):
            part = module.part(section, settings, shared=shared, rng=rng)
            for name in estimates:
                if name in part.estimates:
                    estimates[name].append(part.estimates[name])
        pores_d.append(shared.pore_table["diameter"])
        pores_a.append(shared.pore_table["area"])
        n = np.count_nonzero(particle)
        naive += abs(np.count_nonzero(pores) / n - phi) <= 1.96 * math.sqrt(phi * (1 - phi) / n)
    truth = {
        "porosity": phi,
        "surface_per_volume": s_v or float(np.mean([e.value for e in estimates["surface_per_volume"]])),
        "pore_d50": weighted_median(np.concatenate(pores_d), np.concatenate(pores_a)),  # all bodies of all pictures
    }
    print(
        f"\n{medium}: coverage of 95 % intervals over {PICTURES} pictures\nquantity                truth   coverage   half-width/truth"
    )
    covered = {}
    for name, values in estimates.items():
        covered[name] = np.mean([e.low <= truth[name] <= e.high for e in values])
        width = np.mean([e.high - e.low for e in values]) / 2 / truth[name]
        print(f"{name:20s} {truth[name]:8.4f} {100 * covered[name]:8.1f} % {100 * width:12.1f} %")
    print(f"pixels taken as independent: {100 * naive / PICTURES:.1f} %")
    assert naive / PICTURES < 0.5  # negative control: the same test fails for an interval that counts pixels
    for name, share in covered.items():
        assert 0.92 <= share <= 0.97, name
