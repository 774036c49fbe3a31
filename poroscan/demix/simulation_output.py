"""What a simulated particle leaves on disk: fields, path table, regime, pictures."""

from __future__ import annotations

import csv
import json
import math
import os
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from poroscan import __version__
from poroscan.demix.checkpoint import write_npz
from poroscan.demix.formulation import Formulation
from poroscan.demix.particle import SimulationResult, Snapshot
from poroscan.demix.path import PATH_COLUMNS

#: Number of the format of fields.npz.
FORMAT = 1


def write_simulation(out: Path, formulation: Formulation, result: SimulationResult) -> None:
    """Write fields.npz, path.csv, simulation.json and composition.png into a folder.

    Raises
    ------
    ValueError
        If a field is not finite or holds a negative fraction; nothing is written then.
    """
    shots: tuple[SimulationResult | Snapshot, ...] = (result, *result.snapshots)
    for field in shots:
        parts = (field.polymer, field.nonsolvent, 1 - field.polymer - field.nonsolvent)
        if min(part.min() for part in parts) < 0:
            raise ValueError("polymer, nonsolvent and solvent must not be negative; repair_fractions mends a field")
    out.mkdir(parents=True, exist_ok=True)
    write_npz(out / "fields.npz", field_arrays(formulation, result))
    _write_text(out / "simulation.json", json.dumps(summary(formulation, result), indent=1, ensure_ascii=False) + "\n")
    with (out / "path.csv.part").open("w", newline="", encoding="utf-8") as stream:
        table = csv.writer(stream)
        table.writerow(PATH_COLUMNS)
        table.writerows([_cell(getattr(row, name)) for name in PATH_COLUMNS] for row in result.path)
    os.replace(out / "path.csv.part", out / "path.csv")
    _draw(out / "composition.png", formulation, result)


def field_arrays(formulation: Formulation, result: SimulationResult) -> dict[str, npt.NDArray[Any]]:
    """The arrays of fields.npz: the last fields, those of the snapshots, and what repeats the run."""
    shots = result.snapshots
    return {
        "polymer": result.polymer,
        "nonsolvent": result.nonsolvent,
        "snapshot_times": np.array([s.exchange_time for s in shots]),
        **{f"snapshot_{k}_polymer": s.polymer for k, s in enumerate(shots)},
        **{f"snapshot_{k}_nonsolvent": s.nonsolvent for k, s in enumerate(shots)},
        "record": np.array(json.dumps(summary(formulation, result), ensure_ascii=False)),
    }


def summary(formulation: Formulation, result: SimulationResult) -> dict[str, Any]:
    """Formulation, seed, version, regime and outcome as plain values; numbers that are undefined are None."""
    reading = {k: (None if isinstance(v, float) and math.isnan(v) else v) for k, v in asdict(result.reading).items()}
    return {
        "format": FORMAT,
        "version": __version__,
        "fingerprint": formulation.fingerprint(),
        "seed": result.seed,
        "formulation": formulation.describe(),
        "outcome": result.outcome,
        "steps": result.steps,
        "exchange_time": result.path[-1].exchange_time,
        "least_fraction": result.least_fraction,
        "repaired_share": result.repaired_share,
        "snapshot_repaired_shares": [shot.repaired_share for shot in result.snapshots],
        "regime": reading,
    }


def _cell(value: float) -> str:
    return "" if math.isnan(value) else repr(float(value))


def _write_text(path: Path, text: str) -> None:
    part = path.with_name(path.name + ".part")
    part.write_text(text, encoding="utf-8")
    os.replace(part, path)


def _draw(path: Path, formulation: Formulation, result: SimulationResult) -> None:
    """Polymer and non-solvent over time, middle plane of a volume."""
    last = Snapshot(result.path[-1].exchange_time, result.polymer, result.nonsolvent)
    shots = [*result.snapshots, last]
    figure = Figure(figsize=(2.6 * len(shots) + 0.9, 5.6), layout="constrained")
    FigureCanvasAgg(figure)
    grid = figure.subplots(2, len(shots), squeeze=False)
    for column, shot in enumerate(shots):
        for row, (name, field) in enumerate((("polymer", shot.polymer), ("non-solvent", shot.nonsolvent))):
            axes = grid[row, column]
            plane = field if field.ndim == 2 else field[field.shape[0] // 2]
            image = axes.imshow(
                plane, vmin=0, vmax=1, cmap="viridis" if row == 0 else "cividis", interpolation="nearest"
            )
            axes.set_xticks([])
            axes.set_yticks([])
            if row == 0:
                axes.set_title(f"{shot.exchange_time:.3g} R²/D", fontsize=9)
            if column == 0:
                axes.set_ylabel(f"{name} fraction", fontsize=9)
            if column == len(shots) - 1:
                figure.colorbar(image, ax=axes, shrink=0.8)
    figure.suptitle(f"{formulation.name}: {result.regime} (seed {result.seed})", fontsize=10)
    part = path.with_name(path.name + ".part")
    figure.savefig(part, format="png", dpi=110, metadata={"Software": f"poroscan {__version__}"})
    os.replace(part, path)
