"""Pixel sizes written in headers: OME-XML, and the text that microscopes put into files.

The text is read by its public form (INI lines, ``key: value`` lines, XML or JSON), not by maker: a key counts when, stripped to
letters and digits, it reads like ``PixelSizeX`` or ``PixelWidth``. A number without a unit is taken as metres where it is
below 0.001, as the SI unit that such headers use; larger numbers without a unit are left alone.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator, Mapping
from types import MappingProxyType
from xml.etree import ElementTree

from poroscan.intake.pixel_size import Candidate

#: Micrometres per unit, by the unit's letters in lower case (the micro and ångström signs in each of their code points).
UNIT_UM: Mapping[str, float] = MappingProxyType(
    {
        "m": 1e6, "meter": 1e6, "metre": 1e6, "cm": 1e4, "mm": 1e3, "millimeter": 1e3, "um": 1.0, "µm": 1.0, "μm": 1.0,
        "micron": 1.0, "microns": 1.0, "micrometer": 1.0, "micrometre": 1.0, "nm": 1e-3, "nanometer": 1e-3, "nanometre": 1e-3,
        "pm": 1e-6, "å": 1e-4, "angstrom": 1e-4, "in": 25400.0, "inch": 25400.0,
    }
)  # fmt: skip

_X_KEY = re.compile(
    r"(?:ap|image|scan|x|sem|spatial|real)?(?:pixel|voxel)(?:size|width|spacing|pitch)(?:x|horizontal)?$|physicalsizex$"
)
_Y_KEY = re.compile(
    r"(?:image|scan|y|sem)?(?:pixel|voxel)(?:size|spacing|pitch)(?:y|vertical)$|(?:pixel|voxel)height$|ypixelsize$|physicalsizey$"
)
_UNIT_IN_KEY = re.compile(r"(um|nm|mm|microns?|micrometers?|nanometers?)$")
_PER_PIXEL = re.compile(r"(um|nm|microns?|micrometers?|nanometers?)perpixel$")
_VALUE = re.compile(r"\s*([-+]?\d[\d.]*(?:,\d+)?(?:[eE][-+]?\d+)?)\s*\[?([A-Za-zµμÅå]*)\]?\s*$")
_COLUMNS_KEY = re.compile(r"(?:image)?resolutionx$|(?:image|data|store)?(?:sizex|width)(?:px|pixels)?$")
_LARGEST_BARE_METRES = 1e-3
_MAX_PAIRS = 20_000

#: Keys that say who, how and when, for ``Picture.header``.
_ABOUT = MappingProxyType(
    {
        "hv": "voltage", "eht": "voltage", "apactualkv": "voltage", "acceleratingvoltage": "voltage", "wd": "working distance",
        "workingdistance": "working distance", "detector": "detector", "magnification": "magnification", "mag": "magnification",
        "user": "operator", "username": "operator", "operator": "operator", "date": "date", "systemtype": "instrument",
        "device": "instrument", "instrument": "instrument", "spotsize": "spot", "spot": "spot", "dwelltime": "dwell time",
    }
)  # fmt: skip


def header_candidate(text: str, *, place: str) -> Candidate | None:
    """Pixel size in a header text, or None where it holds none.

    Parameters
    ----------
    text
        Header as readable text.
    place
        Where it stands (``TIFF tag 34682``), for the note.
    """
    x: tuple[float, str] | None = None
    y: float | None = None
    for key, value, unit in _pairs(text):
        name = re.sub(r"[^a-z0-9]", "", key.lower())
        um = _micrometres(name, value, unit)
        if um is None:
            continue
        if x is None and _matches(_X_KEY, name):
            x = (um, key)
        elif y is None and _matches(_Y_KEY, name):
            y = um
    if x is None:
        return None
    return Candidate(x[0], "header", f"microscope header ({place}, {x[1].strip()})", y_um=y)


def stated_columns(text: str) -> int | None:
    """Columns that a header says the picture has; None where it says nothing."""
    for key, value, _ in _pairs(text):
        if _COLUMNS_KEY.match(re.sub(r"[^a-z0-9]", "", key.lower())) and re.fullmatch(r"\s*\d{2,6}\s*", value):
            return int(value)
    return None


def about(text: str) -> dict[str, str]:
    """Instrument, voltage, operator, date and the like, as they stand in a header."""
    found: dict[str, str] = {}
    for key, value, _ in _pairs(text):
        name = _ABOUT.get(re.sub(r"[^a-z0-9]", "", key.lower()))
        if name and value.strip():
            found.setdefault(name, " ".join(value.split())[:200])
    return found


def ome_candidate(xml: str) -> Candidate | None:
    """``PhysicalSizeX`` of the first picture of an OME-XML text, in micrometres; None where it states none."""
    root = _parsed(xml)
    if root is None:
        return None
    for element in root.iter():
        if element.tag.rpartition("}")[2] != "Pixels":
            continue
        sizes = [_ome_length(element, axis) for axis in "XY"]
        if sizes[0] is None:
            return None
        return Candidate(sizes[0], "ome", "OME PhysicalSizeX", y_um=sizes[1])
    return None


def ome_spacing(xml: str) -> tuple[float, ...] | None:
    """Micrometres along (z, y, x) of the first picture of an OME-XML text; (y, x) where no z is stated; None without any."""
    root = _parsed(xml)
    for element in root.iter() if root is not None else ():
        if element.tag.rpartition("}")[2] == "Pixels":
            sizes = [_ome_length(element, axis) for axis in "ZYX"]
            if sizes[1] is None or sizes[2] is None:
                return None
            return tuple(s for s in sizes if s is not None)
    return None


def _ome_length(element: ElementTree.Element, axis: str) -> float | None:
    unit = UNIT_UM.get(element.get(f"PhysicalSize{axis}Unit", "µm").strip().lower())
    value = _number(element.get(f"PhysicalSize{axis}", ""))
    return value * unit if value is not None and unit is not None else None


def _matches(pattern: re.Pattern[str], name: str) -> bool:
    bare = _UNIT_IN_KEY.sub("", name)
    return bool(pattern.match(name) or pattern.match(bare) or (pattern is _X_KEY and _PER_PIXEL.match(name)))


def _micrometres(name: str, value: str, unit: str) -> float | None:
    if "pixel" not in name and "voxel" not in name and "physicalsize" not in name:
        return None
    match = _VALUE.match(value)
    number = _number(match[1]) if match else None
    if match is None or number is None:
        return None
    in_key = _PER_PIXEL.match(name) or _UNIT_IN_KEY.search(name)
    word = (match[2] or unit or (in_key[1] if in_key else "")).strip().lower()
    if word:
        factor = UNIT_UM.get(word, UNIT_UM.get(word.removesuffix("s")))
        return number * factor if factor is not None else None
    return number * 1e6 if number < _LARGEST_BARE_METRES else None


def _number(text: str) -> float | None:
    """A positive finite number, with a decimal point or comma; None for anything else."""
    try:
        value = float(text.replace(",", ".").strip())
    except ValueError:
        return None
    return value if math.isfinite(value) and value > 0 else None


def _pairs(text: str) -> Iterator[tuple[str, str, str]]:
    """(key, value, unit) of every entry of a header."""
    for count, pair in enumerate(_all_pairs(text)):
        if count >= _MAX_PAIRS:
            return
        yield pair


def _all_pairs(text: str) -> Iterator[tuple[str, str, str]]:
    start = text.find("<")
    if start >= 0 and ">" in text:
        root = _parsed(text[start : text.rfind(">") + 1])
        if root is not None:
            yield from _xml_pairs(root, ())
            return
    if text.lstrip().startswith("{"):
        try:
            yield from _json_pairs("", json.loads(text))
            return
        except (ValueError, RecursionError):
            pass
    for line in text.splitlines():
        match = re.match(r"\s*([^=:\t]{1,80})\s*[=:\t]\s*(.{1,200})$", line)
        if match:
            yield match[1], match[2], ""


def _parsed(xml: str) -> ElementTree.Element | None:
    if "<!DOCTYPE" in xml or "<!ENTITY" in xml:  # no header needs these, and they can be made to swell
        return None
    try:
        return ElementTree.fromstring(xml)
    except (ElementTree.ParseError, ValueError, RecursionError):
        return None


def _xml_pairs(element: ElementTree.Element, above: tuple[str, ...]) -> Iterator[tuple[str, str, str]]:
    """Attributes and leaves; ``PixelSize/X/Value`` is offered as PixelSizeX, with the unit that stands beside it."""
    if len(above) > 40:
        return
    tag = element.tag.rpartition("}")[2] if isinstance(element.tag, str) else ""
    names = (*above, tag)
    for key, value in element.attrib.items():
        yield key, value, _beside(element.attrib, key)
        yield f"{tag}{key}", value, _beside(element.attrib, key)
    unit = next((v for k, v in element.attrib.items() if k.lower() in ("unit", "units")), "")
    if element.text and element.text.strip():
        for depth in range(1, min(4, len(names)) + 1):
            yield "".join(n for n in names[-depth:] if n.lower() != "value"), element.text, unit
    inner = next((c.text or "" for c in element if str(c.tag).rpartition("}")[2].lower() in ("unit", "units")), "")
    for child in element:
        for key, value, own in _xml_pairs(child, names):
            yield key, value, own or inner.strip()


def _beside(attributes: Mapping[str, str], key: str) -> str:
    return attributes.get(f"{key}Unit", attributes.get("unit", attributes.get("Unit", "")))


def _json_pairs(key: str, value: object) -> Iterator[tuple[str, str, str]]:
    if isinstance(value, dict):
        unit = next((str(v) for k, v in value.items() if str(k).lower() in ("unit", "units")), "")
        for k, v in value.items():
            for name, text, own in _json_pairs(str(k), v):
                yield name, text, own or unit
                if name.lower() in ("x", "y", "value"):
                    yield key + ("" if name.lower() == "value" else name), text, own or unit
    elif isinstance(value, (str, int, float)):
        yield key, str(value), ""
