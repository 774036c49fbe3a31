"""The walls of the house: imports point one way, and importing is cheap."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "poroscan"

#: Room -> rooms it may import. section, quantities and errors are open to all.
_BASE = {"section", "quantities", "errors"}
ALLOWED = {
    "section": set(),
    "errors": set(),
    "quantities": {"section"},
    "intake": _BASE,
    "segment": _BASE | {"intake"},
    "measure": _BASE | {"intake", "segment"},
    "demix": _BASE,
    "render": _BASE,
    "atlas": _BASE | {"intake", "segment", "measure", "demix", "render"},
    "qc": _BASE | {"intake", "segment", "measure", "atlas"},
    "report": _BASE | {"intake", "segment", "measure", "atlas", "qc", "demix"},
    "batch": _BASE | {"intake", "segment", "measure", "atlas", "qc", "report"},
}
ALLOWED["cli"] = ALLOWED["batch"] | {"batch", "demix", "render"}


def _room(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def _imported_rooms(path: Path) -> set[str]:
    rooms = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        names: list[str] = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names = (
                [f"{node.module}.{a.name}" for a in node.names] if node.module == "poroscan" else [node.module or ""]
            )
        rooms |= {name.split(".")[1] for name in names if name.startswith("poroscan.")}
    return rooms - {"__version__"}


@pytest.mark.parametrize("path", sorted(PACKAGE.rglob("*.py")), ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_point_one_way(path: Path) -> None:
    room = _room(path)
    if room in {"__init__", "__main__"}:
        return
    extra = _imported_rooms(path) - ALLOWED[room] - {room}
    assert not extra, f"{path.relative_to(PACKAGE)} imports {extra}"


HEAVY = ("numpy", "scipy", "pandas", "skimage", "matplotlib", "numba", "pydantic", "jinja2", "tifffile", "pyarrow")


@pytest.mark.parametrize("statement", ["import poroscan", "import poroscan.cli.app"])
def test_import_is_light(statement: str) -> None:
    code = f"import sys; {statement}; print(*(m for m in {HEAVY!r} if m in sys.modules))"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert out.stdout.split() == []


def test_top_level_holds_nothing_else() -> None:
    allowed = {"README.md", "pyproject.toml", "poroscan", "tests", "sample_images", "docs", "LICENSE"}
    listed = subprocess.run(["git", "ls-files"], cwd=PACKAGE.parent, capture_output=True, text=True, check=False)
    if listed.returncode != 0:  # an unpacked source archive has no git; its top level is that of the archive
        names = {p.name for p in PACKAGE.parent.iterdir()}
    else:
        names = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert {n for n in names if not n.startswith(".")} - allowed - {
        "poroscan.egg-info",
        "PKG-INFO",
        "setup.cfg",
    } == set()
