"""The page's structure: what a screen reader, a spam filter of links and a hostile file name meet. Not its pixels."""

from __future__ import annotations

import itertools
import json
import re
from html.parser import HTMLParser
from pathlib import Path

import pyarrow.parquet as pq
import pytest
from drawn_particles import draw_particle, write_png

from poroscan.batch.recipe import make_recipe
from poroscan.batch.scan import scan_folder
from poroscan.errors import StoreError
from poroscan.report.page import write_report

VOID = {"meta", "img", "br", "path", "circle", "link", "input", "hr"}


class Page(HTMLParser):
    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str]]] = []
        self.open: list[str] = []
        self.words: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, {k: v or "" for k, v in attrs}))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, {k: v or "" for k, v in attrs}))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if not self.open or self.open[-1] != "style":
            self.words.append(data)

    def all(self, tag: str) -> list[dict[str, str]]:
        return [attrs for name, attrs in self.elements if name == tag]


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    top = tmp_path_factory.mktemp("report")
    for number, name in enumerate(('lot "1"/<i>a</i>.png'.replace("/i", "_i"), "lot 2/b.png", "lot 2/c.png")):
        write_png(top / "pictures" / name, draw_particle(seed=number))
    cut = draw_particle(seed=5, centre=(60.0, 20.0))
    write_png(top / "pictures" / "lot 2" / "cut.png", cut)
    (top / "pictures" / "lot 2" / "bad.png").write_bytes(b"")
    scan_folder(top / "pictures", top / "run", make_recipe({"intake": {"pixel_size_um": 0.5}}))
    return top / "run"


@pytest.fixture(scope="module")
def text(run: Path) -> str:
    return (run / "report.html").read_text(encoding="utf-8")


def test_well_formed_and_stands_alone(text: str) -> None:
    page = Page(text)
    assert page.open == []
    assert not page.all("script")
    assert not page.all("link")
    assert all(a["src"].startswith("data:image/") for a in page.all("img"))
    assert not re.search(r"(https?:)?//[a-z]", re.sub(r"base64,[A-Za-z0-9+/=]+", "", text))


def test_readable_by_ear(text: str) -> None:
    page = Page(text)
    assert page.all("html")[0]["lang"] == "en"
    assert all(a.get("alt") for a in page.all("img"))
    assert all(a.get("role") == "img" and a.get("aria-label") for a in page.all("svg"))
    assert all(a.get("scope") in ("col", "row") for a in page.all("th"))
    levels = [int(tag[1]) for tag, _ in page.elements if re.fullmatch(r"h\d", tag)]
    assert levels[0] == 1
    assert all(b - a <= 1 for a, b in itertools.pairwise(levels)), "a heading level is skipped"


def test_links_lead_somewhere(run: Path, text: str) -> None:
    page = Page(text)
    anchors = {attrs["id"] for _, attrs in page.elements if "id" in attrs}
    assert len(anchors) == sum("id" in attrs for _, attrs in page.elements)
    for link in page.all("a"):
        target = link["href"]
        assert target[1:] in anchors if target.startswith("#") else (run / target).is_file()


def test_names_are_escaped(text: str) -> None:
    assert "<i>a" not in text
    assert "&lt;i&gt;a" in text
    assert "lot &#34;1&#34;" in text


def test_everything_a_reader_needs_is_there(run: Path, text: str) -> None:
    words = " ".join(" ".join(Page(text).words).split())
    table = pq.read_table(run / "particles.parquet").to_pylist()
    assert words.count("Particle 1") >= len({r["image"] for r in table})
    for line in json.loads((run / "run.json").read_text())["inputs"]:
        assert line["sha256"] in words
    assert "bad.png" in words
    assert "What was left out, and why" in words
    assert "cut by the frame" in words
    assert "given by the user" in words
    assert "Delesse 1847" in words
    assert "not a measurement" in words
    assert "nan" not in words.lower().split()
    assert not re.search(r"\bNone\b(?! needed)", words)


def test_the_tool_releases_nothing(text: str) -> None:
    said = " ".join(Page(text).words).lower()
    assert [m for m in re.findall(r"[^.]*\breleased\b[^.]*\.", said) if "validated methods" not in m] == []


def test_beyond_the_limit_flagged_particles_come_first(run: Path, tmp_path: Path) -> None:
    import shutil

    copy = tmp_path / "run"
    shutil.copytree(run, copy)
    content = json.loads((copy / "run.json").read_text())
    content["recipe"]["report"]["largest_number_of_particles"] = 1
    (copy / "run.json").write_text(json.dumps(content))
    write_report(copy, copy / "report.html")
    page = Page((copy / "report.html").read_text(encoding="utf-8"))
    assert len([a for a in page.elements if a[1].get("class") == "particle"]) == 1
    assert "more particles are in particles.csv and not shown here" in " ".join(page.words)


def test_damaged_run_is_named(run: Path, tmp_path: Path) -> None:
    import shutil

    copy = tmp_path / "run"
    shutil.copytree(run, copy)
    (copy / "particles.parquet").write_bytes(b"PAR1")
    with pytest.raises(StoreError, match="cannot be read"):
        write_report(copy, copy / "report.html")
