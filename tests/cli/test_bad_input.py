"""Every kind of bad input: one clear line, a row in run.json, exit code 3, and the other pictures are done."""

from __future__ import annotations

import csv
import json
import os
import struct
from collections.abc import Callable
from contextlib import AbstractContextManager
from html.parser import HTMLParser
from pathlib import Path

import imagecodecs
import numpy as np
import pandas as pd
import pytest
import tifffile
from drawn_particles import draw_particle, write_png

from poroscan.cli.app import main

GOOD = draw_particle(seed=1)


def _tiff(path: Path, **options: object) -> bytes:
    tifffile.imwrite(path, GOOD, **options)
    return path.read_bytes()


def _truncated(path: Path) -> None:
    path.write_bytes(_tiff(path)[:2000])


def _corrupt_header(path: Path) -> None:
    path.write_bytes(b"II*\x00" + struct.pack("<I", 2**31 - 5) + bytes(500))


def _huge_header(path: Path) -> None:
    """A PNG that says it holds ten gigapixels, in sixty bytes."""
    body = struct.pack(">IIBBBBB", 100_000, 100_000, 8, 0, 0, 0, 0)
    chunk = struct.pack(">I", len(body)) + b"IHDR" + body + struct.pack(">I", 0)
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + chunk)


def _float_tiff(value: float) -> Callable[[Path], None]:
    return lambda path: tifffile.imwrite(path, np.full((60, 60), value, dtype=np.float32))


BAD: dict[str, Callable[[Path], object]] = {
    "truncated.tif": _truncated,
    "zero_byte.png": lambda p: p.write_bytes(b""),
    "text.tif": lambda p: p.write_text("this is no picture"),
    "corrupt_header.tif": _corrupt_header,
    "ten_gigapixel.png": _huge_header,
    "one_pixel.png": lambda p: p.write_bytes(imagecodecs.png_encode(np.zeros((1, 1), np.uint8))),
    "constant.png": lambda p: p.write_bytes(imagecodecs.png_encode(np.full((80, 80), 90, np.uint8))),
    "saturated.png": lambda p: p.write_bytes(imagecodecs.png_encode(np.full((80, 80), 255, np.uint8))),
    "all_nan.tif": _float_tiff(float("nan")),
    "all_infinite.tif": _float_tiff(float("inf")),
    "dangling.tif": lambda p: p.symlink_to("nowhere.tif"),
    "folder.gif": lambda p: p.write_bytes(b"GIF89a"),
}


def _scan(folder: Path, run: Path, *more: str) -> int:
    return main(["scan", str(folder), "--out", str(run), "--workers", "0", "--pixel-size", "0.5", *more])


def test_bad_files_cost_themselves_only(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder, run = tmp_path / "pictures", tmp_path / "run"
    write_png(folder / "lot" / "good.png", GOOD)
    for name, make in BAD.items():
        make(folder / "lot" / name)
    assert _scan(folder, run) == 3
    lines = capsys.readouterr().err.splitlines()
    inputs = {e["image"]: e for e in json.loads((run / "run.json").read_text())["inputs"]}
    assert inputs["good.png"]["outcome"] == "measured"
    for name in BAD:
        about = [line for line in lines if name in line]
        assert len(about) == 1, (name, about)
        assert about[0].startswith("poroscan: ")
        assert "; " in about[0], "a remedy follows what is wrong"
        assert inputs[name]["outcome"] in ("unreadable", "no_particle"), inputs[name]
        assert inputs[name]["reason"]
        assert inputs[name]["remedy"]
    assert sum(line.startswith("poroscan: ") for line in lines) == len(BAD)
    assert list(pd.read_csv(run / "particles.csv").dropna(subset="particle")["image"]) == ["good.png"]


def test_awkward_files_are_measured(tmp_path: Path) -> None:
    folder, run = tmp_path / "pictures", tmp_path / "run"
    folder.mkdir()
    rgb = np.repeat(GOOD[:, :, None], 3, axis=2)
    tifffile.imwrite(folder / "hundred_pages.tif", np.repeat(GOOD[None], 100, axis=0), photometric="minisblack")
    tifffile.imwrite(folder / "cmyk.tif", 255 - np.dstack([rgb, np.full_like(GOOD, 255)]), photometric="separated")
    tifffile.imwrite(folder / "one_bit.tif", GOOD > 100, photometric="minisblack")
    with_nan = GOOD.astype(np.float32)
    with_nan[:4, :4] = [np.nan, np.inf, -np.inf, np.nan]
    tifffile.imwrite(folder / "some_nan.tif", with_nan)
    (folder / "wrong_extension.jpg").write_bytes(imagecodecs.png_encode(GOOD))
    assert _scan(folder, run) == 0
    table = pd.read_csv(run / "particles.csv", index_col="image")
    assert sorted(table.index) == sorted(p.name for p in folder.iterdir())
    assert table["equivalent_diameter_um"].to_numpy() == pytest.approx(48.0, rel=0.05)
    assert "bad_pixels" in table.loc["some_nan.tif", "flags"]


HOSTILE = [
    "a b.png",
    "\"q'uote.png",
    "<script>alert(1)</script>.png",
    "=1+1.png",
    "-x.png",
    "é日本.png",
    "A.png",
    "a.png",
    "a.PNG",
    "a.tif",
]


class _Page(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))


def test_hostile_names(tmp_path: Path) -> None:
    folder, run = tmp_path / "pictures", tmp_path / "run"
    for batch in ("<b>lot</b>", "=cmd"):
        for name in HOSTILE:
            if name.endswith("tif"):
                (folder / batch).mkdir(parents=True, exist_ok=True)
                tifffile.imwrite(folder / batch / name, GOOD)
            elif "/" not in name:
                write_png(folder / batch / name, GOOD)
    (folder / "=cmd" / "=bad.png").write_bytes(b"")
    (folder / "=cmd" / os.fsdecode(b"not utf-8 \xff.png")).write_bytes(b"")
    assert _scan(folder, run, "--quiet") == 3
    with (run / "particles.csv").open(encoding="utf-8", newline="") as handle:
        rows = list(csv.DictReader(handle))
    assert len(rows) == 2 * len([n for n in HOSTILE if "/" not in n])
    assert not any(cell.startswith(("=", "+", "@")) for row in rows for cell in row.values())
    folders = [p.name for p in (run / "images").iterdir()]
    assert len({f.casefold() for f in folders}) == len(rows) + 2
    assert all(f.isascii() and " " not in f for f in folders)
    page = (run / "report.html").read_text(encoding="utf-8")
    parser = _Page()
    parser.feed(page)
    assert "script" not in {tag for tag, _ in parser.tags}
    assert not [a for _, attrs in parser.tags for a in attrs if a.startswith("on")]
    assert "<b>lot</b>" not in page
    assert "&lt;b&gt;lot&lt;/b&gt;" in page


@pytest.mark.parametrize("content", ["nothing", "text files"])
def test_folder_without_pictures(content: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder = tmp_path / "pictures"
    folder.mkdir()
    if content == "text files":
        for number in range(3):
            (folder / f"{number}.txt").write_text("notes")
    assert _scan(folder, tmp_path / "run") == 3
    errors = [line for line in capsys.readouterr().err.splitlines() if line.startswith("poroscan: ")]
    assert len(errors) == 1
    assert "holds no picture; put TIFF, PNG, JPEG or BMP files into it" in errors[0]
    assert json.loads((tmp_path / "run" / "run.json").read_text())["inputs"][0]["outcome"] == "unreadable"


def test_folder_that_is_not_there(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert _scan(tmp_path / "none", tmp_path / "run") == 3
    assert capsys.readouterr().err.count("\n") == 1
    assert not (tmp_path / "run").exists()


def test_nothing_in_the_run_is_lost_when_the_folder_is_emptied(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    folder, run = tmp_path / "pictures", tmp_path / "run"
    write_png(folder / "a.png", GOOD)
    assert _scan(folder, run, "--quiet") == 0
    before = {p: p.read_bytes() for p in run.rglob("*") if p.is_file()}
    (folder / "a.png").unlink()
    assert _scan(folder, run, "--quiet") == 2
    assert "that this folder does not have" in capsys.readouterr().err
    assert {p: p.read_bytes() for p in run.rglob("*") if p.is_file()} == before


@pytest.mark.skipif(os.name == "nt", reason="Windows has no such access rights")
def test_unreadable_permission(
    open_folder: Path, capsys: pytest.CaptureFixture[str], plain_user: Callable[[], AbstractContextManager[None]]
) -> None:
    path, run = write_png(open_folder / "pictures" / "a.png", GOOD), open_folder / "run"
    for folder in (path.parent, run):
        folder.mkdir(exist_ok=True)
        folder.chmod(0o777)
    assert _scan(path.parent, open_folder / "control", "--quiet") == 0  # whatever is loaded late is there now
    path.chmod(0)
    with plain_user():
        code = _scan(path.parent, run)
    assert code == 3
    assert "a.png: may not be read; change its access rights" in capsys.readouterr().err
    assert json.loads((run / "run.json").read_text())["inputs"][0]["outcome"] == "unreadable"


@pytest.mark.slow
def test_ten_thousand_tiny_pictures(tmp_path: Path) -> None:
    folder = tmp_path / "pictures"
    folder.mkdir()
    tiny = imagecodecs.png_encode(np.full((4, 4), 9, np.uint8))
    for number in range(10_000):
        (folder / f"{number:05d}.png").write_bytes(tiny)
    assert _scan(folder, tmp_path / "run", "--quiet") == 3
    inputs = json.loads((tmp_path / "run" / "run.json").read_text())["inputs"]
    assert len(inputs) == 10_000
    assert (tmp_path / "run" / "report.html").stat().st_size < 15e6
