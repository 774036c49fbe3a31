"""``poroscan inspect`` on a folder with good and bad pictures."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from drawn_pictures import texture, with_banner
from PIL import Image

from poroscan.cli.app import main


@pytest.fixture
def folder(tmp_path: Path, rng: np.random.Generator) -> Path:
    top = tmp_path / "in"
    (top / "drum 1").mkdir(parents=True)
    drawn = with_banner(texture(200, 400, rng), length=180, label="20 µm", um=20, rows=60, size=16)
    Image.fromarray(drawn.grey).save(top / "drum 1" / "a.png")
    Image.fromarray(drawn.grey).save(top / "drum 1" / "<b onload=x>'\".png")
    return top


def test_table_and_exit_code(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "sidecar.csv").write_text("image,scale_bar_um\ndrum 1/a.png,20\n")
    assert main(["inspect", str(folder), "--quiet", "--no-ocr"]) == 0
    out = capsys.readouterr().out.splitlines()
    heading, *rows = (line.split("\t") for line in out)
    table = [dict(zip(heading, row, strict=True)) for row in rows]
    by_name = {row["image"]: row for row in table}
    assert by_name["a.png"]["banner"] == "60"
    assert by_name["a.png"]["source"] == "scale_bar"
    assert float(by_name["a.png"]["µm per pixel"]) == pytest.approx(20 / 180, rel=1e-3)


def test_bad_input_gives_exit_code_3_and_the_rest_is_shown(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "drum 1" / "bad.tif").write_bytes(b"II*\x00")
    assert main(["inspect", str(folder), "--json", "--no-ocr"]) == 3
    captured = capsys.readouterr()
    pictures = {p["image"]: p for p in json.loads(captured.out)["pictures"]}
    assert len(pictures) == 3
    assert pictures["bad.tif"]["flags"] == ["failed"]
    assert pictures["a.png"]["rows"] == 200
    assert next(line for line in captured.err.splitlines() if "bad.tif" in line).startswith("poroscan: ")


@pytest.mark.parametrize("ending", [".png", ".html"])
def test_contact_sheet(folder: Path, tmp_path: Path, ending: str) -> None:
    out = tmp_path / f"sheet{ending}"
    assert main(["inspect", str(folder), "--quiet", "--no-ocr", "--out", str(out)]) == 0
    if ending == ".png":
        assert np.asarray(Image.open(out)).std() > 10
        return
    page = out.read_text(encoding="utf-8")
    assert page.count("data:image/png;base64,") == 2
    assert "<b onload" not in page
    assert "&lt;b onload=x&gt;&#x27;&quot;.png" in page
    assert "http" not in page


def test_wrong_use(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for options in (["--banner", "top"], ["--pixel-size", "-1"], ["--out", "sheet.pdf"], ["--page", "0"]):
        assert main(["inspect", str(folder), *options]) == 2
        assert len(capsys.readouterr().err.strip().splitlines()) == 1


def test_one_picture_and_an_empty_folder(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["inspect", str(folder / "drum 1" / "a.png"), "--json", "--no-ocr"]) == 0
    assert len(json.loads(capsys.readouterr().out)["pictures"]) == 1
    (tmp_path / "empty").mkdir()
    assert main(["inspect", str(tmp_path / "empty")]) == 3
    assert "holds no picture" in capsys.readouterr().err


def test_a_run_folder_is_no_folder_of_pictures(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Its overlays would pass for pictures."""
    (folder / "run.json").write_text("{}", encoding="utf-8")
    for words in (["inspect", str(folder)], ["scan", str(folder), "--out", str(folder.parent / "run")]):
        assert main(words) == 3
        assert "is a run folder, written by a scan; give the folder that holds the pictures" in capsys.readouterr().err


def test_a_sheet_without_a_place_is_said_before_anything_is_read(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["inspect", str(folder), "--out", str(folder / "none" / "sheet.html")]) == 2
    said = capsys.readouterr()
    assert "there is no folder" in said.err
    assert said.out == ""
