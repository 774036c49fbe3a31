"""The sample pictures: an invented plant that makes sorbent beads, three of its lots, and the awkward cases.

``python -m poroscan.render.samples OUT`` writes them all; the same versions of the libraries give the same bytes. Every picture
has its own seed, taken from its name, so that one can be remade alone.
"""

from __future__ import annotations

import argparse
import csv
import sys
import zlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType

import numpy as np

from poroscan.render.bodies import Body, fill, make_body
from poroscan.render.lettering import choose_bar
from poroscan.render.outlines import irregular
from poroscan.render.scene import Scene, compose, scatter
from poroscan.render.sem import Rendered, render_section
from poroscan.render.settings import look
from poroscan.render.writing import Scale, write_jpeg, write_masks, write_png, write_tiff

_SHAPE = (700, 900)
_PLANT = "Bead line 2"


@dataclass(frozen=True)
class Beads:
    """Particles of one kind: structure, mean radius (µm) with its spread, skin (µm) and the structure's own lengths (µm).

    ``lengths`` are divided by the pixel size, ``numbers`` passed on as they are.
    """

    structure: str
    radius_um: float = 240.0
    spread: float = 0.06
    skin_um: float = 0.0
    lengths: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    numbers: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    aspect: float = 1.06

    def draw(self, *, pixel_size_um: float, rng: np.random.Generator) -> Body:
        """One particle."""
        radius = self.radius_um * float(np.exp(self.spread * rng.standard_normal()))
        return make_body(
            self.structure,
            radius=radius / pixel_size_um,
            aspect=1 + (self.aspect - 1) * float(rng.uniform(0.3, 1.7)),
            roughness=float(rng.uniform(0.006, 0.018)),
            skin=self.skin_um / pixel_size_um,
            rng=rng,
            **{key: value / pixel_size_um for key, value in self.lengths.items()},
            **self.numbers,
        )


@dataclass(frozen=True)
class Sample:
    """One sample picture.

    Parameters
    ----------
    folder, name
        Sub-folder (``batches/lot_0412``) and file name; the ending decides the format.
    scene
        Draws the masks, given a generator.
    structure
        Words for the truth table.
    pixel_size_um
        Micrometres per pixel.
    looks
        Name of the look and the settings that differ.
    scale
        How a TIFF says its pixel size.
    keep
        Share of the file that is kept; below 1 gives a truncated file.
    """

    folder: str
    name: str
    scene: Callable[[np.random.Generator], Scene]
    structure: str
    pixel_size_um: float
    looks: tuple[str, Mapping[str, object]] = ("secondary", MappingProxyType({}))
    scale: Scale = "ome"
    keep: float = 1.0

    @property
    def key(self) -> str:
        """``folder/name``."""
        return f"{self.folder}/{self.name}"


def _whole(
    beads: Sequence[Beads], *, pixel_size_um: float, inside: bool = True, clear_rows: int = 0
) -> Callable[[np.random.Generator], Scene]:
    """Particles apart from each other; ``clear_rows`` at the bottom stay free for a burnt-in bar."""

    def draw(rng: np.random.Generator) -> Scene:
        bodies = [kind.draw(pixel_size_um=pixel_size_um, rng=rng) for kind in beads]
        room = (_SHAPE[0] - clear_rows, _SHAPE[1])
        return compose(_SHAPE, bodies, centres=scatter(room, bodies, rng=rng, gap=18.0, inside=inside))

    return draw


def _touching(kind: Beads, *, pixel_size_um: float) -> Callable[[np.random.Generator], Scene]:
    """A chain of three particles whose contacts are a few pixels deep, and a fourth apart."""

    def draw(rng: np.random.Generator) -> Scene:
        bodies = [kind.draw(pixel_size_um=pixel_size_um, rng=rng) for _ in range(4)]
        chain = [(520.0, 175.0)]
        for previous, body, angle in zip(bodies, bodies[1:3], (25.0, 20.0), strict=False):
            reach = _radius(previous) + _radius(body) - 5.0
            row, column = chain[-1]
            chain.append((row - reach * np.sin(np.deg2rad(angle)), column + reach * np.cos(np.deg2rad(angle))))
        return compose(_SHAPE, bodies, centres=[*chain, (165.0, 165.0)])

    return draw


def _radius(body: Body) -> float:
    return float(np.sqrt(body.particle.sum() / np.pi))


def _part(structure: str, *, edge: bool, **options: float) -> Callable[[np.random.Generator], Scene]:
    """An interior view, or an edge view of a particle three times the width of the picture."""

    def draw(rng: np.random.Generator) -> Scene:
        outline = irregular(1150.0, 520.0, radius=1020.0, rng=rng, roughness=0.002) if edge else None
        body = fill(structure, shape=_SHAPE, outline=outline, rng=rng, **options)
        known = dict(body.known)
        if outline is not None:  # the whole circle, not the visible piece
            known |= {"equivalent_diameter_px": 2 * np.sqrt(outline.area / np.pi)}
        return Scene(body.particle.astype(np.int32), body.pores, {1: known})

    return draw


_GOOD = Beads("graded", skin_um=7.0, lengths={"spacing": 27.0}, numbers={"centre": 0.62, "rim": 0.46})
_SHUT = Beads(
    "closed_cells", skin_um=34.0, lengths={"diameter": 30.0, "wall": 6.0}, numbers={"porosity": 0.36, "spread": 1.4}
)


def _drifted(step: int) -> Beads:
    """The good bead on its way: thicker skin, coarser and fewer pores, step 0…4."""
    return Beads(
        "graded",
        radius_um=240.0 + 6.0 * step,
        skin_um=8.0 + 4.5 * step,
        lengths={"spacing": 28.0 + 2.5 * step},
        numbers={"centre": 0.58 - 0.035 * step, "rim": 0.42 - 0.05 * step},
    )


def _lot(lot: str, kinds: Sequence[Sequence[Beads]], words: str) -> list[Sample]:
    """Five pictures of one lot: three TIFFs with OME-XML or resolution tags, two JPEGs with a burnt-in bar."""
    samples = []
    for index, beads in enumerate(kinds, start=1):
        jpeg = index in (3, 5)
        size = 1.7 if len(beads) > 2 else (1.45 if len(beads) == 2 else 0.95)
        banner = (_PLANT, f"lot {lot[-4:]}", "10 kV", "SE", f"{index}/5")
        settings: dict[str, object] = {
            "bar": "burnt" if jpeg else ("banner" if index in (1, 4) else "none"),
            "banner_text": banner,
            "tilt": 0.05 + 0.03 * index,
            "tilt_deg": 70.0 * index,
            "dose": (420.0, 260.0, 600.0, 180.0, 340.0)[index - 1],
            "pore_light": (0.5, 0.25, 0.6, 0.3, 0.65)[index - 1],
        }
        samples.append(
            Sample(
                f"batches/{lot}",
                f"{lot}_{index}.{'jpg' if jpeg else 'tif'}",
                _whole(beads, pixel_size_um=size, inside=index != 4, clear_rows=75 if jpeg else 0),
                words,
                size,
                (("secondary", "backscatter", "secondary", "ion_polished", "secondary")[index - 1], settings),
                "resolution" if index == 2 else "ome",
            )
        )
    return samples


def _counts(kind: Callable[[int], Beads]) -> list[list[Beads]]:
    return [[kind(step)] * number for step, number in enumerate((3, 2, 1, 4, 2))]


def _awkward() -> list[Sample]:
    small = Beads(
        "sponge", radius_um=150.0, lengths={"spacing": 22.0}, skin_um=6.0, numbers={"porosity": 0.5}, aspect=1.03
    )
    sponge = Beads("sponge", lengths={"spacing": 24.0}, numbers={"porosity": 0.5})
    cells = Beads("closed_cells", skin_um=12.0, lengths={"diameter": 26.0}, numbers={"porosity": 0.5})
    dense = Beads("dense")
    fingers = Beads("fingers", skin_um=8.0, lengths={"width": 34.0, "spacing": 18.0}, numbers={"number": 20})

    def sample(
        name: str, kind: Sequence[Beads], words: str, looks: str, scale: Scale = "ome", **more: object
    ) -> Sample:
        keep = float(more.pop("keep", 1.0))  # type: ignore[arg-type]
        size = 1.4 if len(kind) > 1 else 0.9
        scene = _whole(kind, pixel_size_um=size)
        return Sample("awkward", name, scene, words, size, (looks, more), scale, keep)

    return [
        Sample("awkward", "touching.tif", _touching(small, pixel_size_um=1.0), "sponge, three in contact", 1.0),
        sample("charging.tif", [sponge, sponge], "sponge, charging bands", "charging", charging=0.3),
        sample("truncated.tif", [sponge], "sponge, file cut short", "secondary", keep=0.6),
        sample("no_scale.png", [cells, cells], "closed cells, no scale", "secondary", "none"),
        sample("resin_filled.tif", [cells, fingers], "closed cells and fingers in resin", "resin"),
        sample("bright_pores.tif", [cells, sponge], "pores brighter than the wall", "bright_pores", bar="banner"),
        Sample(
            "awkward",
            "edge_view.tif",
            _part("graded", edge=True, skin=26.0, centre=0.7, rim=0.3, spacing=26.0),
            "edge of a large bead",
            0.25,
        ),
        Sample(
            "awkward",
            "interior_view.tif",
            _part("sponge", edge=False, porosity=0.55, spacing=34.0),
            "interior of a large bead",
            0.1,
            ("secondary", {"bar": "banner", "banner_text": (_PLANT, "lot 0412", "10 kV", "SE"), "pore_light": 0.8}),
        ),
        sample("dense.tif", [dense, dense], "dense, no pores", "secondary", "resolution"),
    ]


def samples() -> tuple[Sample, ...]:
    """All sample pictures, in the order of the truth table."""
    return (
        *_lot("lot_0412", _counts(lambda step: _GOOD), "graded sponge, thin skin"),
        *_lot("lot_0419", _counts(_drifted), "graded sponge, drifting to a thick skin"),
        *_lot("lot_0426", _counts(lambda step: _SHUT), "closed cells behind a thick skin"),
        *_awkward(),
    )


def draw_sample(sample: Sample) -> Rendered:
    """Picture and truth of one sample."""
    rng = np.random.default_rng(zlib.crc32(sample.key.encode()))
    scene = sample.scene(rng)
    name, changes = sample.looks
    settings = look(name, pixel_size_um=sample.pixel_size_um, **changes)
    return render_section(scene.pores, scene.labels, settings, rng=rng, known=scene.known, depth=scene.depth)


def write_sample(out: Path, sample: Sample) -> Rendered:
    """Write one sample's picture under ``out``, and its true masks under ``out/truth``.

    Parameters
    ----------
    out
        Folder that holds ``batches``, ``awkward`` and ``truth``.
    sample
        One of ``samples()``.
    """
    rendered = draw_sample(sample)
    path = out / sample.folder / sample.name
    path.parent.mkdir(parents=True, exist_ok=True)
    if path.suffix == ".jpg":
        write_jpeg(path, rendered.grey, quality=90)
    elif path.suffix == ".png":
        write_png(path, rendered.grey)
    else:
        write_tiff(path, rendered.grey, pixel_size_um=sample.pixel_size_um, scale=sample.scale)
    if sample.keep < 1:
        path.write_bytes(path.read_bytes()[: int(sample.keep * path.stat().st_size)])
    masks = out / "truth" / sample.folder
    masks.mkdir(parents=True, exist_ok=True)
    write_masks(masks, path.stem, rendered)
    return rendered


#: Columns of ``truth.csv``; empty cells are not known by construction.
TRUTH_COLUMNS = (
    "folder",
    "image",
    "particle",
    "structure",
    "pixel_size_um",
    "centroid_row_px",
    "centroid_col_px",
    "touches_frame",
    "porosity",
    "equivalent_diameter_um",
    "pore_d50_um",
    "skin_thickness_um",
    "polar_asymmetry",
    "polar_direction_deg",
)


def truth_rows(sample: Sample, rendered: Rendered) -> list[dict[str, str]]:
    """Rows of the truth table, one per particle.

    Porosity, diameter, centroid and polar asymmetry are counted on the masks; pore D50 (area-weighted) and skin thickness are
    those that were drawn.
    """
    rows = []
    for number, truth in rendered.truth.items():
        lengths = {
            key: truth[f"{key}_px"] * rendered.pixel_size_um
            for key in ("equivalent_diameter", "pore_d50", "skin_thickness")
            if f"{key}_px" in truth
        }
        values = {**truth, "pixel_size_um": rendered.pixel_size_um, **{f"{k}_um": v for k, v in lengths.items()}}
        if sample.name.startswith("interior"):  # no outline, so nothing of the particle itself is known
            values = {key: values[key] for key in ("pixel_size_um", "touches_frame", "porosity")}
        row = {"folder": sample.folder, "image": sample.name, "particle": str(number), "structure": sample.structure}
        row |= {key: f"{values[key]:.6g}" for key in TRUTH_COLUMNS[4:] if key in values and np.isfinite(values[key])}
        rows.append(row)
    return rows


def write_samples(out: Path) -> int:
    """Write all sample pictures, their masks, ``truth.csv`` and the sidecar table of the batches.

    Parameters
    ----------
    out
        Folder to write into; existing files of the same names are replaced.

    Returns
    -------
    int
        Number of pictures.
    """
    rows = [row for sample in samples() for row in truth_rows(sample, write_sample(out, sample))]
    _write_table(out / "truth.csv", TRUTH_COLUMNS, rows)
    bars = [
        {"image": f"{s.folder.removeprefix('batches/')}/{s.name}", "scale_bar_um": f"{_bar_um(s):g}"}
        for s in samples()
        if s.folder.startswith("batches/") and s.name.endswith(".jpg")
    ]
    _write_table(out / "batches" / "sidecar.csv", ("image", "scale_bar_um"), bars)
    return len(samples())


def _bar_um(sample: Sample) -> float:
    return choose_bar(_SHAPE[1], pixel_size_um=sample.pixel_size_um).length_um


def _write_table(path: Path, columns: Sequence[str], rows: Sequence[Mapping[str, str]]) -> None:
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, columns, restval="", lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


def main(argv: Sequence[str] | None = None) -> int:
    """Command line of this module."""
    parser = argparse.ArgumentParser(
        prog="python -m poroscan.render.samples", description="Write the sample pictures with their truth."
    )
    parser.add_argument("out", type=Path, metavar="OUT", help="folder to write into, for example sample_images")
    out = parser.parse_args(argv).out
    print(f"{write_samples(out)} pictures written to {out}", file=sys.stderr)
    return 0


if __name__ == "__main__":
    sys.exit(main())
