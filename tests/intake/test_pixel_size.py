"""The pixel size: from every source, in the order in which they count, in micrometres whatever the unit."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from poroscan.errors import InputError
from poroscan.intake import IntakeSettings, SidecarRow, load_picture
from poroscan.intake.headers import about, header_candidate, ome_candidate, stated_columns
from poroscan.intake.pixel_size import Candidate, choose, resolution_candidate
from poroscan.intake.stored import Resolution

GREY = np.random.default_rng(0).integers(0, 255, (40, 50)).astype(np.uint8)
PLAIN = {"banner": "none", "scale_bar": "none"}
INI = "[Scan]\r\nPixelWidth=5.39583e-008\r\nPixelHeight=5.39583e-08\r\nHorFieldsize=8.288e-05\r\n"


# Header texts: one length written in many ways ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "um"),
    [
        (INI, 0.0539583),
        ("AccFrames=1\r\nPixelSizeX=27.500e-9\r\nPixelSizeY=27.500e-9\r\n", 0.0275),
        ("AP_IMAGE_PIXEL_SIZE\r\nImage Pixel Size = 27.5 nm\r\n", 0.0275),
        ("pixel size: 0.0275 µm", 0.0275),
        ("pixel size: 0.0275 \u03bcm", 0.0275),
        ("PixelSize_nm\t27,5", 0.0275),
        ("nm_per_pixel: 27.5", 0.0275),
        ("Pixel Width = 2.75e-5 mm", 0.0275),
        ("<root><Scan><PixelSizeX unit='nm'>27.5</PixelSizeX></Scan></root>", 0.0275),
        (
            "<a><pixelSize><x><unit>m</unit><value>2.75E-08</value></x><y><value>2.75E-08</value></y></pixelSize></a>",
            0.0275,
        ),
        ("<Image PixelSizeX='2.75e-8' PixelSizeY='2.75e-8'/>", 0.0275),
        ('{"scan": {"pixel_size": {"value": 27.5, "unit": "nm"}}}', 0.0275),
        ('{"PixelSizeX": 2.75e-08}', 0.0275),
    ],
)
def test_pixel_size_in_header_texts(text: str, um: float) -> None:
    found = header_candidate(text, place="TIFF tag 40000")
    assert found is not None
    assert found.um == pytest.approx(um, rel=1e-9)
    assert found.words.startswith("microscope header (TIFF tag 40000, ")


@pytest.mark.parametrize(
    "text",
    [
        "",
        "PixelSizeX=0",
        "PixelSizeX=nan",
        "PixelSizeX=-3e-9",
        "PixelSizeX=4.96",  # no unit, and no sensible number of metres
        "PixelSizeX=5 furlongs",
        "SpotSize=16.1e-9\nHFW=8e-5\nStageX=1e-5",
        "pixel depth = 8 nm2",
        "<a><PixelSizeX>2e-9</PixelSizeX>",  # damaged XML
        "<!DOCTYPE a [<!ENTITY x '2e-9'>]><a><PixelSizeX>&x;</PixelSizeX></a>",
    ],
)
def test_what_is_no_pixel_size(text: str) -> None:
    assert header_candidate(text, place="here") is None


def test_what_else_a_header_says() -> None:
    assert about("HV=5000\nUser=A. Person\nWD=0.01\n") == {
        "voltage": "5000",
        "operator": "A. Person",
        "working distance": "0.01",
    }
    assert stated_columns("[Image]\nResolutionX=1536\n") == 1536
    assert stated_columns("nothing here") is None


@pytest.mark.parametrize(
    ("unit", "factor"), [("µm", 1.0), ("nm", 1e-3), ("mm", 1e3), ("m", 1e6), (None, 1.0), ("Å", 1e-4)]
)
def test_ome_units(unit: str | None, factor: float) -> None:
    stated = "" if unit is None else f'PhysicalSizeXUnit="{unit}" PhysicalSizeYUnit="{unit}"'
    xml = (
        '<OME xmlns="http://www.openmicroscopy.org/Schemas/OME/2016-06"><Image ID="Image:0"><Pixels ID="Pixels:0" '
        f'PhysicalSizeX="2.5" PhysicalSizeY="2.5" {stated}/></Image></OME>'
    )
    found = ome_candidate(xml)
    assert found is not None
    assert found.um == pytest.approx(2.5 * factor)


def test_ome_in_pixels_is_no_length() -> None:
    assert ome_candidate('<OME><Pixels PhysicalSizeX="1" PhysicalSizeXUnit="pixel"/></OME>') is None


# Whole files -------------------------------------------------------------------------------------------------------------


def _tiff(path: Path, text: str, *, code: int = 40000, **options: object) -> Path:
    raw = text.encode()
    tifffile.imwrite(path, GREY, extratags=[(code, 7, len(raw), raw, True)], **options)
    return path


@pytest.mark.parametrize("code", [34682, 50431, 40000, 65000])
def test_private_tags_of_files(tmp_path: Path, code: int) -> None:
    path = _tiff(
        tmp_path / "a.tif", "\x00\x01\x02" * 20 + "PixelSizeX=27.500e-9\r\nPixelSizeY=27.500e-9\r\n", code=code
    )
    size = load_picture(path, IntakeSettings(**PLAIN)).pixel_size
    assert (size.um, size.source) == (pytest.approx(0.0275, rel=1e-12), "header")


def test_header_wins_over_a_nonsense_resolution(tmp_path: Path) -> None:
    path = _tiff(tmp_path / "a.tif", INI, resolution=(109.591, 109.591), resolutionunit="INCH")
    picture = load_picture(path, IntakeSettings(**PLAIN))
    assert picture.pixel_size.um == pytest.approx(0.0539583)
    assert "pixel_size_conflict" not in picture.flags


def test_ome_tiff(tmp_path: Path) -> None:
    metadata = {
        "axes": "YX",
        "PhysicalSizeX": 50.0,
        "PhysicalSizeXUnit": "nm",
        "PhysicalSizeY": 50.0,
        "PhysicalSizeYUnit": "nm",
    }
    tifffile.imwrite(tmp_path / "a.ome.tif", GREY, metadata=metadata)
    size = load_picture(tmp_path / "a.ome.tif", IntakeSettings(**PLAIN)).pixel_size
    assert (size.um, size.source) == (pytest.approx(0.05), "ome")


@pytest.mark.parametrize(
    ("resolution", "unit", "description", "um"),
    [
        ((200_000.0, 200_000.0), "CENTIMETER", None, 0.05),
        ((254_000.0, 254_000.0), "INCH", None, 0.1),
        ((0.448139, 0.448139), "NONE", "unit=micron\n", 1 / 0.448139),
        ((72, 72), "INCH", None, None),
        ((96, 96), "INCH", None, None),
        ((109.591, 109.591), "INCH", None, None),
        ((300, 300), "INCH", None, None),
        ((2400, 2400), "INCH", None, None),
        ((1, 1), "NONE", None, None),
    ],
)
def test_resolution_tags(
    tmp_path: Path, resolution: tuple, unit: str, description: str | None, um: float | None
) -> None:
    tifffile.imwrite(
        tmp_path / "a.tif", GREY, resolution=resolution, resolutionunit=unit, description=description, metadata=None
    )
    size = load_picture(tmp_path / "a.tif", IntakeSettings(**PLAIN)).pixel_size
    if um is None:
        assert size.um is None
    else:
        assert (size.um, size.source) == (pytest.approx(um, rel=1e-4), "resolution_tag")


def test_resolution_of_png(tmp_path: Path) -> None:
    Image.fromarray(GREY).save(tmp_path / "a.png", dpi=(127_000, 127_000))
    size = load_picture(tmp_path / "a.png", IntakeSettings(**PLAIN)).pixel_size
    assert (size.um, size.source) == (pytest.approx(0.2, rel=1e-3), "resolution_tag")


def test_priority_and_conflict(tmp_path: Path) -> None:
    path = _tiff(tmp_path / "a.tif", INI, resolution=(200_000, 200_000), resolutionunit="CENTIMETER")
    row = SidecarRow("a.tif", pixel_size_um=0.054, line=2)
    from_header = load_picture(path, IntakeSettings(**PLAIN))
    assert from_header.pixel_size.source == "header"
    assert "pixel_size_conflict" in from_header.flags  # 0.0540 against 0.05 of the resolution tag: 8 %
    assert any(
        "0.05 µm from resolution tags" in n and "0.0539583 µm from microscope header" in n for n in from_header.notes
    )
    assert load_picture(path, IntakeSettings(**PLAIN), sidecar=row).pixel_size.source == "sidecar"
    option = load_picture(path, IntakeSettings(pixel_size_um=0.0541, **PLAIN), sidecar=row)
    assert (option.pixel_size.um, option.pixel_size.source) == (0.0541, "option")


@pytest.mark.parametrize(
    ("other", "conflict"), [(1.0199, False), (1.0201, True), (1 / 1.0199, False), (1 / 1.0201, True)]
)
def test_conflict_begins_at_two_percent(other: float, conflict: bool) -> None:
    chosen = choose([Candidate(1.0, "header", "header"), Candidate(other, "scale_bar", "bar")])
    assert ("pixel_size_conflict" in chosen.flags) is conflict
    assert chosen.size.um == 1.0


def test_a_doubtful_label_confirms_but_does_not_contradict() -> None:
    chosen = choose([Candidate(1.0, "header", "header"), Candidate(1000.0, "scale_bar", "bar", doubtful=True)])
    assert chosen.flags == ()
    assert any(note.startswith("not certain") for note in chosen.notes)


def test_pixels_that_are_not_square(tmp_path: Path) -> None:
    path = _tiff(tmp_path / "a.tif", "PixelSizeX=2e-8\r\nPixelSizeY=3e-8\r\n")
    with pytest.raises(InputError, match=r"a\.tif: pixels are 0\.02 µm wide and 0\.03 µm high .*; scale the picture"):
        load_picture(path, IntakeSettings(**PLAIN))
    assert load_picture(path, IntakeSettings(pixel_size_um=0.02, **PLAIN)).pixel_size.um == 0.02


def test_sensible_range_of_resolution_tags() -> None:
    def um(value: float) -> float | None:
        found = resolution_candidate(Resolution(value, value, "tag"))
        return found.um if found else None

    assert um(1e-4) == 1e-4
    assert um(20.0) == 20.0
    assert um(0.9e-4) is None
    assert um(20.1) is None


def test_a_header_of_another_width_is_noted(tmp_path: Path) -> None:
    path = _tiff(tmp_path / "a.tif", INI + "ResolutionX=1536\r\n")
    assert any("1536 columns, the file has 50" in note for note in load_picture(path, IntakeSettings(**PLAIN)).notes)
