from __future__ import annotations

import tomllib
from pathlib import Path

import pytest

from poroscan.batch.recipe import Recipe, differences, load_recipe, make_recipe, recipe_to_toml
from poroscan.errors import SettingsError


def test_defaults_need_no_file() -> None:
    assert make_recipe() == Recipe()


@pytest.mark.parametrize(
    ("tables", "message"),
    [
        ({"segment": {"treshold": 0.5}}, r"unknown key \[segment\] treshold; did you mean \[segment\] threshold\?"),
        ({"sgment": {}}, r"unknown key sgment; did you mean \[segment\]\?"),
        ({"sed": 3}, r"unknown key sed; did you mean seed\?"),
        ({"measure": {"threshold": 0.5}}, r"unknown key \[measure\] threshold; it belongs in \[segment\]"),
        ({"segment": {"seed": 1}}, r"unknown key \[segment\] seed; it belongs in the top of the file"),
        ({"report": {"qqqq": 1}}, r"unknown key \[report\] qqqq; known here: title,"),
        ({"seed": "5"}, r"seed: input should be a valid integer, not '5'"),
        ({"seed": -1}, r"seed: input should be greater than or equal to 0, not -1"),
        ({"segment": {"split_touching": 1}}, r"\[segment\] split_touching: input should be a valid boolean, not 1"),
        ({"segment": {"view": "side"}}, r"\[segment\] view: input should be 'auto', 'whole', 'edge' or 'interior'"),
        ({"measure": {"radial_bins": 1}}, r"\[measure\] .*radial_bins must lie between 2 and 1000, not 1"),
        ({"segment": 3}, r"\[segment\]: input should be an object"),
    ],
)
def test_what_is_wrong_is_named(tables: dict[str, object], message: str) -> None:
    with pytest.raises(SettingsError, match=message):
        make_recipe(tables)


def test_every_mistake_is_named_at_once() -> None:
    with pytest.raises(SettingsError, match=r"treshold.*; .*sed"):
        make_recipe({"segment": {"treshold": 0.5}, "sed": 1})


def test_file_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match=r"none\.toml: No such file"):
        load_recipe(tmp_path / "none.toml")
    (tmp_path / "bad.toml").write_text("seed = = 3")
    with pytest.raises(SettingsError, match=r"bad\.toml is not valid TOML: .*line 1"):
        load_recipe(tmp_path / "bad.toml")
    (tmp_path / "latin.toml").write_bytes(b'batch_name = "\xe4"')
    with pytest.raises(SettingsError, match="not UTF-8"):
        load_recipe(tmp_path / "latin.toml")


def test_command_line_takes_precedence(tmp_path: Path) -> None:
    path = tmp_path / "r.toml"
    path.write_text('seed = 3\n[segment]\nview = "edge"\nmin_diameter_px = 20\n')
    recipe = load_recipe(path, changes={"segment.view": "whole", "seed": 4, "intake.pixel_size_um": 0.5})
    assert (recipe.seed, recipe.segment.view, recipe.segment.min_diameter_px) == (4, "whole", 20.0)
    assert recipe.intake.pixel_size_um == 0.5


def test_digest_follows_what_decides_the_tables_only() -> None:
    plain = make_recipe().digest()
    assert make_recipe({"workers": 7, "report": {"title": "x"}}).digest() == plain
    assert make_recipe({"seed": 1}).digest() != plain
    assert make_recipe({"measure": {"radial_bins": 21}}).digest() != plain


def test_toml_text_is_read_back_as_the_same_recipe() -> None:
    recipe = make_recipe({"seed": 5, "batch_name": 'a "b"', "segment": {"threshold": 0.4}})
    assert make_recipe(tomllib.loads(recipe_to_toml(recipe))) == recipe


def test_differences_name_key_and_values() -> None:
    one, two = make_recipe({"seed": 1}), make_recipe({"seed": 2, "segment": {"view": "edge"}, "report": {"title": "t"}})
    assert differences(one.plain(), two.plain()) == ["seed: 1 -> 2", "[segment] view: 'auto' -> 'edge'"]
