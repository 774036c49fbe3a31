from __future__ import annotations

from poroscan.demix.regime import REGIMES
from poroscan.report.regime import REGIME_WORDS, advice_answer, regime_answer


def test_every_regime_has_words() -> None:
    assert tuple(REGIME_WORDS) == (*REGIMES, "unlike_atlas")


def test_without_an_atlas_nothing_is_claimed() -> None:
    assert regime_answer({"regime": None}) == "Not determined: no atlas of simulated particles was available."
    assert "without an atlas" in advice_answer({}, wanted="spinodal")


def test_a_regime_comes_with_what_is_not_ruled_out() -> None:
    row = {"regime": "spinodal", "regime_probability": 0.873, "regime_set": "spinodal lean_nucleation"}
    assert regime_answer(row) == (
        "Instantaneous demixing, both phases continuous (probability 87\u00a0%); "
        "also in the 90\u00a0% set: instantaneous demixing, polymer-lean phase dispersed."
    )
    assert "probability above 99\u00a0%" in regime_answer(row | {"regime_probability": 0.9999})
    assert "no other regime" in regime_answer(row | {"regime_set": "spinodal"})
    assert "unlike any" in regime_answer({"regime": "unlike_atlas"})


def test_advice_follows_from_found_and_wanted() -> None:
    row = {"regime": "delayed"}
    assert "Nothing can be said" in advice_answer({"regime": "unlike_atlas"}, wanted="spinodal")
    assert "names no regime" in advice_answer(row, wanted=None)
    assert advice_answer(row, wanted="delayed").startswith("Nothing: ")
    assert "No move from delayed demixing to" in advice_answer(row, wanted="spinodal")
    assert advice_answer(row | {"advice": "Use more solvent."}, wanted="spinodal") == "Use more solvent."
