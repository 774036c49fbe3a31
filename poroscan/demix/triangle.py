"""The composition triangle as a figure: binodal, spinodal, tie lines, plait points, formulation and bath."""

from __future__ import annotations

from pathlib import Path
from textwrap import shorten

import numpy as np
from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.patches import Polygon

from poroscan.demix.formulation import Formulation
from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixing_line import line_crossings
from poroscan.demix.phase_diagram import PhaseDiagram
from poroscan.demix.phase_summary import as_array, chosen_tie_lines

# Colours that colour-blind readers tell apart (Okabe and Ito 2008), and differ in lightness when printed grey.
_BINODAL, _SPINODAL, _PATH, _DOPE, _TRIANGLE = "#0072B2", "#D55E00", "#000000", "#009E73", "#CC79A7"
_GRID, _TIE = "#D8D8D8", "#7A8FA0"
_HEIGHT = np.sqrt(3) / 2
_TICKS = (0.2, 0.4, 0.6, 0.8)
_TIE_LINES = 9
_LONGEST_NAME = 40


def to_plane(phi: FloatArray) -> FloatArray:
    """Position in the drawn triangle: polymer on top, solvent on the left, non-solvent on the right.

    Parameters
    ----------
    phi
        Fractions, shape (…, 3), order n, s, p.

    Returns
    -------
    ndarray
        Shape (…, 2); the sides have length 1.
    """
    phi = np.asarray(phi, dtype=float)
    return np.stack([phi[..., 0] + 0.5 * phi[..., 2], _HEIGHT * phi[..., 2]], axis=-1)


def draw_triangle(diagram: PhaseDiagram, formulation: Formulation) -> Figure:
    """Figure of a phase diagram with a formulation, its bath and the mixing line.

    Parameters
    ----------
    diagram
        Phase diagram of the formulation's mixture.
    formulation
        Names, dope and bath.
    """
    figure = Figure(figsize=(8.2, 5.6), layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.add_subplot()
    axes.set_aspect("equal")
    axes.set_axis_off()
    axes.set_xlim(-0.1, 1.1)
    axes.set_ylim(-0.13, 0.92)
    _frame(axes, formulation)
    _regions(axes, diagram)
    _spinodal(axes, diagram)
    _points(axes, diagram, formulation)
    figure.suptitle(shorten(formulation.name, 80, placeholder=" …"), fontsize=12, parse_math=False)
    figure.legend(loc="outside right center", frameon=False, fontsize=9, handlelength=1.8)
    return figure


def save_triangle(figure: Figure, folder: Path, *, stem: str = "phase_diagram") -> tuple[Path, Path]:
    """Write a figure as PNG and SVG; the same figure gives the same bytes.

    Returns
    -------
    tuple of Path
        The two files.
    """
    png, svg = folder / f"{stem}.png", folder / f"{stem}.svg"
    figure.savefig(png, dpi=200, metadata={"Software": "poroscan"})
    with rc_context({"svg.hashsalt": "poroscan", "svg.fonttype": "none"}):
        figure.savefig(svg, metadata={"Date": None, "Creator": "poroscan"})
    return png, svg


def _frame(axes: Axes, formulation: Formulation) -> None:
    """Outline, grid and scales; each side carries the scale of the component whose corner it leads to."""
    axes.add_patch(Polygon(to_plane(np.eye(3)), closed=True, fill=False, edgecolor="black", linewidth=1.1, zorder=4))
    for tick in _TICKS:
        for component in range(3):
            ends = np.zeros((2, 3))
            ends[:, component] = tick
            ends[0, (component + 1) % 3] = ends[1, (component + 2) % 3] = 1 - tick
            axes.plot(*to_plane(ends).T, color=_GRID, linewidth=0.6, zorder=0)
        _scale_label(axes, (tick, 1 - tick, 0), f"{tick:g}", (0, -9))
        _scale_label(axes, (1 - tick, 0, tick), f"{tick:g}", (13, 2))
        _scale_label(axes, (0, tick, 1 - tick), f"{tick:g}", (-13, 2))
    _scale_label(axes, (0.5, 0.5, 0), "volume fraction of non-solvent →", (0, -22))
    _scale_label(axes, (0.5, 0, 0.5), "← volume fraction of polymer", (26, 14), turn=-60)
    _scale_label(axes, (0, 0.5, 0.5), "← volume fraction of solvent", (-26, 14), turn=60)
    names = (formulation.nonsolvent.name, formulation.solvent.name, formulation.polymer.name)
    roles = ("non-solvent", "solvent", "polymer")
    places = (("right", (34, -40)), ("left", (-34, -40)), ("center", (0, 9)))
    for corner, name, role, (align, offset) in zip(np.eye(3), names, roles, places, strict=True):
        named = name.replace("-", "").lower() != role.replace("-", "")
        x, y = to_plane(corner)
        axes.annotate(
            f"{_short(name)} ({role})" if named else role,
            (x, y),
            xytext=offset,
            textcoords="offset points",
            ha=align,
            fontsize=10.5,
            parse_math=False,  # a name may hold a dollar sign
        )


def _short(text: str) -> str:
    return shorten(text, _LONGEST_NAME, placeholder=" …")


def _scale_label(
    axes: Axes, phi: tuple[float, float, float], text: str, offset: tuple[float, float], *, turn: float = 0.0
) -> None:
    x, y = to_plane(np.array(phi))
    axes.annotate(
        text,
        (x, y),
        rotation=turn,
        rotation_mode="anchor",
        xytext=offset,
        textcoords="offset points",
        ha="center",
        va="center",
        fontsize=8,
        color="#606060",
    )


def _regions(axes: Axes, diagram: PhaseDiagram) -> None:
    for number, region in enumerate(diagram.regions):
        first = number == 0
        axes.add_patch(
            Polygon(to_plane(region.outline), closed=True, facecolor=_BINODAL, alpha=0.07, linewidth=0, zorder=1)
        )
        _branches(axes, diagram, number)
        for k in chosen_tie_lines(region, _TIE_LINES):
            ends = to_plane(np.exp(region.logs[k]).T)
            axes.plot(*ends.T, color=_TIE, linewidth=0.8, zorder=2, label="tie lines" if first and k == 0 else None)
    for number, triangle in enumerate(diagram.triangles):
        axes.add_patch(
            Polygon(
                to_plane(triangle.phases),
                closed=True,
                facecolor=_TRIANGLE,
                alpha=0.45,
                edgecolor=_TRIANGLE,
                linewidth=1.4,
                zorder=3,
                label="three phases" if number == 0 else None,
            )
        )


def _branches(axes: Axes, diagram: PhaseDiagram, number: int) -> None:
    """The two branches of a region's binodal, joined in its plait points."""
    region = diagram.regions[number]
    first = [] if region.first_plait is None else [region.first_plait]
    last = [] if region.last_plait is None else [region.last_plait]
    label = "binodal" if number == 0 else None
    for branch in (region.rich, region.lean):
        path = to_plane(np.array([*first, *branch, *last]))
        axes.plot(*path.T, color=_BINODAL, linewidth=2.0, zorder=5, label=label)
        label = None


def _spinodal(axes: Axes, diagram: PhaseDiagram) -> None:
    for number, curve in enumerate(diagram.spinodal.curves):
        axes.plot(
            *to_plane(curve).T,
            color=_SPINODAL,
            linewidth=1.6,
            linestyle=(0, (5, 2)),
            zorder=5,
            label="spinodal" if number == 0 else None,
        )


def _points(axes: Axes, diagram: PhaseDiagram, formulation: Formulation) -> None:
    dope, bath = as_array(formulation.dope), as_array(formulation.bath)
    line = to_plane(np.array([dope, bath]))
    axes.plot(*line.T, color=_PATH, linewidth=1.2, linestyle=":", zorder=6, label="mixing line")
    crossings = [crossing for crossing in line_crossings(diagram, dope, bath) if crossing.entering]
    for boundary, colour in (("binodal", _BINODAL), ("spinodal", _SPINODAL)):
        met = [crossing.phi for crossing in crossings if crossing.boundary == boundary][:1]
        if met:
            label = f"enters the {boundary}"
            _mark(axes, met[0], "D", colour, label, size=6.5)
    for number, phi in enumerate(diagram.stable_plaits):
        _mark(axes, phi, "*", "#F0E442", "plait point" if number == 0 else None, size=12)
    _mark(axes, dope, "o", _DOPE, "dope (drop)", size=8)
    _mark(axes, bath, "s", _DOPE, "bath", size=7.5)


def _mark(axes: Axes, phi: FloatArray, marker: str, colour: str, label: str | None, *, size: float) -> None:
    x, y = to_plane(phi)
    axes.plot(
        [x],
        [y],
        marker=marker,
        markersize=size,
        markerfacecolor=colour,
        markeredgecolor="white" if marker == "D" else "black",
        markeredgewidth=0.9,
        linestyle="none",
        zorder=8,
        label=label,
        clip_on=False,
    )
