"""The match on an atlas of drawn particles."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from made_particles import SIDE, disc, particle

from poroscan.atlas import what_to_change
from poroscan.atlas.accuracy import area_under_curve, held_out, table
from poroscan.atlas.features import FEATURES, Scaling, raw_rows, scope_of
from poroscan.atlas.matching import UNLIKE, Match, pool
from poroscan.atlas.space import NAMES
from poroscan.atlas.store import Atlas
from poroscan.atlas.views import clean_section, describe_clean
from poroscan.demix.regime import REGIMES
from poroscan.measure import measure_section
from poroscan.measure.descriptors import DESCRIPTORS, descriptors
from poroscan.section import UNKNOWN_PIXEL_SIZE, Section


@pytest.mark.parametrize("regime", REGIMES)
def test_unseen_particles_are_told(tiny_matcher, regime, rng) -> None:
    match = tiny_matcher.match(describe_clean(particle(regime, rng)).values, "whole")
    assert max(match.probabilities, key=match.probabilities.get) == regime
    assert regime in match.prediction_set
    assert sum(match.probabilities.values()) == pytest.approx(1)
    assert len(match.nearest) == 5
    assert regime in {n.regime for n in match.nearest}
    assert [n.distance for n in match.nearest] == sorted(n.distance for n in match.nearest)
    assert match.probability == max(match.probabilities.values())


def test_an_interior_view_is_told_by_its_texture_alone(tiny_matcher, rng) -> None:
    values = dict(describe_clean(particle("spinodal", rng)).values)
    match = tiny_matcher.match(values, "interior")
    assert match.scope == "texture"
    assert "spinodal" in match.prediction_set
    changed = {k: (99.0 if k.startswith("particle_") else v) for k, v in values.items()}
    assert tiny_matcher.match(changed, "interior") == match


def test_the_ratio_of_pore_to_particle_does_not_decide(tiny_matcher, rng) -> None:
    values = dict(describe_clean(particle("lean_nucleation", rng)).values)
    ratios = [
        n for n in values if n.startswith("particle_") and n.endswith(("_d50", "_d90", "_mean", "_length", "_spacing"))
    ]
    assert ratios
    assert not set(ratios) & set(FEATURES["whole"])
    assert tiny_matcher.match({**values, **dict.fromkeys(ratios, 1e-3)}, "whole") == tiny_matcher.match(values, "whole")


def test_stripes_are_unlike_the_atlas(tiny_matcher) -> None:
    columns = np.indices((SIDE, SIDE))[1]
    field = np.where(disc() & ((columns % 10 < 5) | False), 0.8, 0.05)
    match = tiny_matcher.match(describe_clean(field).values, "whole")
    assert match.regime == UNLIKE
    assert match.unlike
    assert match.distance > 1
    assert match.flags == ("unlike_atlas",)


def test_no_pore_and_one_pore_are_matched_without_harm(tiny_matcher) -> None:
    inside = disc()
    for pores in (np.zeros_like(inside), np.hypot(*(np.indices(inside.shape) - 55)) < 6):
        section = Section(pores & inside, inside, UNKNOWN_PIXEL_SIZE)
        measured = measure_section(section, rng=0)
        match = tiny_matcher.match(descriptors(measured.record, measured.curves), "whole")
        assert math.isfinite(match.probability)
    assert (
        tiny_matcher.match(describe_clean(particle("undemixed", np.random.default_rng(0))).values, "whole").regime
        == "undemixed"
    )


def test_a_section_with_nothing_to_compare_gets_a_flag(tiny_matcher) -> None:
    match = tiny_matcher.match({d.name: math.nan for d in DESCRIPTORS}, "whole")
    assert (match.regime, match.flags, match.prediction_set) == ("", ("no_regime",), ())
    assert math.isnan(match.probability)


def test_wrong_arguments_are_named(tiny_matcher, rng) -> None:
    values = dict(describe_clean(particle("spinodal", rng)).values)
    with pytest.raises(ValueError, match="view must be whole, edge or interior, not 'side'"):
        tiny_matcher.match(values, "side")
    values.pop("texture_porosity")
    with pytest.raises(ValueError, match="lack the descriptor 'texture_porosity'"):
        tiny_matcher.match(values, "whole")


def test_scaling_needs_no_length_and_marks_what_is_missing(rng) -> None:
    raw = raw_rows([describe_clean(particle("spinodal", rng)).values for _ in range(6)], "whole")
    scaling = Scaling.of(raw, "whole")
    n = len(FEATURES["whole"])
    whole = scaling(raw)
    assert whole.shape == (6, 2 * n + 1)
    assert np.isfinite(whole).all()
    raw[0, 3] = np.nan
    gone = scaling(raw)[0]
    assert gone[3] == 0
    assert gone[n + 3] > 0
    assert scope_of("edge") == "texture"


def _match(regime: str, p: float, *, unlike: bool = False) -> Match:
    others = (1 - p) / 4
    probabilities = {r: p if r == regime else others for r in REGIMES}
    return Match(UNLIKE if unlike else regime, p, probabilities, (regime,), 0.5, unlike, (), {}, "whole", 0.3)


def test_pooling_adds_evidence_but_never_more_than_two_particles_worth() -> None:
    one = pool([_match("spinodal", 0.6)])
    assert one.probability == pytest.approx(0.6)
    many = pool([_match("spinodal", 0.6)] * 50)
    odds = (0.6 / 0.1) ** (50 / (1 + 49 / 2))
    assert many.probability == pytest.approx(odds / (odds + 4))
    assert many.agreement == 1
    assert many.particles == 50


def test_pooling_shows_disagreement_and_the_unlike() -> None:
    split = pool(
        [_match("spinodal", 0.8), _match("spinodal", 0.7), _match("delayed", 0.7), _match("delayed", 0.9, unlike=True)]
    )
    assert split.regime == "spinodal"
    assert split.agreement == pytest.approx(2 / 3)
    assert (split.votes["spinodal"], split.votes["delayed"], split.unlike) == (2, 1, 1)
    assert pool([_match("delayed", 0.9, unlike=True)] * 2).regime == UNLIKE
    with pytest.raises(ValueError, match="at least one particle"):
        pool([])


def test_what_to_change_names_the_axis_that_decides(tiny_atlas) -> None:
    """In the drawn atlas the polymer fraction alone decides, from much (undemixed) to little (beads)."""
    found = what_to_change(tiny_atlas, "undemixed", "rich_nucleation")
    assert found[0].axis == "polymer"
    assert found[0].words == "less polymer in the dope"
    assert found[0].down > 5 * max(found[0].up, 1)
    assert found[0].step < 0
    back = what_to_change(tiny_atlas, "rich_nucleation", "undemixed")
    assert back[0].words == "more polymer in the dope"
    with pytest.raises(ValueError, match="wanted must be one of"):
        what_to_change(tiny_atlas, "undemixed", "foam")
    with pytest.raises(ValueError, match="found already"):
        what_to_change(tiny_atlas, "delayed", "delayed")


def test_what_to_change_keeps_silent_without_formulations(tiny_atlas) -> None:
    runs = replace(tiny_atlas.runs, parameters=np.full_like(tiny_atlas.runs.parameters, np.nan))
    assert what_to_change(Atlas(None, runs, tiny_atlas.views), "undemixed", "spinodal") == ()
    assert len(NAMES) == runs.parameters.shape[1]


def test_accuracy_counts_every_view_once(tiny_atlas, tiny_matcher) -> None:
    (clean,) = held_out(tiny_atlas, tiny_matcher)
    assert clean.confusion.sum() == clean.views == 50
    assert clean.balanced > 0.75
    assert "clean fields" in table([clean])


def test_area_under_the_curve_against_all_pairs(rng) -> None:
    own, foreign = rng.integers(0, 8, 30).astype(float), rng.integers(3, 11, 20).astype(float)
    pairs = [(f > o) + 0.5 * (f == o) for o in own for f in foreign]
    assert area_under_curve(own, foreign) == pytest.approx(np.mean(pairs))


def test_clean_section_has_a_margin(rng) -> None:
    section = clean_section(particle("delayed", rng))
    assert not section.touches_frame
