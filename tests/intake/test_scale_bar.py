"""The scale bar is measured between its outer ends, and its label is read, whatever its form."""

from __future__ import annotations

import importlib.util

import numpy as np
import pytest
from drawn_pictures import FONTS, burnt_in, texture, with_banner
from hypothesis import given, settings
from hypothesis import strategies as st
from PIL import Image
from scipy import ndimage

from poroscan.errors import MissingExtraError
from poroscan.intake import IntakeSettings, SidecarRow, load_picture, ocr
from poroscan.intake.banner import find_banner
from poroscan.intake.bar_reading import read_scale_bar
from poroscan.intake.scale_bar import _free, _strokes, find_scale_bars
from poroscan.intake.scale_label import parse_label, plausible

needs_ocr = pytest.mark.skipif(importlib.util.find_spec("onnxruntime") is None, reason="extra ocr is not installed")


def _grey(values: np.ndarray) -> np.ndarray:
    return values.astype(np.float32) / 255


# Length ------------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["plain", "ticks", "ruler", "broken"])
@pytest.mark.parametrize(("ground", "ink"), [(0, 255), (96, 255), (255, 0)])
def test_bars_on_banners(rng: np.random.Generator, kind: str, ground: int, ink: int) -> None:
    for length in (201, 258, 317):
        drawn = with_banner(
            texture(300, 640, rng), length=length, label="5 µm", um=5, kind=kind, ground=ground, ink=ink, line=False
        )
        best = find_scale_bars(_grey(drawn.grey), banner_rows=64)[0]
        assert best.kind == kind
        assert best.length == pytest.approx(length, abs=0.1)


def test_a_ruler_of_dots_counts_between_first_and_last(rng: np.random.Generator) -> None:
    drawn = with_banner(texture(300, 640, rng), length=250, label="5 µm", um=5, kind="dots")
    assert find_scale_bars(_grey(drawn.grey), banner_rows=64)[0].length == pytest.approx(250, abs=0.1)


@pytest.mark.parametrize(("ink", "box"), [(255, None), (0, None), (0, 255), (255, 0)])
def test_bars_burnt_into_the_picture(rng: np.random.Generator, ink: int, box: int | None) -> None:
    for kind in ("plain", "ticks"):
        drawn = burnt_in(
            texture(400, 640, rng, kind="flat"), length=170, label="5 µm", um=5, kind=kind, ink=ink, box=box
        )
        found = find_scale_bars(_grey(drawn.grey), banner_rows=0)
        assert min(abs(bar.length - 170) for bar in found) < 0.5


@settings(max_examples=25, deadline=None)
@given(st.floats(80, 220), st.floats(20.0, 40.0))
def test_ends_are_placed_between_pixels(length: float, left: float) -> None:
    # Truth: a bar of real length, sampled by area (antialiased), on a flat banner.
    edge = np.arange(321, dtype=float)
    cover = np.clip(np.minimum(edge[1:], left + length) - np.maximum(edge[:-1], left), 0, 1)
    strip = np.zeros((60, 320), np.float32)
    strip[20:24] = cover
    bars = find_scale_bars(strip, banner_rows=60)
    assert bars[0].length == pytest.approx(length, abs=0.02)


def test_doubling_the_picture_doubles_the_bar(rng: np.random.Generator) -> None:
    drawn = with_banner(texture(300, 512, rng), length=205, label="5 µm", um=5, kind="ticks")
    twice = ndimage.zoom(drawn.grey.astype(float), 2, order=1, grid_mode=True, mode="nearest")
    small = find_scale_bars(_grey(drawn.grey), banner_rows=64)[0].length
    assert find_scale_bars(_grey(twice), banner_rows=128)[0].length == pytest.approx(2 * small, rel=0.01)


def _plain_strokes(ink: np.ndarray) -> set[tuple[int, int, int, int]]:
    """Row by row and run by run, as the definition says: strokes of ink with background around."""
    strokes: list[list[int]] = []
    for row in range(len(ink)):
        padded = np.concatenate([[False], ink[row], [False]])
        steps = np.diff(padded.astype(int))
        for start, end in zip(np.flatnonzero(steps == 1), np.flatnonzero(steps == -1), strict=True):
            if end - start < 8:
                continue
            for s in strokes:
                if s[1] == row and abs(s[2] - start) <= 2 and abs(s[3] - end) <= 2:
                    s[1] = row + 1
                    break
            else:
                strokes.append([row, row + 1, int(start), int(end)])

    def dense(row: int, left: int, right: int) -> bool:
        return 0 <= row < len(ink) and ink[row, left + 1 : right - 1].mean() > 0.35

    return {
        (top, bottom, left, right)
        for top, bottom, left, right in strokes
        if bottom - top <= max(2, 0.25 * (right - left)) and left > 0 and right < ink.shape[1]
        if not dense(top - 2, left, right) and not dense(bottom + 1, left, right)
    }


def test_strokes_are_those_of_the_plain_definition(rng: np.random.Generator) -> None:
    found = 0
    for number in range(60):
        rows, columns = rng.integers(1, 80), rng.integers(1, 160)
        ink = ndimage.gaussian_filter(rng.standard_normal((rows, columns)), (0.3, rng.uniform(1, 9))) > 0.01 * number
        boxes = {(s.top, s.bottom, s.left, s.right) for s in _free(ink, _strokes(ink))}
        assert boxes == _plain_strokes(ink)
        found += len(boxes)
    assert found > 100


@pytest.mark.parametrize("kind", ["porous", "disc", "black", "flat"])
def test_pictures_without_a_bar_give_no_pixel_size(rng: np.random.Generator, kind: str) -> None:
    reading = read_scale_bar(_grey(texture(400, 500, rng, kind=kind)), banner_rows=0)
    assert reading.candidate is None
    assert reading.flags == ()


# Label -------------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "um"),
    [
        ("20 µm", 20), ("20 \u03bcm", 20), ("5um", 5), ("1.0 mm", 1000), ("500 nm", 0.5), ("2,5 µm", 2.5), ("1 cm", 10_000),
        ("20 pm", 20), ("5O µm", 50), ("l0 um", 10), ("20lm", 20), ("100 µ", 100), ("— 300nm —", 0.3), ("|50 microns|", 50),
        ("10 urn", 10), ("2 mrn", 2000),
    ],
)  # fmt: skip
def test_labels(text: str, um: float) -> None:
    assert parse_label(text) == pytest.approx(um)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "µm",
        "20",
        "WD 10.9 mm",
        "HFW 3.25 mm",
        "5.00 kV",
        "10:34:15",
        "0 µm",
        "2 500 x",
        "1234.5 µm",
        "20 s",
        "m",
        "20 min",
    ],
)
def test_what_is_no_label(text: str) -> None:
    assert parse_label(text) is None


def test_plausible_lengths() -> None:
    assert all(plausible(um) for um in (0.5, 1, 2.5, 20, 300, 1000, 0.25))
    assert not any(plausible(um) for um in (3.25e3 + 1, 123, 10.9 + 0.01))


@needs_ocr
def test_labels_are_read_offline(rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch) -> None:
    import socket

    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("a network connection was tried")

    monkeypatch.setattr(socket.socket, "connect", refuse)
    cases = [("20 µm", 20, 15), ("500 nm", 0.5, 22), ("1.0 mm", 1000, 30), ("100 µm", 100, 18), ("2.50 µm", 2.5, 26)]
    for number, (label, um, size) in enumerate(cases):
        face = FONTS[number % len(FONTS)]
        for ground, ink in ((0, 255), (255, 0)):
            drawn = with_banner(
                texture(240, 640, rng),
                length=330,
                label=label,
                um=um,
                size=size,
                face=face,
                ground=ground,
                ink=ink,
                rows=80,
            )
            reading = read_scale_bar(_grey(drawn.grey), banner_rows=80)
            assert reading.um == um, reading
            assert reading.candidate is not None
            assert reading.candidate.um == pytest.approx(um / 330, rel=0.002)


@needs_ocr
def test_a_burnt_in_bar_is_read(rng: np.random.Generator, tmp_path) -> None:
    drawn = burnt_in(texture(480, 640, rng, kind="disc"), length=160, label="50 µm", um=50)
    Image.fromarray(drawn.grey).save(tmp_path / "a.jpg", quality=90)
    picture = load_picture(tmp_path / "a.jpg")
    assert picture.pixel_size.source == "scale_bar"
    assert picture.pixel_size.um == pytest.approx(50 / 160, rel=0.01)
    assert 0 < picture.pixel_size.relative_uncertainty < 0.01
    assert picture.banner_rows == 0


def test_a_stated_length_needs_no_reader(rng: np.random.Generator, tmp_path) -> None:
    drawn = with_banner(texture(300, 640, rng), length=250, label="20 µm", um=20)
    Image.fromarray(drawn.grey).save(tmp_path / "a.png")
    by_row = load_picture(tmp_path / "a.png", IntakeSettings(ocr=False), sidecar=SidecarRow("a.png", scale_bar_um=20.0))
    assert (by_row.pixel_size.source, by_row.pixel_size.um) == ("scale_bar", pytest.approx(20 / 250, rel=1e-3))
    unread = load_picture(tmp_path / "a.png", IntakeSettings(ocr=False))
    assert {"scale_label_unread", "no_pixel_size"} <= set(unread.flags)
    assert unread.pixel_size.um is None
    assert any("250.0 pixels was found, but its label was not read" in note for note in unread.notes)


@pytest.mark.parametrize("read", [False, True])
def test_a_stated_length_goes_to_the_drawn_bar_not_to_the_specimen(rng: np.random.Generator, read: bool) -> None:
    # pores, their walls and the margin of the label's box make strokes too
    for kind in ("porous", "disc"):
        for ink, box in ((255, 10), (0, 240)):
            picture = texture(500, 700, rng, kind=kind, noise=4)
            drawn = burnt_in(picture, length=138, label="200 µm", um=200, ink=ink, box=box, thick=5, below=False)
            reading = read_scale_bar(_grey(drawn.grey), banner_rows=0, stated_um=200.0, use_ocr=read)
            assert reading.candidate is not None
            assert reading.candidate.um == pytest.approx(200 / 138, rel=0.005)


def test_without_the_extra_the_bar_is_flagged(rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(ocr, "_model_path", lambda: None)
    ocr._model.cache_clear()
    drawn = with_banner(texture(300, 640, rng), length=250, label="20 µm", um=20)
    assert find_banner(_grey(drawn.grey)) == 64
    assert read_scale_bar(_grey(drawn.grey), banner_rows=64).flags == ("scale_label_unread",)
    with pytest.raises(MissingExtraError, match=r"install poroscan\[ocr\]"):
        ocr.read_line(np.zeros((20, 60), np.float32))


@needs_ocr
def test_a_bar_that_contradicts_the_sidecar_is_a_conflict(rng: np.random.Generator, tmp_path) -> None:
    drawn = with_banner(texture(300, 640, rng), length=250, label="20 µm", um=20)
    Image.fromarray(drawn.grey).save(tmp_path / "a.png")
    agree = load_picture(tmp_path / "a.png", sidecar=SidecarRow("a.png", pixel_size_um=0.0805))
    assert "pixel_size_conflict" not in agree.flags
    differ = load_picture(tmp_path / "a.png", sidecar=SidecarRow("a.png", pixel_size_um=0.09))
    assert "pixel_size_conflict" in differ.flags
    assert differ.pixel_size.um == 0.09


@needs_ocr
@pytest.mark.slow
def test_many_labels(rng: np.random.Generator) -> None:
    """200 banners of varied form: at most 2 % unread, none misread by another number."""
    labels = [
        ("20 µm", 20),
        ("5um", 5),
        ("1.0 mm", 1000),
        ("500 nm", 0.5),
        ("100 µm", 100),
        ("2.50µm", 2.5),
        ("300nm", 0.3),
    ]
    unread, wrong = 0, []
    for _ in range(200):
        label, um = labels[rng.integers(len(labels))]
        ground = int(rng.choice([0, 96, 255]))
        drawn = with_banner(
            texture(120, 800, rng, noise=6),
            length=int(rng.integers(300, 460)),
            label=label,
            um=um,
            kind=str(rng.choice(["plain", "ticks", "ruler", "broken"])),
            size=int(rng.integers(20, 33)),
            rows=90,
            face=FONTS[rng.integers(4)],
            ground=ground,
            ink=0 if ground == 255 else 255,
        )
        reading = read_scale_bar(_grey(drawn.grey), banner_rows=90)
        unread += reading.um is None
        if reading.um not in (None, um) or (reading.um and abs(reading.bar.length / drawn.bar_px - 1) > 0.01):
            wrong.append((label, reading))
    assert wrong == []
    assert unread <= 4
