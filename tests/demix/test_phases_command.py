from __future__ import annotations

import csv
import json
import xml.etree.ElementTree as ET
from pathlib import Path

import numpy as np
import pytest

from poroscan.cli.app import main
from poroscan.demix.formulation import load_formulation
from poroscan.demix.phase_diagram import find_phase_diagram
from poroscan.demix.phase_summary import chosen_tie_lines, in_words, summarise
from poroscan.demix.published import liquid_molar_volumes, published_systems
from poroscan.demix.triangle import draw_triangle, save_triangle, to_plane

TEXT = """
name = "trial 7"
[polymer]
name = "polymer"
chain_length = {size}
[solvent]
chain_length = 1
[nonsolvent]
name = "water"
chain_length = 1
[interactions]
convention = "per_site"
chi_pn = {pn}
chi_ps = {ps}
chi_sn = {sn}
[dope]
polymer = 0.15
solvent = 0.85
[bath]
nonsolvent = 0.9
solvent = 0.1
"""
PLAIN = TEXT.format(size=20, pn=1.5, ps=0.5, sn=1.0)
THREE = TEXT.format(size=100, pn=2.7, ps=0.24, sn=2.2)
BAND = TEXT.format(size=20, pn=1.5, ps=0.5, sn=2.4)
MIXED = TEXT.format(size=20, pn=0.3, ps=0.3, sn=0.3)


@pytest.fixture
def recipe(tmp_path: Path) -> Path:
    path = tmp_path / "trial.toml"
    path.write_text(PLAIN, encoding="utf-8")
    return path


def test_table(recipe: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["phases", str(recipe)]) == 0
    shown = capsys.readouterr()
    assert "Plait point: polymer 0.13547, solvent 0.52476, non-solvent 0.33977" in shown.out
    assert "two or three phases 0.5402, unstable (inside the spinodal) 0.3993" in shown.out
    assert "enters the binodal at" in shown.out
    assert shown.err == ""


def test_json_holds_numbers_that_agree_with_each_other(recipe: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["phases", str(recipe), "--json", "--tie-lines", "5"]) == 0
    content = json.loads(capsys.readouterr().out)
    (region,) = content["two_phase_regions"]
    assert (region["from"], region["to"]) == ("edge pn", "plait")
    assert len(region["tie_lines"]) == 5
    for line in region["tie_lines"]:
        assert sum(line["rich"].values()) == pytest.approx(1, abs=1e-9)
        assert line["largest_potential_gap"] is None or line["largest_potential_gap"] < 1e-10
        assert 10 ** line["log10_lean_polymer"] == pytest.approx(line["lean"]["polymer"], rel=1e-9)
    # first unstable composition along the exchange line of φp = 0.15: tabulated at φn = 0.3312
    spinodal = next(c for c in content["exchange_line"] if c["boundary"] == "spinodal")
    assert spinodal["nonsolvent"] == pytest.approx(0.3312, abs=1e-4)
    assert content["dope"]["state"] == "one phase"


def test_files(recipe: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = tmp_path / "deep" / "out"
    assert main(["phases", str(recipe), "--out", str(out), "--quiet"]) == 0
    shown = capsys.readouterr()
    assert (shown.out, shown.err) == ("", "")
    assert sorted(p.name for p in out.iterdir()) == [
        "phase_diagram.png",
        "phase_diagram.svg",
        "phases.json",
        "tie_lines.csv",
    ]
    with (out / "tie_lines.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) > 100
    for row in rows:
        rich = [float(row[f"rich_{name}"]) for name in ("polymer", "solvent", "nonsolvent")]
        assert sum(rich) == pytest.approx(1, abs=1e-8)
    assert json.loads((out / "phases.json").read_text(encoding="utf-8"))["formulation"]["name"] == "trial 7"
    assert (out / "phase_diagram.png").read_bytes().startswith(b"\x89PNG")


def test_the_picture_shows_every_part_and_names_it(recipe: Path, tmp_path: Path) -> None:
    formulation = load_formulation(recipe)
    diagram = find_phase_diagram(formulation.mixture)
    first = save_triangle(draw_triangle(diagram, formulation), tmp_path)
    words = " ".join(ET.parse(first[1]).getroot().itertext())
    for label in ("binodal", "spinodal", "tie lines", "plait point", "mixing line", "dope (drop)", "bath", "trial 7"):
        assert label in words
    assert "water (non-solvent)" in words
    before = [path.read_bytes() for path in first]
    assert [path.read_bytes() for path in save_triangle(draw_triangle(diagram, formulation), tmp_path)] == before


def test_names_with_signs_of_markup_are_drawn_as_they_are(recipe: Path, tmp_path: Path) -> None:
    name = r"a$b_{c} <&> \\frac"
    recipe.write_text(PLAIN.replace('"water"', f"'{name}'").replace('"trial 7"', f"'{name}'"), encoding="utf-8")
    formulation = load_formulation(recipe)
    diagram = find_phase_diagram(formulation.mixture)
    _, svg = save_triangle(draw_triangle(diagram, formulation), tmp_path)
    assert f"{name} (non-solvent)" in " ".join(ET.parse(svg).getroot().itertext())


def test_corners_of_the_picture() -> None:
    # n right, s left, p on top of an equilateral triangle of side 1
    corners = to_plane(np.eye(3))
    np.testing.assert_allclose(corners, [[1, 0], [0, 0], [0.5, np.sqrt(0.75)]], atol=1e-15)
    np.testing.assert_allclose(to_plane(np.array([1, 1, 1]) / 3), [0.5, np.sqrt(0.75) / 3], atol=1e-15)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (THREE, "1 three-phase triangle(s)"),
        (BAND, "No plait point: the two-phase region runs from edge to edge"),
        (MIXED, "No gap: the three components mix in every proportion"),
    ],
    ids=["three phases", "band", "mixed"],
)
def test_awkward_diagrams_are_said_and_drawn(text: str, words: str, tmp_path: Path) -> None:
    path = tmp_path / "trial.toml"
    path.write_text(text, encoding="utf-8")
    formulation = load_formulation(path)
    diagram = find_phase_diagram(formulation.mixture)
    said = in_words(summarise(diagram, formulation))
    assert words in said
    assert "shrinks" not in said
    save_triangle(draw_triangle(diagram, formulation), tmp_path)


def test_chosen_tie_lines_are_spread_and_keep_both_ends(recipe: Path) -> None:
    (region,) = find_phase_diagram(load_formulation(recipe).mixture).regions
    chosen = chosen_tie_lines(region, 6)
    assert (chosen[0], chosen[-1]) == (0, len(region.logs) - 1)
    assert len(chosen) == 6


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (["phases"], 2, "a formulation file is missing"),
        (["phases", "nowhere.toml"], 3, "nowhere.toml: cannot be read"),
        (["phases", "{recipe}", "--published-parameters"], 2, "not both"),
        (["phases", "{recipe}", "--out", "{recipe}/x", "--quiet"], 2, "cannot be written"),
        (["phases", "{recipe}", "--tie-lines", "1"], 2, "tie-lines"),
    ],
)
def test_wrong_use(
    arguments: list[str], code: int, words: str, recipe: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main([argument.format(recipe=recipe) for argument in arguments]) == code
    assert words in capsys.readouterr().err


def test_wrong_content_is_one_line_with_the_remedy(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "trial.toml"
    path.write_text(PLAIN.replace("solvent = 0.85", "solvent = 0.9"), encoding="utf-8")
    assert main(["phases", str(path)]) == 2
    error = capsys.readouterr().err
    assert "add up to 1.05, not 1" in error
    assert error.count("\n") == 1


def test_published_parameters_carry_source_status_and_caution(capsys: pytest.CaptureFixture[str]) -> None:
    systems = published_systems()
    assert len({system.key for system in systems}) == len(systems) >= 8
    for system in systems:
        assert system.source
        assert system.status
        assert system.caution
        # a system without a checked or quoted number gives none
        assert ("no number" in system.status) == (not (system.chi_13 or system.chi_23 or system.g_12))
    # molar mass over density at 25 °C (g/mol, g/cm³; handbook values)
    for name, mass, density in (
        ("water", 18.015, 0.9970),
        ("NMP", 99.13, 1.028),
        ("DMF", 73.09, 0.944),
        ("acetone", 58.08, 0.785),
    ):
        assert liquid_molar_volumes()[name] == pytest.approx(mass / density, rel=5e-3)
    assert main(["phases", "--published-parameters"]) == 0
    listed = capsys.readouterr().out
    assert "χ13 = 2.7" in listed
    assert "no verified number" in listed
    assert main(["phases", "--published-parameters", "--json"]) == 0
    assert len(json.loads(capsys.readouterr().out)["systems"]) == len(systems)
