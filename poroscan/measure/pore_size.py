"""Pore size by pore bodies: equivalent diameters, number- and area-weighted.

Bodies are the pieces of pore, parted at their necks (``bodies.split_bodies``). Each has the diameter of the circle of equal area (sphere
of equal volume). A quantile D_q is the diameter below which the share q of the area (volume), or of the number, lies; each body sits at
the middle of its own weight, with straight lines between. Bodies that the frame cuts stay in: leaving them out would favour
small pores, because large ones are cut more often; their size is a little too low instead.

References
----------
ISO 9276-1:1998, ISO 9276-2:2014, ISO 9276-6:2008; Woodruff, J. Am. Stat. Assoc. 47 (1952) 635 (interval of a quantile).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from poroscan.measure.bodies import split_bodies
from poroscan.measure.distance import boundary_distance
from poroscan.measure.part import Part, undefined
from poroscan.measure.pore_table import equivalent_diameter, select
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.tally import label_counts
from poroscan.measure.uncertainty import block_quantile, block_ratio, estimate_of, threshold_sd
from poroscan.quantities import Curve, Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]
Int32 = npt.NDArray[np.int32]

FEW_PORES = 20
_SHAPES = ("circularity", "aspect_ratio", "ellipse_ratio", "solidity")
_SIZES = (
    *(f"pore_{name}{weight}" for weight in ("", "_number") for name in ("d10", "d50", "d90", "span", "mean")),
    "pore_d32",
    "pore_d43",
    "under_resolved_fraction",
)


def weighted_quantile(values: npt.ArrayLike, weights: npt.ArrayLike, *, q: float) -> float:
    """Quantile of weighted values: each sits at the middle of its own weight, straight lines between; NaN where none has weight.

    Raises
    ------
    ValueError
        If the lengths differ, a weight is negative or q lies outside 0…1.
    """
    result = block_quantile(values, weights, np.zeros(np.size(values), dtype=np.int32), q=q)
    return result.value


def body_diameters(pores: BoolArray, *, pixel_size: float, split_depth: float = 0.25) -> Float:
    """Equivalent diameters of the pore bodies of a mask, in the unit of ``pixel_size``.

    Raises
    ------
    ValueError
        If ``pores`` is not a 2-D or 3-D bool array.
    """
    if not isinstance(pores, np.ndarray) or pores.dtype != np.bool_ or pores.ndim not in (2, 3):
        raise ValueError("pores must be a 2-D or 3-D bool array (use array.astype(bool))")
    distance = boundary_distance(pores)
    labels, n = split_bodies(pores, distance, split_depth=split_depth)
    sizes = label_counts(labels, number=n + 1)[1:].astype(np.float64)
    return equivalent_diameter(sizes, ndim=pores.ndim) * pixel_size


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Number, density, size and shape of the pore bodies; curves pore_size_number and pore_size_area."""
    table = counted(shared.pore_table, settings)
    shapes = tuple(f"pore_{name}" for name in _SHAPES) if section.ndim == 2 else ()
    density = "pore_density" if section.ndim == 2 else "pore_density_3d"
    diameter = table["diameter"]
    estimates = {"pore_count": Estimate(float(diameter.size))}
    block = shared.blocks_of_bodies(table)
    number = np.where(table["touches_frame"], 0.5, 1.0)
    result = block_ratio(
        np.bincount(block, number, shared.n_blocks)[1:],
        shared.block_pixels,
        inflation=shared.block_inflation,
        scale="log",
    )
    estimates[density] = estimate_of(result, scale="log")
    if diameter.size == 0:
        nothing = undefined((*_SIZES, *shapes), "no_pores")
        return Part(estimates | dict(nothing.estimates), flags=nothing.flags)
    estimates |= _sizes(section, settings, shared, table, block)
    flags = _flags(settings, estimates, diameter.size)
    if section.ndim == 2:
        estimates |= _shapes(settings, shared, table, block)
    curves = tuple(_curve(name, diameter, weight) for name, weight in _weights(table))
    return Part(estimates, curves, flags)


def counted(table: Mapping[str, npt.NDArray[Any]], settings: MeasureSettings) -> dict[str, npt.NDArray[Any]]:
    """The pore bodies that are large enough to be counted."""
    return select(table, table["area"] >= settings.smallest_pore_px)


def _weights(table: Mapping[str, npt.NDArray[Any]]) -> tuple[tuple[str, Float], tuple[str, Float]]:
    return ("pore_size_number", np.ones(table["area"].size)), ("pore_size_area", table["area"])


def _sizes(
    section: Section,
    settings: MeasureSettings,
    shared: Shared,
    table: Mapping[str, npt.NDArray[Any]],
    block: Int32,
) -> dict[str, Estimate]:
    d = table["diameter"]
    estimates: dict[str, Estimate] = {}
    band = _band(section, settings)
    for suffix, (_, weight) in zip(("_number", ""), _weights(table), strict=True):
        for name, q in (("d10", 0.1), ("d50", 0.5), ("d90", 0.9)):
            # A body counts whole in one block: no inflation for what straddles block borders.
            result = block_quantile(d, weight, block, q=q)
            sd = threshold_sd(*(quantiles[name] for quantiles in band)) if band and not suffix else None
            estimates[f"pore_{name}{suffix}"] = estimate_of(result, threshold=sd, scale="log")
        low, middle, high = (estimates[f"pore_{name}{suffix}"].value for name in ("d10", "d50", "d90"))
        estimates[f"pore_span{suffix}"] = Estimate((high - low) / middle)
        sums = (np.bincount(block, w, shared.n_blocks)[1:] for w in (weight * d, weight))
        mean = block_ratio(*sums, inflation=shared.block_inflation, scale="log")
        estimates[f"pore_mean{suffix}"] = estimate_of(mean, scale="log")
    for name, power in (("pore_d32", 3), ("pore_d43", 4)):
        sums = (np.bincount(block, w, shared.n_blocks)[1:] for w in (d**power, d ** (power - 1)))
        moment = block_ratio(*sums, inflation=shared.block_inflation, scale="log")
        estimates[name] = estimate_of(moment, scale="log")
    estimates["under_resolved_fraction"] = Estimate(float(np.mean(d < settings.resolved_diameter_px)))
    return estimates


def _band(section: Section, settings: MeasureSettings) -> list[dict[str, float]]:
    """Area-weighted quantiles of the pores at both ends of the threshold band; empty without a band or without pores there."""
    out = []
    for pores in (section.pores_low, section.pores_high):
        if pores is None or not pores.any():
            return []
        depth = settings.split_depth if settings.pore_split == "watershed" else 1.0
        d = body_diameters(pores, pixel_size=1.0, split_depth=depth)
        d = d[d >= equivalent_diameter(np.array([float(settings.smallest_pore_px)]), ndim=section.ndim)[0] * (1 - 1e-9)]
        weight = d**section.ndim
        out.append({n: weighted_quantile(d, weight, q=q) for n, q in (("d10", 0.1), ("d50", 0.5), ("d90", 0.9))})
    return out


def _shapes(
    settings: MeasureSettings, shared: Shared, table: Mapping[str, npt.NDArray[Any]], block: Int32
) -> dict[str, Estimate]:
    resolved = (table["diameter"] >= settings.resolved_diameter_px) & ~table["touches_frame"]
    area, block = table["area"][resolved], block[resolved]
    weight = np.bincount(block, area, shared.n_blocks)[1:]
    estimates = {}
    for name in _SHAPES:
        total = np.bincount(block, area * table[name][resolved], shared.n_blocks)[1:]
        estimates[f"pore_{name}"] = estimate_of(block_ratio(total, weight, inflation=shared.block_inflation))
    return estimates


def _flags(settings: MeasureSettings, estimates: Mapping[str, Estimate], n: int) -> tuple[str, ...]:
    flags = []
    if n < FEW_PORES:
        flags.append("few_pores")
    if estimates["under_resolved_fraction"].value > 0.5:
        flags.append("under_resolved")
    return tuple(flags)


def _curve(name: str, diameter: Float, weight: Float) -> Curve:
    """Share of number or area in bodies up to diameter x, on 64 even steps."""
    order = np.argsort(diameter)
    share = np.cumsum(weight[order]) / weight.sum()
    x = np.linspace(0.0, math.ceil(diameter.max()), 65)
    index = np.searchsorted(diameter[order], x, side="right")
    unknown = np.full(x.size, np.nan)
    return Curve(name, x, np.concatenate([[0.0], share])[index], unknown, unknown)
