from __future__ import annotations

import pytest

from poroscan.quantities import FLAGS
from poroscan.report import words


def _batch(**values: object) -> dict[str, object]:
    counts = {"particles": 5, "particles_used": 4, "particles_cut_by_frame": 1, "images": 2, "images_measured": 2}
    return counts | values


def test_sentences_carry_number_unit_and_interval() -> None:
    row = _batch(
        porosity=0.4321,
        porosity_low=0.4187,
        porosity_high=0.4454,
        pore_d50_um=3.21,
        pore_d50_um_low=3.0,
        pore_d50_um_high=3.4,
    )
    assert words.batch_sentences(row) == [
        "Pores take up 43.2\u00a0% of the section (95\u00a0% interval 41.9 to 44.5\u00a0%).",
        "Half of the pore area lies in pores wider than 3.21\u00a0µm (95\u00a0% interval 3.00 to 3.40\u00a0µm).",
    ]


def test_lengths_stay_in_pixels_where_no_scale_is_known() -> None:
    row = _batch(skin_thickness_um=None, skin_thickness_px=12.0)
    assert words.batch_sentences(row) == ["The skin is 12.0 px thick."]


@pytest.mark.parametrize(
    ("value", "low", "high", "part"),
    [
        (0.2, 0.1, 0.3, "more porous than the inner"),
        (-0.2, -0.3, -0.1, "less porous than the inner"),
        (0.05, -0.1, 0.2, "No difference between outer and inner half shows"),
    ],
)
def test_a_difference_is_named_only_where_the_interval_excludes_none(
    value: float, low: float, high: float, part: str
) -> None:
    row = _batch(radial_asymmetry=value, radial_asymmetry_low=low, radial_asymmetry_high=high)
    (sentence,) = words.batch_sentences(row)
    assert part in sentence


def test_counts_and_what_is_missing_are_said() -> None:
    assert words.batch_counts(_batch()) == (
        "5 particles in 2 pictures; 1 particle is cut by the frame and left out of the means."
    )
    assert "no interval" in words.batch_sentences(_batch(particles_used=1))[-1]
    assert "one picture" in words.batch_sentences(_batch(images_measured=1))[-1]
    assert "No particle" in words.batch_sentences(_batch(particles_used=0))[0]


def test_without_an_interval_the_sentence_says_so() -> None:
    row = _batch(
        porosity=0.05, porosity_low=None, porosity_high=None, porosity_n=4, skin_thickness_um=2.0, skin_thickness_um_n=4
    )
    sentences = words.batch_sentences(row)
    assert sentences[0] == "Pores take up 5.00\u00a0% of the section (too few particles for an interval)."
    assert "The skin is 2.00\u00a0µm thick (too few particles for an interval)." in sentences
    alone = words.batch_sentences(row | {"porosity_n": 1, "particles_used": 1, "skin_thickness_um_n": 1})
    assert alone[0] == "Pores take up 5.00\u00a0% of the section."
    assert "With one particle there is no interval" in alone[-1]


def test_flags_in_words() -> None:
    assert words.flag_words("few_pores no_atlas") == [(FLAGS["few_pores"].words, FLAGS["few_pores"].remedy)]
    assert words.flag_words("") == []


def test_cautions_never_release() -> None:
    assert any("not a measurement" in c for c in words.CAUTIONS)
    assert any("validated methods, local rules and licensed people" in c for c in words.CAUTIONS)
