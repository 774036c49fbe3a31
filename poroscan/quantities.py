"""The catalogue: every reported quantity once, with key, unit, definition, source and kind of interval.

Measuring functions work in pixels. A ``Record`` holds estimates by *base* name (``pore_d50``); ``Record.row`` turns them
into the columns of ``particles.csv`` (``pore_d50_um``, ``pore_d50_um_low``, ``pore_d50_um_high``, ``pore_d50_px``), so that a
length in micrometres exists only where a pixel size is known. The entries themselves stand in ``quantities.toml``;
``python -m poroscan.quantities`` writes them as the reference page ``docs/quantities.md``.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from importlib import resources
from types import MappingProxyType

import numpy as np
import numpy.typing as npt

from poroscan.section import PixelSize

#: Power of length -> suffix of the micrometre key and of its pixel twin.
SUFFIXES: Mapping[int, tuple[str, str]] = MappingProxyType(
    {
        0: ("", ""),
        1: ("_um", "_px"),
        2: ("_um2", "_px2"),
        3: ("_um3", "_px3"),
        -1: ("_per_um", "_per_px"),
        -2: ("_per_um2", "_per_px2"),
        -3: ("_per_um3", "_per_px3"),
    }
)

#: Unit that is no power of length -> suffix of the key.
UNIT_SUFFIXES: Mapping[str, str] = MappingProxyType({"°": "_deg"})

UNITS: Mapping[int, str] = MappingProxyType({0: "", 1: "µm", 2: "µm²", 3: "µm³", -1: "1/µm", -2: "1/µm²", -3: "1/µm³"})


@dataclass(frozen=True)
class Flag:
    """Something a reader must know about a value or a picture: words for people and what to do."""

    words: str
    remedy: str


@dataclass(frozen=True)
class Quantity:
    """One reported quantity.

    Parameters
    ----------
    base
        Name without unit; the key of the output column is ``base`` plus the suffix of ``power``.
    label
        Words for people, without the unit.
    power
        Power of length: 1 for a length, 2 for an area, -1 for a surface per volume, 0 without unit.
    definition
        One or two sentences that let a reader recompute it.
    source
        Published source of the definition or method.
    interval
        What the stated 95 % interval covers, in words; empty where no interval is given.
    dimensions
        Dimensions in which the quantity is defined.
    views
        Views that can give it.
    group
        Heading under which it is listed.
    unit
        Unit in words for people where it is neither a power of length nor a plain number (``°``); else empty.
    """

    base: str
    label: str
    power: int
    definition: str
    source: str
    interval: str = ""
    dimensions: tuple[int, ...] = (2, 3)
    views: tuple[str, ...] = ("whole", "edge", "interior")
    group: str = ""
    unit: str = ""

    @property
    def key(self) -> str:
        """Column name in micrometres, in degrees, or without unit."""
        return self.base + UNIT_SUFFIXES.get(self.unit, SUFFIXES[self.power][0])

    @property
    def pixel_key(self) -> str | None:
        """Column name of the pixel twin; None for a quantity without length."""
        return None if self.power == 0 else self.base + SUFFIXES[self.power][1]

    @property
    def unit_words(self) -> str:
        """Unit as printed for people."""
        return self.unit or UNITS[self.power]


@dataclass(frozen=True)
class Estimate:
    """A value with its expanded uncertainty, in pixels (or without unit).

    Parameters
    ----------
    value
        The estimate; NaN where it is undefined (a flag says why).
    low, high
        Ends of the 95 % interval; NaN where none is stated.
    components
        Standard uncertainties by name (``sampling``, ``threshold``, ``pixel_size``, ``frame``), same unit as the value.
    """

    value: float
    low: float = math.nan
    high: float = math.nan
    components: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))


@dataclass(frozen=True, eq=False)
class Curve:
    """One measured curve of one particle, in pixels.

    ``x_power`` and ``y_power`` are powers of length as in ``Quantity.power``; low and high bound the 95 % interval (NaN where
    none is stated).
    """

    name: str
    x: npt.NDArray[np.float64]
    y: npt.NDArray[np.float64]
    low: npt.NDArray[np.float64]
    high: npt.NDArray[np.float64]
    x_power: int = 1
    y_power: int = 0


@dataclass(frozen=True, eq=False)
class Record:
    """Every estimate of one particle by base name, with its flags.

    Raises
    ------
    KeyError
        If a name is not in the catalogue or a flag not in the list.
    """

    estimates: Mapping[str, Estimate]
    flags: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for base in self.estimates:
            quantity(base)
        for flag in self.flags:
            if flag not in FLAGS:
                raise KeyError(f"unknown flag {flag!r}; known: {', '.join(FLAGS)}")

    def __getitem__(self, base: str) -> Estimate:
        return self.estimates[base]

    def row(self, pixel_size: PixelSize) -> dict[str, float]:
        """Columns of ``particles.csv`` in catalogue order: value, low, high, and the pixel twin.

        Values in micrometres are NaN where the pixel size is unknown. Where the pixel size has an uncertainty, it is
        added in quadrature to the half-widths of lengths (JCGM 100:2008, 5.1.2).
        """
        row: dict[str, float] = {}
        for q in CATALOGUE:
            e = self.estimates.get(q.base, Estimate(math.nan))
            scale = 1.0 if q.power == 0 else (math.nan if pixel_size.um is None else pixel_size.um**q.power)
            low, high = _with_pixel_size(e, q.power, pixel_size.relative_uncertainty)
            row[q.key] = e.value * scale
            if q.interval:
                row[f"{q.key}_low"] = low * scale
                row[f"{q.key}_high"] = high * scale
            if q.pixel_key is not None:
                row[q.pixel_key] = e.value
        return row


def _with_pixel_size(e: Estimate, power: int, relative: float) -> tuple[float, float]:
    if power == 0 or relative == 0 or not math.isfinite(e.value):
        return e.low, e.high
    extra = 1.959964 * abs(power) * relative * abs(e.value)
    return e.value - math.hypot(e.value - e.low, extra), e.value + math.hypot(e.high - e.value, extra)


def quantity(base: str) -> Quantity:
    """The catalogue entry of a base name.

    Raises
    ------
    KeyError
        If the catalogue has no such quantity; the message names the nearest ones.
    """
    try:
        return _BY_BASE[base]
    except KeyError:
        import difflib

        near = difflib.get_close_matches(base, _BY_BASE, n=3)
        raise KeyError(f"no quantity {base!r} in the catalogue; {_near(near)}") from None


def _near(names: list[str]) -> str:
    return f"nearest: {', '.join(names)}" if names else "docs/quantities.md lists them"


def by_key(key: str) -> Quantity:
    """The catalogue entry of an output column (micrometre key, pixel twin or base name).

    Raises
    ------
    KeyError
        If no quantity has this column; the message names the nearest ones.
    """
    try:
        return _BY_KEY[key]
    except KeyError:
        import difflib

        near = difflib.get_close_matches(key, _BY_KEY, n=3)
        raise KeyError(f"no column {key!r} in the catalogue; {_near(near)}") from None


def has_key(key: str) -> bool:
    """Whether the catalogue has a quantity with this column (micrometre key, pixel twin or base name)."""
    return key in _BY_KEY


def groups() -> Iterator[tuple[str, tuple[Quantity, ...]]]:
    """Catalogue entries by heading, in catalogue order."""
    names = dict.fromkeys(q.group for q in CATALOGUE)
    for name in names:
        yield name, tuple(q for q in CATALOGUE if q.group == name)


#: Closed list of flags: key -> words and remedy.
FLAGS: Mapping[str, Flag] = MappingProxyType(
    {
        # scale
        "no_pixel_size": Flag(
            "no pixel size known; lengths are given in pixels only",
            "give --pixel-size, a sidecar table, or a picture with its header",
        ),
        "pixel_size_conflict": Flag(
            "two sources of the pixel size differ by more than 2 %", "check which is right and give --pixel-size"
        ),
        "scale_label_unread": Flag(
            "a scale bar was found, but its label could not be read",
            "give the bar's length in the sidecar table, or install the ocr extra",
        ),
        # picture quality
        "clipped": Flag(
            "a notable share of pixels is pure black or pure white",
            "lower the contrast or brightness at the microscope",
        ),
        "noisy": Flag("the picture is noisy", "scan more slowly or average frames"),
        "blurred": Flag("the picture is blurred", "refocus, correct astigmatism"),
        "uneven_illumination": Flag(
            "the background brightness varies across the picture",
            "check detector and tilt; the segmentation corrects for it",
        ),
        "charging": Flag("bright bands point to charging", "coat the specimen or lower the voltage"),
        "bad_pixels": Flag("some pixels were NaN or infinite", "export the picture again from its source"),
        "constant_picture": Flag("the picture has one grey value only", "check the file"),
        # outline and view
        "no_particle": Flag("no particle was found", "check the overlay; set the view or the outline in the recipe"),
        "interior_view": Flag(
            "interior view without an outline; size, skin and radial quantities are not defined",
            "take an overview picture for these",
        ),
        "edge_view": Flag(
            "edge view; the radius comes from a circle fitted to the visible arc",
            "take an overview picture for size and shape",
        ),
        "touches_frame": Flag(
            "cut by the frame of the picture; left out of size statistics", "take the picture at lower magnification"
        ),
        "split_from_touching": Flag(
            "separated from a touching particle; the outline along the contact is constructed", "check the overlay"
        ),
        "outline_uncertain": Flag(
            "the outline is uncertain", "check the overlay; set the outline method in the recipe or give a mask"
        ),
        # pores
        "no_pores": Flag("no pores were found", "check the overlay; a dense particle has none"),
        "all_pores": Flag("the whole section was taken for pore", "check the overlay and the threshold"),
        "no_threshold": Flag("no threshold separates pores from polymer", "give a threshold, strokes or a mask"),
        "under_resolved": Flag(
            "many pores are smaller than 5 pixels across", "take the picture at higher magnification"
        ),
        "few_pores": Flag("fewer than 20 pores; size statistics are coarse", "measure more particles"),
        # measurement
        "few_blocks": Flag(
            "the section is too small against its structure for a sampling interval",
            "measure more particles or a larger field",
        ),
        "no_spacing": Flag(
            "no characteristic spacing: the structure factor has no peak",
            "none needed; the structure has no preferred distance",
        ),
        "volume": Flag(
            "a volume: quantities that only a plane section has are empty", "measure a plane of the field for these"
        ),
        "several_pieces": Flag(
            "the outline holds several separate pieces", "check the overlay; split the particles or give a mask"
        ),
        "tiny_particle": Flag(
            "fewer than 10 pixels across; only its size is measured", "take the picture at higher magnification"
        ),
        # regime
        "no_atlas": Flag("no regime: no atlas of simulated particles is available", "install or build an atlas"),
        "no_regime": Flag("no regime: the section has no porosity to compare", "check the outline on the overlay"),
        "unlike_atlas": Flag("unlike any simulated particle of the atlas", "do not use the regime"),
        # batch
        "failed": Flag("the picture could not be measured", "see run.json for the reason"),
    }
)


def _read_catalogue() -> tuple[Quantity, ...]:
    text = resources.files("poroscan").joinpath("quantities.toml").read_text(encoding="utf-8")
    entries = []
    for entry in tomllib.loads(text)["quantity"]:
        entry |= {name: tuple(entry[name]) for name in ("dimensions", "views") if name in entry}
        entries.append(Quantity(**entry))
    return tuple(entries)


#: The catalogue in the order of the output columns; its entries stand in quantities.toml.
CATALOGUE: tuple[Quantity, ...] = _read_catalogue()

#: Columns of ``particles.csv`` that are not estimates, in words.
ROW_COLUMNS: Mapping[str, str] = MappingProxyType(
    {
        "batch": "name of the batch (sub-folder)",
        "image": "file name of the picture",
        "particle": "name of the particle within its picture",
        "centroid_row_px": "centroid of the particle, in rows of the picture",
        "centroid_col_px": "centroid of the particle, in columns of the picture",
        "pixel_size_um": "micrometres per pixel; empty where unknown",
        "pixel_size_source": "where the pixel size comes from",
        "touches_frame": "the particle is cut by the frame of the picture",
        "frame_weight": "Miles–Lantuéjoul weight (1 where nothing is cut); multiply counts by it",
        "regime": "demixing regime inferred from simulations; empty where none is given",
        "regime_probability": "calibrated probability of that regime",
        "regime_set": "regimes that cannot be ruled out at the stated coverage",
        "atlas_distance": "distance to the nearest simulated particle",
        "flags": "keys of what a reader must know",
    }
)


@dataclass(frozen=True)
class PoreColumn:
    """One column of the table of pores: type, power of length and words."""

    dtype: str
    power: int
    words: str


#: Columns of ``pores.parquet`` per pore body, in pixels; the table has them all, also when it is empty.
PORE_COLUMNS: Mapping[str, PoreColumn] = MappingProxyType(
    {
        "pore": PoreColumn("int32", 0, "number of the pore body within its particle"),
        "centroid_plane": PoreColumn("float64", 0, "centroid, plane of the field (0 in a section)"),
        "centroid_row": PoreColumn("float64", 0, "centroid, row of the picture"),
        "centroid_col": PoreColumn("float64", 0, "centroid, column of the picture"),
        "area": PoreColumn("float64", 2, "pixels of the body (voxels in a volume: then a number of voxels)"),
        "diameter": PoreColumn("float64", 1, "equivalent diameter: circle of equal area, sphere of equal volume"),
        "inscribed_diameter": PoreColumn("float64", 1, "diameter of the largest inscribed disc or ball"),
        "depth": PoreColumn("float64", 1, "mean distance from the outline; NaN where no outline is in sight"),
        "perimeter": PoreColumn("float64", 1, "Crofton perimeter; NaN in a volume"),
        "feret_max": PoreColumn("float64", 1, "largest Feret diameter; NaN in a volume"),
        "feret_min": PoreColumn("float64", 1, "smallest Feret diameter; NaN in a volume"),
        "circularity": PoreColumn(
            "float64", 0, "sqrt(4 π A / P²) with the Crofton perimeter; may exceed 1 for small pores; NaN in a volume"
        ),
        "aspect_ratio": PoreColumn("float64", 0, "smallest over largest Feret diameter; NaN in a volume"),
        "ellipse_ratio": PoreColumn("float64", 0, "minor over major axis of the Legendre ellipse; NaN in a volume"),
        "orientation_deg": PoreColumn("float64", 0, "direction of the major axis, counter-clockwise from the right"),
        "solidity": PoreColumn("float64", 0, "area over area of the convex hull; NaN in a volume"),
        "open": PoreColumn("bool", 0, "belongs to a connected pore that reaches the outline within the section"),
        "touches_frame": PoreColumn("bool", 0, "cut by the frame of the picture"),
    }
)

_BY_BASE: dict[str, Quantity] = {q.base: q for q in CATALOGUE}
_BY_KEY: dict[str, Quantity] = {k: q for q in CATALOGUE for k in (q.base, q.pixel_key, q.key) if k}


def reference_page() -> str:
    """The catalogue as a Markdown page (``docs/quantities.md``)."""
    lines = [
        "# Quantities",
        "",
        "Every reported quantity with its definition and source. Written by `python -m poroscan.quantities`; do not edit.",
        "",
        "Lengths are micrometres; each has a twin in pixels (`…_px`), which stays filled where no pixel size is known. Where an",
        "interval is named, `…_low` and `…_high` bound 95 % of what it covers. Pixel-size uncertainty is added to every length.",
    ]
    for name, members in groups():
        lines += [
            "",
            f"## {name}",
            "",
            "| column | quantity | definition | source | interval covers | given by |",
            "|---|---|---|---|---|---|",
        ]
        lines += [_reference_row(q) for q in members]
    lines += ["", "## Other columns of particles.csv", "", "| column | meaning |", "|---|---|"]
    lines += [f"| `{key}` | {words} |" for key, words in ROW_COLUMNS.items()]
    lines += ["", "## Columns of pores.parquet", "", "| column | type | unit | meaning |", "|---|---|---|---|"]
    lines += [f"| `{key}` | {c.dtype} | {UNITS[c.power]} | {c.words} |" for key, c in PORE_COLUMNS.items()]
    lines += ["", "## Flags", "", "| flag | meaning | what to do |", "|---|---|---|"]
    lines += [f"| `{key}` | {flag.words} | {flag.remedy} |" for key, flag in FLAGS.items()]
    return "\n".join(lines) + "\n"


def _reference_row(q: Quantity) -> str:
    where = ", ".join(f"{n}-D" for n in q.dimensions) + "; " + ", ".join(q.views)
    unit = f" ({q.unit_words})" if q.unit_words else ""
    return f"| `{q.key}` | {q.label}{unit} | {q.definition} | {q.source} | {q.interval or '–'} | {where} |"


if __name__ == "__main__":
    print(reference_page(), end="")
