"""Docstrings are held against signatures: nothing public is undocumented, no documented parameter is missing."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "poroscan"
FILES = sorted(PACKAGE.rglob("*.py"))


def _public(tree: ast.Module) -> Iterator[ast.FunctionDef | ast.ClassDef]:
    for node in tree.body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            yield node
            if isinstance(node, ast.ClassDef):
                yield from (m for m in node.body if isinstance(m, ast.FunctionDef) and not m.name.startswith("_"))


def _documented(doc: str) -> set[str]:
    """Names in the Parameters section of a numpydoc docstring."""
    match = re.search(r"Parameters\n *-{5,}\n(.*?)(?:\n\n *\w[\w ]*\n *-{5,}\n|\Z)", doc, re.S)
    if not match:
        return set()
    names: set[str] = set()
    for line in match[1].splitlines():
        if line and not line.startswith(" "):
            names |= {n.strip(" *") for n in line.split(" : ")[0].split(",")}
    return names


def _accepted(node: ast.FunctionDef | ast.ClassDef) -> set[str]:
    if isinstance(node, ast.ClassDef):
        fields = {s.target.id for s in node.body if isinstance(s, ast.AnnAssign) and isinstance(s.target, ast.Name)}
        init = [s for s in node.body if isinstance(s, ast.FunctionDef) and s.name == "__init__"]
        return fields.union(*(_accepted(i) for i in init))
    a = node.args
    return {x.arg for x in (*a.posonlyargs, *a.args, *a.kwonlyargs, *(y for y in (a.vararg, a.kwarg) if y))}


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_docstrings_match_signatures(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    assert ast.get_docstring(tree), f"{path.relative_to(PACKAGE)} has no module docstring"
    for node in _public(tree):
        doc = ast.get_docstring(node)
        assert doc, f"{path.relative_to(PACKAGE)}:{node.lineno} {node.name} has no docstring"
        extra = _documented(doc) - _accepted(node)
        assert not extra, f"{path.relative_to(PACKAGE)}:{node.lineno} {node.name} documents {sorted(extra)}"
