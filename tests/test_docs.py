"""The pages say what is so: links resolve, examples load, commands and options exist, README and CI agree."""

from __future__ import annotations

import dataclasses
import json
import re
import shlex
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import typer

from poroscan.batch.recipe import load_recipe
from poroscan.cli.app import app
from poroscan.demix.formulation import load_formulation

ROOT = Path(__file__).parent.parent
DOCS = ROOT / "docs"
PAGES = sorted(DOCS.glob("*.md"))
ALL = [ROOT / "README.md", *PAGES]

_FENCE = re.compile(r"^```(\w*)\n(.*?)^```$", re.DOTALL | re.MULTILINE)


def _text(page: Path) -> str:
    return page.read_text(encoding="utf-8")


def _blocks(page: Path, language: str) -> list[str]:
    return [body for found, body in _FENCE.findall(_text(page)) if found == language]


def _ids(pages: list[Path]) -> list[str]:
    return [p.name for p in pages]


def test_every_page_is_in_the_navigation_once():
    listed = re.findall(r"^\s+- [^:]+: (\S+\.md)$", _text(ROOT / ".mkdocs.yml"), re.MULTILINE)
    assert sorted(listed) == [p.name for p in PAGES]


def test_the_start_page_names_every_other_page():
    linked = set(re.findall(r"\]\((\w+\.md)\)", _text(DOCS / "index.md")))
    assert linked == {p.name for p in PAGES} - {"index.md"}


def _anchors(page: Path) -> set[str]:
    """Anchors of the headings, as site builders make them: lower case, spaces to hyphens, other signs dropped."""
    headings = re.findall(r"^#+ (.+)$", _FENCE.sub("", _text(page)), re.MULTILINE)
    return {re.sub(r"[\s]+", "-", re.sub(r"[^\w\s-]", "", h.lower()).strip()) for h in headings}


@pytest.mark.parametrize("page", ALL, ids=_ids(ALL))
def test_internal_links_resolve(page):
    for target in re.findall(r"\]\(([^)\s]+)\)", _FENCE.sub("", _text(page))):
        assert "://" not in target, f"{page.name}: {target} needs a network"
        name, _, anchor = target.partition("#")
        file = (page.parent / name).resolve() if name else page
        assert file.is_file(), f"{page.name} links to {target}, which is not there"
        assert not anchor or anchor in _anchors(file), f"{page.name} links to {target}, which has no such heading"


@pytest.mark.parametrize("page", ALL, ids=_ids(ALL))
def test_named_files_of_the_project_exist(page):
    for name in re.findall(r"`((?:poroscan|docs|tests)/[\w/.-]+\.(?:py|toml|md|json))", _text(page)):
        assert (ROOT / name).is_file(), f"{page.name} names {name}, which is not there"


@pytest.mark.parametrize("page", ALL, ids=_ids(ALL))
def test_no_place_of_one_machine(page):
    text = _text(page)
    assert not re.search(r"(?<![\w.])/(?:home|root|work|tmp|Users|opt|usr)/|[A-Z]:\\", text), page.name
    assert not re.search(r"\b(?:pypi|pythonhosted|anaconda|conda-forge|github|gitlab)\b", text, re.IGNORECASE), (
        page.name
    )
    assert not re.search(r"https?://|\blocalhost\b", text), page.name


def test_pages_of_recipe_keys_load(tmp_path):
    blocks = [b for name in ("recipe.md", "quality_control.md", "guide.md") for b in _blocks(DOCS / name, "toml")]
    assert len(blocks) >= 2
    for number, block in enumerate(blocks):
        file = tmp_path / f"{number}.toml"
        file.write_text(block, encoding="utf-8")
        recipe = load_recipe(file)
        for table, values in tomllib.loads(block).items():
            if isinstance(values, dict):
                assert all(hasattr(getattr(recipe, table), key) for key in values)


def test_every_formulation_in_the_pages_loads(tmp_path):
    blocks = _blocks(DOCS / "formulation.md", "toml")
    assert len(blocks) >= 2
    for number, block in enumerate(blocks):
        file = tmp_path / f"{number}.toml"
        file.write_text(block, encoding="utf-8")
        assert load_formulation(file).name == tomllib.loads(block)["name"]


def test_recipe_keys_named_in_prose_exist():
    from poroscan.batch.recipe import make_recipe

    recipe = make_recipe()
    named = re.findall(r"`\[(intake|segment|measure|qc|report)\] (\w+)", "".join(map(_text, ALL)))
    assert len(named) >= 10
    for table, key in named:
        assert hasattr(getattr(recipe, table), key), f"[{table}] {key}"


def _command_lines(page: Path) -> Iterator[list[str]]:
    text = _text(page)
    spans = [line for body in _blocks(page, "") for line in body.splitlines()]
    spans += re.findall(r"^    (poroscan .*)$", text, re.MULTILINE)
    spans += re.findall(r"`(poroscan [^`\n]*)`", _FENCE.sub("", text))
    for span in spans:
        if span.startswith("poroscan "):
            yield shlex.split(span.removeprefix("poroscan ").replace("[", "").replace("]", ""))


def _walk(words: list[str]) -> tuple[Any, list[str]]:
    """The command that the words name, sub-commands included, and what follows."""
    command, rest = typer.main.get_command(app), list(words)
    while getattr(command, "commands", None) and rest and not rest[0].startswith("-"):
        name = rest.pop(0)
        names = name.split("/")  # `atlas build/add/show` names several
        assert all(n in command.commands for n in names), f"poroscan {' '.join(words)}: no command {name}"
        command = command.commands[names[0]]
    return command, rest


@pytest.mark.parametrize("page", ALL, ids=_ids(ALL))
def test_commands_in_the_pages_exist_with_their_options(page):
    for words in _command_lines(page):
        command, rest = _walk(words)
        options = {o for p in command.params for o in (*p.opts, *p.secondary_opts)} | {"--help"}
        for word in rest:
            if word.startswith("--"):
                assert word.split("=")[0] in options, f"{page.name}: poroscan {' '.join(words)}: no option {word}"


def test_every_command_is_named_in_the_pages():
    named = {words[0] for page in PAGES for words in _command_lines(page) if words}
    assert set(typer.main.get_command(app).commands) <= named


def test_what_the_readme_tells_to_run_is_what_ci_runs():
    told = [line for block in _blocks(ROOT / "README.md", "") for line in block.splitlines() if line]
    run = [line.replace(" -q ", " ") for line in _text(ROOT / ".ci" / "run").splitlines()]
    assert told[1:] == ["poroscan scan sample_images/batches --out run", "python -m pytest -n 2"]
    assert [line for line in told if line not in run] == []


def test_lower_bounds_are_those_of_the_packages_page():
    """Packages at run time: the table of decisions.md and pyproject.toml say the same."""
    needed = tomllib.loads(_text(ROOT / "pyproject.toml"))["project"]["dependencies"]
    rows = re.findall(r"^\| ([\w, -]+) \| .* \| (\d[\d., ]*)[:. ].*\|$", _text(DOCS / "decisions.md"), re.MULTILINE)
    said = {}
    for names, bounds in rows:
        said |= dict(zip(names.split(", "), re.findall(r"\d[\d.]*\d|\d+", bounds), strict=True))
    assert said == dict(n.split(">=") for n in needed)


def test_every_key_of_the_recipe_stands_in_its_table_with_its_default():
    text = _text(DOCS / "recipe.md")
    for name, kind in _tables_of_the_recipe():
        part = text[text.index(f"### `[{name}]`") :]
        for field in dataclasses.fields(kind):
            row = re.search(rf"^\| `{field.name}` \| (.*?) \| .+ \|$", part, re.MULTILINE)
            assert row, f"[{name}] {field.name}"
            assert row[1] == _default_in_words(field), f"[{name}] {field.name}"


def _tables_of_the_recipe() -> list[tuple[str, Any]]:
    from poroscan.batch.recipe import Recipe
    from poroscan.qc.settings import Limit

    kinds = [(name, info.annotation) for name, info in Recipe.model_fields.items()]
    return [(n, k) for n, k in kinds if dataclasses.is_dataclass(k)] + [("qc", Limit)]


def _default_in_words(field: dataclasses.Field[Any]) -> str:
    if field.default is dataclasses.MISSING:
        return "(required)"
    return "–" if field.default is None else f"`{json.dumps(field.default)}`"
