"""From a folder to its pictures."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from poroscan.errors import InputError
from poroscan.intake import companions, list_inputs
from poroscan.intake.sidecar import read_sidecar


def _picture(path: Path) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    kind = "PNG" if path.suffix.lower() not in (".tif", ".jpg", ".bmp") else None
    Image.fromarray(np.zeros((4, 4), np.uint8)).save(path, kind)
    return path


def _names(folder: Path) -> list[tuple[str, str]]:
    return [(item.batch, item.image) for item in list_inputs(folder).items]


def test_subfolders_are_batches(tmp_path: Path) -> None:
    top = tmp_path / "plant"
    for name in ("z.png", "drum 2/b.tif", "drum 2/a.jpg", "drum 2/left/c.bmp", ".hidden/x.png", "drum 2/.x.png"):
        _picture(top / name)
    (top / "notes.txt").write_text("words")
    assert _names(top) == [("drum 2", "a.jpg"), ("drum 2", "b.tif"), ("drum 2/left", "c.bmp"), ("plant", "z.png")]


def test_top_folder_with_a_batch_of_the_same_name(tmp_path: Path) -> None:
    _picture(tmp_path / "A/1.png")
    _picture(tmp_path / "A/A/2.png")
    assert _names(tmp_path / "A") == [("A", "2.png"), ("A (top folder)", "1.png")]


def test_run_folders_and_skipped_folders_are_left_out(tmp_path: Path) -> None:
    _picture(tmp_path / "in/1.png")
    _picture(tmp_path / "in/run/images/1/overlay.png")
    (tmp_path / "in/run/run.json").write_text("{}")
    _picture(tmp_path / "in/other/2.png")
    assert [i.image for i in list_inputs(tmp_path / "in", skip=[tmp_path / "in/other"]).items] == ["1.png"]


def test_names_that_differ_only_in_case_or_extension_stay_apart(tmp_path: Path) -> None:
    for name in ("a.png", "A.png", "a.tif", "a.PNG"):
        _picture(tmp_path / "in" / name)
    ids = [i.image for i in list_inputs(tmp_path / "in").items]
    assert len({i.casefold() for i in ids}) == 4
    assert ids == ["A.png", "a.PNG~2", "a.png~3", "a.tif"]


def test_hostile_names_become_printable(tmp_path: Path) -> None:
    for name in ("=1+1.png", "q\"u'o.png", "<script>.png", "zwei\nZeilen.png", "späne µ.png", "sp ace.png"):
        _picture(tmp_path / "in" / name)
    ids = [i.image for i in list_inputs(tmp_path / "in").items]
    assert len(ids) == 6
    assert all(i.isprintable() for i in ids)
    assert "zwei\\nZeilen.png" in ids


def test_bytes_that_are_no_text_in_a_name(tmp_path: Path) -> None:
    import os

    _picture(tmp_path / "a.png")
    try:
        os.rename(tmp_path / "a.png", os.fsencode(tmp_path) + b"/b\xff.png")
    except OSError:
        pytest.skip("the file system takes text names only")
    (item,) = list_inputs(tmp_path).items
    assert item.image == "b\\xff.png"
    item.image.encode("utf-8")


def test_links_are_followed_once(tmp_path: Path) -> None:
    _picture(tmp_path / "in/b/1.png")
    (tmp_path / "in/b/loop").symlink_to(tmp_path / "in", target_is_directory=True)
    (tmp_path / "in/b/2.png").symlink_to(tmp_path / "in/b/1.png")
    (tmp_path / "in/b/3.png").symlink_to(tmp_path / "nowhere.png")  # listed, so that reading it says what is wrong
    assert [i.image for i in list_inputs(tmp_path / "in").items] == ["1.png", "2.png", "3.png"]


def test_companions_are_no_pictures(tmp_path: Path) -> None:
    for name in ("a.tif", "a_pores.png", "a_strokes.png", "b_pores.png"):
        _picture(tmp_path / name)
    assert [i.image for i in list_inputs(tmp_path).items] == ["a.tif", "b_pores.png"]
    found = companions(tmp_path / "a.tif")
    assert (found.pores, found.strokes, found.particles) == (tmp_path / "a_pores.png", tmp_path / "a_strokes.png", None)


def test_content_without_a_known_extension(tmp_path: Path) -> None:
    _picture(tmp_path / "a.png").rename(tmp_path / "a.dat")
    (tmp_path / "b.dat").write_bytes(b"\x00\x01")
    assert [i.image for i in list_inputs(tmp_path).items] == ["a.dat"]


def test_problems(tmp_path: Path) -> None:
    (tmp_path / "empty").mkdir()
    (problem,) = list_inputs(tmp_path / "empty").problems
    assert (problem.reason, problem.remedy) == ("holds no picture", "put TIFF, PNG, JPEG or BMP files into it")
    (tmp_path / "words").mkdir()
    (tmp_path / "words/a.txt").write_text("a")
    assert len(list_inputs(tmp_path / "words").problems) == 1
    (tmp_path / "words/b.gif").write_bytes(b"GIF89a")
    assert "picture format that is not read" in str(list_inputs(tmp_path / "words").problems[0])
    with pytest.raises(InputError, match="does not exist; check the name of the folder"):
        list_inputs(tmp_path / "gone")
    with pytest.raises(InputError, match="is not a folder"):
        list_inputs(tmp_path / "words/a.txt")


@pytest.mark.slow
def test_ten_thousand_pictures_are_listed(tmp_path: Path) -> None:
    for number in range(10_000):
        (tmp_path / f"{number}.png").touch()
    items = list_inputs(tmp_path).items
    assert len({item.image for item in items}) == 10_000


# Sidecar -----------------------------------------------------------------------------------------------------------------


def test_sidecar_rows_find_their_pictures(tmp_path: Path) -> None:
    for name in ("in/a.tif", "in/b/c.tif", "in/b/d.png"):
        _picture(tmp_path / name)
    (tmp_path / "in/sidecar.csv").write_text(
        "image,pixel_size_um,scale_bar_um,operator\na,0.5,,A. Person\nb/c.tif,0.25,10,\ngone.tif,1,,\n"
    )
    (tmp_path / "in/b/pixel_sizes.csv").write_text("\ufeffimage;pixel_size_um\nd.png;0,125\nc;0,3\n", encoding="utf-8")
    listing = list_inputs(tmp_path / "in")
    rows = {item.image: listing.sidecar_of(item) for item in listing.items}
    assert rows["a.tif"].pixel_size_um == 0.5
    assert rows["a.tif"].other["operator"] == "A. Person"
    assert rows["c.tif"].pixel_size_um == 0.3  # the table beside the picture counts
    assert rows["d.png"].pixel_size_um == 0.125
    assert listing.problems == ()
    assert any("line 4 names 'gone.tif', which is not in the folder" in note for note in listing.notes)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("name,pixel_size_um\na,1\n", "has no column 'image'"),
        ("image,pixel_size_um\na,-1\n", "line 2: pixel_size_um is '-1'; give a positive number"),
        ("image,pixel_size_um\na,five\n", "pixel_size_um is 'five'"),
        ("image,pixel_size_um\na,inf\n", "pixel_size_um is 'inf'"),
        ("image,pixel_size_um\n,1\n", "line 2 names no image"),
    ],
)
def test_sidecar_errors(tmp_path: Path, text: str, words: str) -> None:
    path = tmp_path / "sidecar.csv"
    path.write_text(text)
    with pytest.raises(InputError, match=words):
        read_sidecar(path)
    _picture(tmp_path / "a.png")
    listing = list_inputs(tmp_path)
    assert len(listing.items) == 1  # the pictures are still taken
    assert words.split(";")[0] in str(listing.problems[0])


def test_sidecar_that_is_no_text(tmp_path: Path) -> None:
    (tmp_path / "sidecar.csv").write_bytes(b"image\n\xff\xfe\n")
    with pytest.raises(InputError, match="is not UTF-8 text"):
        read_sidecar(tmp_path / "sidecar.csv")
