"""The path of a simulated particle: what is watched while it forms, shell by shell below the surface.

Everything is read from shells of equal distance from the centre of the drop. Their mean compositions are conserved through
demixing, so that they say *what* demixed; the spread of composition within a shell says *whether* it has demixed. The
outermost two interface widths are left out: the interface itself always crosses the unstable region.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass, fields
from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

#: Interface widths below the surface that do not count as interior.
INTERFACE_WIDTHS = 2.0
#: Spread of polymer fraction within a shell from which on it counts as demixed; thermal spread of the smoothed field of a
#: mixture with curvature of about 1, over the root of the noise's strength, and the multiple of it that counts.
LEAST_SPREAD = 0.08
_THERMAL_SPREAD = 0.3
_THERMAL_MULTIPLE = 3.0
#: Shells averaged over before a spread counts, in cells.
_LAYER = 3
#: Window in cells over which the radial profile may bend without counting as spread.
_WINDOW = 15
#: A cell that changed by more than this between two records has moved.
_MOVED = 0.1


@dataclass(frozen=True)
class PathRow:
    """State of the particle at one time. Lengths are over the drop's first radius R, amounts over the drop's first volume.

    Parameters
    ----------
    time, exchange_time
        Time in cell²/D, and over R²/D.
    surface
        Radius of the particle (outermost shell that holds half the first polymer fraction).
    polymer, solvent, nonsolvent
        Amounts within the surface.
    core_polymer, core_nonsolvent
        Mean composition within half the radius.
    skin_polymer
        Highest mean polymer fraction of any shell.
    demixed
        Share of the interior that has demixed so far.
    front_depth
        Depth below the surface down to which shells have demixed without a gap; 0 where none has.
    front_polymer, front_nonsolvent
        Mean composition of the shells that demixed since the last row; NaN where none did.
    front_lean_fraction
        Polymer-lean share that the lever rule gives for it; NaN outside every gap.
    front_stability
        Least eigenvalue of the scaled Hessian there: negative inside the spinodal.
    spread
        Largest standard deviation of polymer fraction within an interior shell.
    arrested
        Share of the particle's polymer that is arrested (polymer fraction above the arrest fraction).
    moved
        Share of cells inside whose polymer fraction changed by more than 0.1 since the last row.
    """

    time: float
    exchange_time: float
    surface: float
    polymer: float
    solvent: float
    nonsolvent: float
    core_polymer: float
    core_nonsolvent: float
    skin_polymer: float
    demixed: float
    front_depth: float
    front_polymer: float
    front_nonsolvent: float
    front_lean_fraction: float
    front_stability: float
    spread: float
    arrested: float
    moved: float


PATH_COLUMNS: tuple[str, ...] = tuple(f.name for f in fields(PathRow))


@dataclass(frozen=True)
class FirstDemixing:
    """One shell at the time it demixed first: when (over R²/D), where (radius and depth over R), and its mean composition."""

    exchange_time: float
    radius: float
    depth: float
    weight: float
    polymer: float
    nonsolvent: float
    lean_fraction: float
    stability: float


class PathRecorder:
    """Watches a run.

    Parameters
    ----------
    shape
        Cells of the box; the drop sits in its middle.
    radius
        Radius of the drop at the start, in cells.
    dope_polymer
        Polymer fraction of the drop at the start.
    margin
        Depth in cells that does not count as interior: two interface widths and the roughness of the surface.
    arrest_fraction
        Polymer fraction of arrest.
    noise
        Strength of the thermal noise, which sets what spread is thermal.
    lean_fraction, stability
        Lever rule and stability of a composition (φn, φp).
    """

    def __init__(
        self,
        shape: tuple[int, ...],
        *,
        radius: float,
        dope_polymer: float,
        margin: float,
        arrest_fraction: float,
        noise: float,
        lean_fraction: Callable[[float, float], float],
        stability: Callable[[float, float], float],
    ) -> None:
        self._radius, self._dope, self._margin, self._arrest = radius, dope_polymer, margin, arrest_fraction
        self._lean, self._stability = lean_fraction, stability
        axes = np.meshgrid(*[np.arange(n) - (n - 1) / 2 for n in shape], indexing="ij", sparse=True)
        self._shell = np.sqrt(sum(a**2 for a in axes)).astype(np.int32).ravel()  # shell r holds r to r + 1
        self._count = np.bincount(self._shell).astype(float)
        self._shells = int(min(shape) // 2)  # beyond, shells are cut by the box
        self.rows: list[PathRow] = []
        self.demixings: list[FirstDemixing] = []
        self._demixed = np.zeros(self._shells, bool)
        self._threshold = max(LEAST_SPREAD, _THERMAL_MULTIPLE * _THERMAL_SPREAD * noise**0.5)
        self._last: npt.NDArray[np.floating] | None = None

    def record(self, time: float, polymer: npt.NDArray[np.floating], nonsolvent: npt.NDArray[np.floating]) -> PathRow:
        """Measure the fields at a time and append the row."""
        smooth = _binomial(polymer)
        p, n = self._means(polymer), self._means(nonsolvent)
        variance = (
            np.maximum(self._means(smooth**2) - self._means(smooth) ** 2, 0) + _waviness(self._means(smooth)) ** 2
        )
        surface = self._surface(p)
        spread = np.sqrt(_layered(variance, self._count[: self._shells]))
        inside = np.arange(self._shells) < max(surface - self._margin, 0)
        fresh = inside & ~self._demixed & (spread > self._threshold)
        row = self._row(time, surface, p, n, spread, inside, fresh, polymer, smooth)
        self.rows.append(row)
        return row

    def _row(
        self, time: float, surface: int, p: FloatArray, n: FloatArray, spread: FloatArray, inside: npt.NDArray[np.bool_],
        fresh: npt.NDArray[np.bool_], polymer: npt.NDArray[np.floating], smooth: npt.NDArray[np.floating],
    ) -> PathRow:  # fmt: skip
        count, size, exchange = self._count[: self._shells], self._radius, time / self._radius**2
        front = self._front(fresh, exchange, surface, p, n)
        self._demixed |= fresh
        whole, core = np.arange(self._shells) <= surface, np.arange(self._shells) < size / 2
        first = self._count[: round(size) + 1].sum()
        moved = self._movement(smooth, surface)
        solid = polymer.ravel()[self._shell <= surface]
        held = float(solid.sum(dtype=float))
        inner = float(count[inside].sum())
        return PathRow(
            time=time,
            exchange_time=exchange,
            surface=(surface + 1) / size,
            polymer=float((p * count)[whole].sum() / first),
            solvent=float(((1 - p - n) * count)[whole].sum() / first),
            nonsolvent=float((n * count)[whole].sum() / first),
            core_polymer=float(np.average(p[core], weights=count[core])),
            core_nonsolvent=float(np.average(n[core], weights=count[core])),
            skin_polymer=float(p[whole].max()),
            demixed=float(count[inside & self._demixed].sum() / inner) if inner else 0.0,
            front_depth=self._depth(inside, surface) / size,
            front_polymer=front[0],
            front_nonsolvent=front[1],
            front_lean_fraction=front[2],
            front_stability=front[3],
            spread=float(spread[inside].max()) if inside.any() else 0.0,
            arrested=float(solid[solid > self._arrest].sum(dtype=float) / held) if held > 0 else 0.0,
            moved=moved,
        )

    def _means(self, field: npt.NDArray[np.floating]) -> FloatArray:
        sums = np.bincount(self._shell, weights=field.ravel())
        return (sums / np.maximum(self._count, 1))[: self._shells]

    def _surface(self, p: FloatArray) -> int:
        above = np.nonzero(p > 0.5 * self._dope)[0]
        return int(above[-1]) if above.size else 0

    def _front(
        self, fresh: npt.NDArray[np.bool_], exchange: float, surface: int, p: FloatArray, n: FloatArray
    ) -> tuple[float, float, float, float]:
        """Compositions, averaged over a layer, of the shells that have just demixed; remembers each of them."""
        if not fresh.any():
            return (np.nan,) * 4
        count = self._count[: self._shells]
        wide_p, wide_n = (_layered(a, count, 2 * _LAYER + 1) for a in (p, n))
        for r in np.nonzero(fresh)[0]:
            found = (float(wide_n[r]), float(wide_p[r]))
            where = (float(r / self._radius), float((surface - r) / self._radius), float(count[r]))
            self.demixings.append(
                FirstDemixing(exchange, *where, found[1], found[0], self._lean(*found), self._stability(*found))
            )
        polymer, nonsolvent = (float(np.average(a[fresh], weights=count[fresh])) for a in (wide_p, wide_n))
        return polymer, nonsolvent, self._lean(nonsolvent, polymer), self._stability(nonsolvent, polymer)

    def _depth(self, inside: npt.NDArray[np.bool_], surface: int) -> float:
        """Depth of the innermost shell that has demixed, below the surface."""
        demixed = np.nonzero(inside & self._demixed)[0]
        return float(surface - demixed[0]) if demixed.size else 0.0

    def _movement(self, smooth: npt.NDArray[np.floating], surface: int) -> float:
        last, self._last = self._last, smooth
        if last is None:
            return 1.0
        changed = np.abs(smooth - last).ravel()[self._shell <= surface] > _MOVED
        return float(changed.mean())

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Everything needed to go on recording, as arrays (for checkpoints)."""
        rows = np.array([list(asdict(row).values()) for row in self.rows]).reshape(-1, len(PATH_COLUMNS))
        found = np.array([list(asdict(d).values()) for d in self.demixings]).reshape(-1, len(fields(FirstDemixing)))
        return {
            "path_rows": rows,
            "path_demixings": found,
            "path_demixed": self._demixed.astype(float),
            "path_last_field": np.zeros(0) if self._last is None else self._last,
        }

    def restore(self, state: dict[str, npt.NDArray[Any]]) -> None:
        """Take up the state of an earlier recorder of the same formulation."""
        self.rows = [PathRow(*map(float, row)) for row in state["path_rows"]]
        self.demixings = [FirstDemixing(*map(float, row)) for row in state["path_demixings"]]
        self._demixed = state["path_demixed"].astype(bool)
        if state["path_last_field"].size:
            self._last = state["path_last_field"]


def _binomial(field: npt.NDArray[np.floating]) -> npt.NDArray[np.floating]:
    """Weights 1/4, 1/2, 1/4 along every axis: takes out cell-to-cell noise and keeps pores of four cells."""
    for axis in range(field.ndim):
        field = 0.5 * field + 0.25 * (np.roll(field, 1, axis) + np.roll(field, -1, axis))
    return field


def _layered(values: FloatArray, count: FloatArray, width: int = _LAYER) -> FloatArray:
    """Mean over ``width`` neighbouring shells, weighted by their cells."""
    kernel = np.ones(width)
    return np.convolve(values * count, kernel, "same") / np.convolve(count, kernel, "same")


def _waviness(profile: FloatArray) -> FloatArray:
    """Deviation of a radial profile from a parabola fitted over a sliding window (rings show here, gradients do not)."""
    half = _WINDOW // 2
    padded = np.pad(profile, half, mode="reflect")
    windows = np.lib.stride_tricks.sliding_window_view(padded, _WINDOW)
    x = np.linspace(-1, 1, _WINDOW)
    basis = np.linalg.qr(np.stack([np.ones_like(x), x, x * x], axis=1))[0]
    return np.asarray((windows - (windows @ basis) @ basis.T)[:, half])
