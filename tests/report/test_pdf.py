"""The PDF says what the page says, to eyes and ears, in the same bytes each time, whatever the names are."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from drawn_particles import draw_particle, write_png
from markupsafe import Markup

from poroscan.batch.recipe import make_recipe
from poroscan.batch.scan import scan_folder
from poroscan.errors import MissingExtraError, PoroscanError
from poroscan.report import pdf
from poroscan.report.content import QUESTIONS, report_content
from poroscan.report.pdf import plain, write_pdf
from poroscan.report.source import read_run_data

pytest.importorskip("typst")
HOSTILE = '#panic() $x$ [*b*] <i> @ref "q" \\ ` 漢 é'


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    top = tmp_path_factory.mktemp("pdf")
    for number, name in enumerate((f"{HOSTILE}/a.png", "lot 2/b.png", "lot 2/c.png")):
        write_png(top / "pictures" / name, draw_particle(seed=number))
    limits = [{"quantity": "porosity", "high": 0.05}, {"quantity": "pore_d50_um", "high": 50.0, "on": "share_outside"}]
    recipe = make_recipe(
        {"intake": {"pixel_size_um": 0.5}, "qc": {"limits": limits, "regime": "spinodal", "min_particles": 1}}
    )
    scan_folder(top / "pictures", top / "run", recipe)
    return top / "run"


@pytest.fixture(scope="module")
def content(run: Path) -> dict[str, Any]:
    return report_content(read_run_data(run))


def test_same_content_same_bytes(run: Path, content: dict[str, Any], tmp_path: Path) -> None:
    for name in ("a.pdf", "b.pdf"):
        write_pdf(content, run, tmp_path / name)
    assert (tmp_path / "a.pdf").read_bytes() == (tmp_path / "b.pdf").read_bytes() == (run / "report.pdf").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.pdf", "b.pdf"]  # nothing is left behind


def test_tagged_for_screen_readers(run: Path) -> None:
    made = (run / "report.pdf").read_bytes()
    assert b"/Marked true" in made
    assert b"pdfuaid" in made
    assert b"/Lang" in made


def test_the_pdf_says_what_the_page_says(run: Path, content: dict[str, Any]) -> None:
    if shutil.which("pdftotext") is None:
        pytest.skip("pdftotext is not installed")
    arguments = ["pdftotext", "-raw", str(run / "report.pdf"), "-"]
    said = _letters(subprocess.run(arguments, capture_output=True, check=True).stdout.decode())
    page = (run / "report.html").read_text(encoding="utf-8")
    for words in _words(content):
        assert _letters(words) in said, words
        assert _letters(words) in _letters(re.sub(r"<[^>]+>", "", page.replace("&#39;", "'").replace("&#34;", '"')
                                                   .replace("&lt;", "‹").replace("&gt;", "›"))), words  # fmt: skip


def _letters(text: str) -> str:
    return re.sub(r"[^A-Za-zµ]|(?<=[A-Za-z])-\n", "", text)


def _words(content: dict[str, Any]) -> list[str]:
    """Sentences of every part of the report; the labels of charts are read by screen readers and not printed."""
    found = [
        *QUESTIONS,
        *content["cautions"],
        content["no_trend"],
        "Measured by",
        "Reviewed by",
        "What was left out, and why",
    ]
    for question in content["questions"]:
        found += [s for a in question["answers"] for s in a["sentences"]]
    for batch in content["batches"]:
        found += [batch["counts"], *batch["sentences"], batch["verdict"]]
        found += [line.what for line in batch["limits"]] + [line.note for line in batch["limits"] if line.note]
        found += [p["outside"][0] for p in batch["particles"] if p["outside"]] + [p["about"] for p in batch["pictures"]]
    found += [q["definition"] for group in content["definitions"][:2] for q in group["members"]]
    assert len(found) > 40
    return found


def test_charts_become_pictures_with_words() -> None:
    svg = Markup('<svg viewBox="0 0 1 1" role="img" aria-label="&lt;b&gt; 1 &#34;q&#34;"></svg>')
    made = plain({"a": [svg, Markup('<p class="nothing">porosity &amp; more: nothing to show</p>')], "b": (1, None)})
    assert made["a"][0]["words"] == '<b> 1 "q"'
    assert made["a"][0]["svg"].startswith('<svg xmlns="http://www.w3.org/2000/svg"')
    assert made["a"][1] == {"svg": "", "words": "porosity & more: nothing to show"}
    assert json.loads(json.dumps(made))["b"] == [1, None]


def test_missing_extra_is_named(
    run: Path, content: dict[str, Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "typst", None)
    with pytest.raises(MissingExtraError, match=r"pip install 'poroscan\[pdf\]'"):
        write_pdf(content, run, tmp_path / "a.pdf")


def test_a_refused_document_says_why(run: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(pdf, "plain", lambda _: {"title": "x"})
    with pytest.raises(PoroscanError, match=r"report.pdf could not be set"):
        write_pdf({}, run, tmp_path / "a.pdf")
    assert list(tmp_path.iterdir()) == []
