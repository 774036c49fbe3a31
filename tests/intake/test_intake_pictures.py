"""Pictures come in with the values, depth and orientation they were written with, or with one clear line."""

from __future__ import annotations

import contextlib
import os
import struct
import zlib
from collections.abc import Callable
from contextlib import AbstractContextManager
from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from poroscan.errors import InputError
from poroscan.intake import IntakeSettings, load_picture
from poroscan.intake.stored import upright
from poroscan.quantities import FLAGS

PLAIN = IntakeSettings(banner="none", scale_bar="none")


@pytest.fixture
def ramp(rng: np.random.Generator) -> np.ndarray:
    return rng.integers(0, 256, (30, 40)).astype(np.uint8)


# Write -> read is the identity -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("suffix", [".png", ".bmp", ".tif"])
def test_eight_bits_are_kept(tmp_path: Path, ramp: np.ndarray, suffix: str) -> None:
    Image.fromarray(ramp).save(tmp_path / f"a{suffix}")
    picture = load_picture(tmp_path / f"a{suffix}", PLAIN)
    np.testing.assert_array_equal(picture.grey, ramp.astype(np.float32) / np.float32(255))
    assert picture.pixel_size.um is None
    assert "no_pixel_size" in picture.flags


@pytest.mark.parametrize(
    "options",
    [
        {},
        {"tile": (16, 16)},
        {"compression": "zlib"},
        {"compression": "lzw", "predictor": True},
        {"bigtiff": True},
        {"byteorder": ">"},
        {"rowsperstrip": 7},
    ],
)
@pytest.mark.parametrize("dtype", ["u1", "u2", "u4", "f4"])
def test_tiff_of_every_kind(tmp_path: Path, rng: np.random.Generator, options: dict, dtype: str) -> None:
    if dtype == "f4":
        values = rng.normal(size=(48, 64)).astype(np.float32)
        expected = (values - values.min()) / (values.max() - values.min())
    else:
        top = np.iinfo(dtype).max
        values = rng.integers(0, top, (48, 64), endpoint=True, dtype=dtype)
        values[0, :2] = 0, top
        expected = values / float(top)
    if dtype == "f4" and options.get("predictor"):
        options = {"compression": "lzw"}
    tifffile.imwrite(tmp_path / "a.tif", values, **options)
    np.testing.assert_allclose(load_picture(tmp_path / "a.tif", PLAIN).grey, expected, atol=1e-6)


def test_sixteen_bit_png_keeps_its_depth(tmp_path: Path, rng: np.random.Generator) -> None:
    values = rng.integers(0, 65536, (20, 30)).astype(np.uint16)
    Image.fromarray(values).save(tmp_path / "a.png")
    np.testing.assert_allclose(load_picture(tmp_path / "a.png", PLAIN).grey, values / 65535, atol=1e-7)


def test_sixteen_bit_colour_png_keeps_its_depth(tmp_path: Path) -> None:
    import imagecodecs

    values = np.full((8, 8, 3), 1000, np.uint16)
    values[:4] = 1001  # the same in 8 bits
    (tmp_path / "a.png").write_bytes(imagecodecs.png_encode(values))
    grey = load_picture(tmp_path / "a.png", PLAIN).grey
    np.testing.assert_allclose(grey[[0, 7], 0], [1001 / 65535, 1000 / 65535], rtol=1e-6)


def test_twelve_bits_in_sixteen_are_noted_and_linear(tmp_path: Path) -> None:
    values = np.linspace(0, 4095, 400).astype(np.uint16).reshape(20, 20)
    tifffile.imwrite(tmp_path / "a.tif", values)
    picture = load_picture(tmp_path / "a.tif", PLAIN)
    np.testing.assert_allclose(picture.grey, values / 65535, atol=1e-7)
    assert any("only the values 0 to 4095" in note for note in picture.notes)


def test_one_bit(tmp_path: Path, ramp: np.ndarray) -> None:
    for suffix in (".png", ".tif", ".bmp"):
        Image.fromarray(ramp > 128).save(tmp_path / f"a{suffix}")
        np.testing.assert_array_equal(load_picture(tmp_path / f"a{suffix}", PLAIN).grey, ramp > 128)


# Colour ------------------------------------------------------------------------------------------------------------------


def test_colour_becomes_luminance(tmp_path: Path) -> None:
    # ITU-R BT.601-7: Y = 0.299 R + 0.587 G + 0.114 B
    colours = np.array([[[255, 0, 0], [0, 255, 0], [0, 0, 255], [10, 200, 90]]], np.uint8).repeat(4, axis=0)
    Image.fromarray(colours).save(tmp_path / "a.png")
    picture = load_picture(tmp_path / "a.png", PLAIN)
    np.testing.assert_allclose(picture.grey[0] * 255, np.rint([76.245, 149.685, 29.07, 130.65]), atol=1e-4)
    assert "colour became luminance" in picture.notes


def test_equal_channels_and_alpha_lose_nothing(tmp_path: Path, ramp: np.ndarray) -> None:
    rgba = np.dstack([ramp, ramp, ramp, np.full_like(ramp, 7)])
    Image.fromarray(rgba).save(tmp_path / "a.png")
    tifffile.imwrite(tmp_path / "a.tif", rgba, photometric="rgb", extrasamples=["unassalpha"])
    for name in ("a.png", "a.tif"):
        picture = load_picture(tmp_path / name, PLAIN)
        np.testing.assert_array_equal(picture.grey, ramp.astype(np.float32) / np.float32(255))
        assert "alpha or extra channels were dropped" in picture.notes


def test_cmyk(tmp_path: Path) -> None:
    ink = np.zeros((16, 16, 4), np.uint8)
    ink[:, 8:, 3] = 255  # black on the right
    picture = Image.merge("CMYK", [Image.fromarray(np.ascontiguousarray(ink[..., i])) for i in range(4)])
    picture.save(tmp_path / "a.jpg", quality=100)
    picture.save(tmp_path / "a.tif")
    for name in ("a.jpg", "a.tif"):
        picture = load_picture(tmp_path / name, PLAIN)
        np.testing.assert_allclose(picture.grey[:, [0, 15]], [[1, 0]] * 16, atol=0.02)
        assert "CMYK colour became luminance" in picture.notes


def test_palette_and_white_is_zero(tmp_path: Path, ramp: np.ndarray) -> None:
    indexed = Image.fromarray(ramp).convert("P")
    indexed.putpalette([255 - i for i in range(256) for _ in range(3)])
    indexed.save(tmp_path / "a.png")
    tifffile.imwrite(tmp_path / "b.tif", ramp, photometric="miniswhite")
    for name in ("a.png", "b.tif"):
        np.testing.assert_allclose(load_picture(tmp_path / name, PLAIN).grey, (255 - ramp) / 255.0, atol=1e-6)


# Orientation, pages, extension -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("orientation", range(1, 9))
def test_orientation_agrees_with_pillow(orientation: int, ramp: np.ndarray) -> None:
    from PIL import ImageOps

    picture = Image.fromarray(ramp)
    picture.getexif()[274] = orientation
    np.testing.assert_array_equal(upright(ramp, orientation=orientation), np.asarray(ImageOps.exif_transpose(picture)))


def test_orientation_of_files_is_applied(tmp_path: Path) -> None:
    values = np.arange(12, dtype=np.uint8).reshape(3, 4) * 20
    tifffile.imwrite(tmp_path / "a.tif", values, extratags=[(274, 3, 1, 6, True)])
    picture = load_picture(tmp_path / "a.tif", PLAIN)
    np.testing.assert_allclose(
        picture.grey * 255, np.rot90(values, -1), atol=1e-4
    )  # 6: turn clockwise to see it upright


def test_a_hundred_pages(tmp_path: Path, ramp: np.ndarray) -> None:
    with tifffile.TiffWriter(tmp_path / "a.tif") as file:
        for number in range(100):
            file.write(np.full((8, 8), number, np.uint8) + ramp[:8, :8] // 4, contiguous=False)
    first = load_picture(tmp_path / "a.tif", PLAIN)
    assert "page 1 of 100 is measured" in first.notes
    third = load_picture(tmp_path / "a.tif", IntakeSettings(page=3, banner="none"))
    np.testing.assert_allclose((third.grey - first.grey) * 255, 2, atol=1e-4)
    with pytest.raises(InputError, match=r"a\.tif: has 100 pages, so no page 101; set another page"):
        load_picture(tmp_path / "a.tif", IntakeSettings(page=101))


def test_content_decides_not_the_extension(tmp_path: Path, ramp: np.ndarray) -> None:
    Image.fromarray(ramp).save(tmp_path / "a.png")
    (tmp_path / "a.png").rename(tmp_path / "a.tif")
    picture = load_picture(tmp_path / "a.tif", PLAIN)
    np.testing.assert_allclose(picture.grey * 255, ramp, atol=1e-4)
    assert "is a PNG file in spite of its extension" in picture.notes


# Pixels that are no numbers ----------------------------------------------------------------------------------------------


def test_nan_and_infinite_pixels_take_the_median_and_are_flagged(tmp_path: Path) -> None:
    values = np.linspace(0, 1, 400, dtype=np.float32).reshape(20, 20)
    values[3, 4], values[5, 6] = np.nan, np.inf
    tifffile.imwrite(tmp_path / "a.tif", values)
    picture = load_picture(tmp_path / "a.tif", PLAIN)
    assert np.isfinite(picture.grey).all()
    assert picture.grey[3, 4] == picture.grey[5, 6] == pytest.approx(0.5, abs=0.01)
    assert "bad_pixels" in picture.flags
    values[:2] = np.nan
    tifffile.imwrite(tmp_path / "a.tif", values)
    with pytest.raises(InputError, match=r"a\.tif: 42 of 400 pixels are NaN or infinite; export"):
        load_picture(tmp_path / "a.tif", PLAIN)


def test_huge_float_values_do_not_overflow(tmp_path: Path) -> None:
    values = np.array([[-1.7e308, 0.0], [1.7e308, 0.0]])
    tifffile.imwrite(tmp_path / "a.tif", values)
    np.testing.assert_allclose(load_picture(tmp_path / "a.tif", PLAIN).grey, [[0, 0.5], [1, 0.5]], atol=1e-6)


@pytest.mark.parametrize("value", [0, 77, 255])
def test_constant_and_one_pixel(tmp_path: Path, value: int) -> None:
    Image.fromarray(np.full((50, 60), value, np.uint8)).save(tmp_path / "a.png")
    Image.fromarray(np.full((1, 1), value, np.uint8)).save(tmp_path / "b.png")
    for name in ("a.png", "b.png"):
        picture = load_picture(tmp_path / name)
        assert "constant_picture" in picture.flags
        assert set(picture.flags) <= set(FLAGS)


# Bad files: one line each ------------------------------------------------------------------------------------------------


def _png_chunk(kind: bytes, data: bytes) -> bytes:
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


def _bad_files(folder: Path) -> dict[str, tuple[bytes, str]]:
    values = np.random.default_rng(1).integers(0, 255, (64, 64)).astype(np.uint8)
    good = {}
    for suffix in ("png", "jpg", "bmp", "tif"):
        Image.fromarray(values).save(folder / f"good.{suffix}")
        good[suffix] = (folder / f"good.{suffix}").read_bytes()
        (folder / f"good.{suffix}").unlink()
    giant = struct.pack(">II", 100_000, 100_000)
    return {
        "zero.tif": (b"", "is empty"),
        "nul.png": (bytes(500), "only zero bytes"),
        "text.tif": (b"not a picture at all, just words\n" * 3, "is a text file"),
        "rubbish.jpg": (bytes(range(128, 256)), "no picture header"),
        "cut.png": (good["png"][:-1500], "truncated or damaged"),
        "cut.jpg": (good["jpg"][: len(good["jpg"]) // 2], "truncated or damaged"),
        "cut.bmp": (good["bmp"][:-900], "truncated or damaged"),
        "cut.tif": (good["tif"][:600], "truncated|corrupt"),
        "cut8.tif": (good["tif"][:8], "corrupt|without a picture"),
        "head.png": (good["png"][:20], "corrupt PNG header"),
        "head.jpg": (good["jpg"][:12], "corrupt JPEG header"),
        "head.bmp": (good["bmp"][:16], "corrupt BMP header"),
        "wide0.png": (
            b"\x89PNG\r\n\x1a\n"
            + _png_chunk(b"IHDR", struct.pack(">II", 0, 5) + b"\x08\0\0\0\0")
            + _png_chunk(b"IEND", b""),
            "corrupt PNG header|0 pixels|× 0",
        ),
        "giant.png": (
            b"\x89PNG\r\n\x1a\n" + _png_chunk(b"IHDR", giant + b"\x08\0\0\0\0") + _png_chunk(b"IDAT", b"x"),
            "100000 × 100000 pixels, above the limit of 200000000",
        ),
        "movie.gif": (b"GIF89a" + bytes(20), "is a GIF file"),
        "crc.png": (good["png"][:60] + b"\xff\xff\xff" + good["png"][63:], "truncated or damaged|corrupt"),
    }


def test_bad_files_cost_one_clear_line_each(tmp_path: Path) -> None:
    for name, (data, reason) in _bad_files(tmp_path).items():
        path = tmp_path / name
        path.write_bytes(data)
        with pytest.raises(InputError, match=reason) as caught:
            load_picture(path)
        line = str(caught.value)
        assert line.startswith(f"{path}: "), line
        assert "; " in line, line
        assert "\n" not in line, line
        assert len(line) < 300 + len(str(path)), line


def test_truncated_strips_are_refused(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "a.tif", np.ones((512, 512), np.uint16), rowsperstrip=32, compression="zlib")
    data = (tmp_path / "a.tif").read_bytes()
    tifffile.imwrite(tmp_path / "b.tif", np.ones((512, 512), np.uint16), rowsperstrip=32)
    (tmp_path / "b.tif").write_bytes((tmp_path / "b.tif").read_bytes()[:-70_000])
    with pytest.raises(InputError, match=r"is truncated \(3 of 16 strips or tiles are missing\)"):
        load_picture(tmp_path / "b.tif")
    broken = bytearray(data)
    broken[-40:] = bytes(40)
    (tmp_path / "a.tif").write_bytes(broken)
    with pytest.raises(InputError, match="truncated or damaged"):
        load_picture(tmp_path / "a.tif")


def test_tiff_header_of_ten_gigapixels_is_refused_before_decoding(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "a.tif", np.ones((10, 10), np.uint8))
    data = bytearray((tmp_path / "a.tif").read_bytes())
    with tifffile.TiffFile(tmp_path / "a.tif") as file:
        for code in (256, 257):
            tag = file.pages[0].tags[code]
            struct.pack_into("<HI", data, tag.offset + 2, 4, 1)
            struct.pack_into("<I", data, tag.offset + 8, 100_000)
    (tmp_path / "a.tif").write_bytes(data)
    with pytest.raises(InputError, match="above the limit of 200000000; crop or scale it, or raise max_pixels"):
        load_picture(tmp_path / "a.tif")


def test_every_cut_and_every_changed_byte_gives_a_typed_error_or_a_picture(
    tmp_path: Path, rng: np.random.Generator
) -> None:
    values = rng.integers(0, 255, (24, 24)).astype(np.uint8)
    path = tmp_path / "a"
    for suffix, options in (("png", {}), ("jpg", {}), ("bmp", {}), ("tif", {}), ("tif", {"compression": "tiff_lzw"})):
        Image.fromarray(values).save(tmp_path / f"good.{suffix}", **options)
        data = (tmp_path / f"good.{suffix}").read_bytes()
        cuts = [data[: int(n)] for n in rng.integers(1, len(data), 25)]
        changed = []
        for place in rng.integers(0, min(len(data), 400), 60):
            bytes_ = bytearray(data)
            bytes_[place] = rng.integers(0, 256)
            changed.append(bytes(bytes_))
        for variant in cuts + changed:
            path.write_bytes(variant)
            # Any other type of error fails the test by itself.
            with contextlib.suppress(InputError):
                picture = load_picture(path, IntakeSettings(scale_bar="none", max_pixels=10_000_000))
                assert np.isfinite(picture.grey).all()


def test_what_is_no_file(tmp_path: Path) -> None:
    (tmp_path / "link.png").symlink_to(tmp_path / "nowhere.png")
    with pytest.raises(
        InputError, match=r"link\.png: is a link to a file that does not exist; mend or remove the link"
    ):
        load_picture(tmp_path / "link.png")
    with pytest.raises(InputError, match=r"gone\.png: does not exist; check the name"):
        load_picture(tmp_path / "gone.png")
    with pytest.raises(InputError, match="is a folder, not a file"):
        load_picture(tmp_path)
    with pytest.raises(InputError, match="is a device or pipe"):
        load_picture("/dev/null")


@pytest.mark.skipif(os.name == "nt", reason="Windows has no such access rights")
def test_unreadable_permission(
    open_folder: Path, ramp: np.ndarray, plain_user: Callable[[], AbstractContextManager[None]]
) -> None:
    path = open_folder / "a.png"
    Image.fromarray(ramp).save(path)
    path.chmod(0o644)
    with plain_user():
        assert load_picture(path).grey.shape == ramp.shape
    path.chmod(0)
    with plain_user(), pytest.raises(InputError, match=r"a\.png: may not be read; change its access rights"):
        load_picture(path)


def test_hostile_names_stay_on_one_line(tmp_path: Path) -> None:
    path = tmp_path / "a\nb<script>\x1b[2J.png"
    path.write_bytes(b"")
    with pytest.raises(InputError) as caught:
        load_picture(path)
    assert "\n" not in str(caught.value)
    assert "\x1b" not in str(caught.value)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"pixel_size_um": 0.0}, "pixel_size_um must be a positive number"),
        ({"pixel_size_um": float("nan")}, "pixel_size_um must be a positive number"),
        ({"banner": "top"}, "banner must be 'auto', 'none' or a number of rows"),
        ({"banner": -1}, "at least 0 rows"),
        ({"page": 0}, "page must be at least 1"),
        ({"max_pixels": 0}, "max_pixels must be at least 1"),
        ({"scale_bar": "yes"}, "scale_bar must be 'auto' or 'none'"),
    ],
)
def test_settings_are_checked(options: dict, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        IntakeSettings(**options)
