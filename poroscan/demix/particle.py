"""simulate(): one particle from the drop to the frozen structure, with its path and its regime."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from poroscan.demix.checkpoint import Checkpoint, load_checkpoint, save_checkpoint
from poroscan.demix.formulation import Formulation
from poroscan.demix.initial import initial_fields
from poroscan.demix.lever import Lever
from poroscan.demix.path import INTERFACE_WIDTHS, FirstDemixing, PathRecorder, PathRow
from poroscan.demix.phase_diagram import PhaseDiagram, find_phase_diagram
from poroscan.demix.regime import RegimeReading, read_regime
from poroscan.demix.repair import repair_fractions
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.demix.stability import interface_width
from poroscan.demix.stepper import OUTSIDE, Stepper
from poroscan.errors import SettingsError, SimulationError

FloatArray = npt.NDArray[np.floating]

#: Cells that an interface must be wide (10–90 %) to be resolved.
LEAST_WIDTH = 1.3
#: A run ends early when for this long (over R²/D) fewer cells moved from row to row than the first share, and no amount or
#: core composition changed by more than the second over all of it.
_QUIET_TIME = 0.06
_QUIET_MOVED = 2e-4
_QUIET_CHANGE = 1e-3


@dataclass(frozen=True, eq=False)
class Snapshot:
    """Fields at one time (over R²/D): fractions of polymer and non-solvent, repaired as those of the result.

    ``repaired_share`` is what that took.
    """

    exchange_time: float
    polymer: FloatArray
    nonsolvent: FloatArray
    repaired_share: float = 0.0


@dataclass(frozen=True, eq=False)
class SimulationResult:
    """One simulated particle.

    Parameters
    ----------
    polymer, nonsolvent
        Fractions at the end, 2-D or 3-D; none of them, nor solvent, is negative (:mod:`poroscan.demix.repair`).
    path
        Rows of the path table.
    demixings
        First demixing of every shell, from which the regime is read.
    reading
        The regime and what it was read from.
    snapshots
        Fields at the times asked for.
    seed
        Seed that repeats the run.
    steps
        Time steps taken.
    outcome
        ``finished`` (end time reached) or ``still`` (nothing moved any more).
    least_fraction
        Least value of any of the three fractions at the end before the repair. The scheme does not force fractions to be
        positive while it steps; values slightly below 0 sit where a component is nearly absent.
    repaired_share
        Volume exchanged between neighbouring cells to mend that, over the volume of the box.
    """

    polymer: FloatArray
    nonsolvent: FloatArray
    path: tuple[PathRow, ...]
    demixings: tuple[FirstDemixing, ...]
    reading: RegimeReading
    snapshots: tuple[Snapshot, ...]
    seed: int
    steps: int
    outcome: str
    least_fraction: float
    repaired_share: float = 0.0

    @property
    def regime(self) -> str:
        """Key of the regime."""
        return self.reading.regime


def simulate(
    formulation: Formulation,
    *,
    seed: int = 0,
    diagram: PhaseDiagram | None = None,
    progress: Callable[[float, PathRow], None] | None = None,
    checkpoint: str | Path | None = None,
    checkpoint_every: int = 25,
) -> SimulationResult:
    """Simulate one particle.

    Parameters
    ----------
    formulation
        Components, dope, bath and simulation settings.
    seed
        Seed of the initial state and of the thermal noise. The same formulation and seed give the same bits.
    diagram
        Phase diagram of the mixture where it is known already; else it is found first.
    progress
        Called after every row of the path with the share done (0…1) and the row.
    checkpoint
        File to go on from where it exists, and to renew every ``checkpoint_every`` rows of the path; None keeps none.

    Raises
    ------
    SettingsError
        If the interface is thinner than the grid can resolve.
    SimulationError
        If the run becomes unstable, or its phase diagram cannot be found.
    StoreError
        If the checkpoint is damaged or belongs to another formulation or seed.
    """
    settings = formulation.simulation
    check_resolution(formulation)
    if not isinstance(seed, int | np.integer) or seed < 0:
        raise ValueError(f"seed must be a whole number of at least 0, not {seed!r}")
    recorder = _recorder(formulation, diagram or find_phase_diagram(formulation.mixture))
    stepper, snapshots = _start(formulation, int(seed), recorder, checkpoint)
    unit, outcome = settings.exchange_time, "finished"
    if not recorder.rows:
        recorder.record(stepper.time, *stepper.fields())
    pending = [t for t in sorted(settings.snapshots) if t > stepper.time / unit or not (snapshots or t)]
    while stepper.time < settings.end_time * unit:
        until = min(recorder.rows[-1].time + settings.record_every * unit, settings.end_time * unit)
        while stepper.time < until:
            stepper.step()
            while pending and stepper.time >= pending[0] * unit:
                snapshots.append(Snapshot(pending.pop(0), *stepper.fields()))
        polymer, nonsolvent = stepper.fields()
        _check_range(polymer, nonsolvent, stepper.time)
        row = recorder.record(stepper.time, polymer, nonsolvent)
        if progress is not None:
            progress(min(row.exchange_time / settings.end_time, 1.0), row)
        if checkpoint is not None and len(recorder.rows) % checkpoint_every == 0:
            _save(checkpoint, formulation, int(seed), stepper, recorder, snapshots)
        if _is_still(recorder.rows, stepper, settings):
            outcome = "still"
            break
    polymer, nonsolvent = stepper.fields()
    least = float(min(polymer.min(), nonsolvent.min(), (1 - polymer - nonsolvent).min()))
    reading = read_regime(recorder.rows, recorder.demixings, dimensions=settings.dimensions)
    final = repair_fractions(polymer, nonsolvent)
    return SimulationResult(
        polymer=final.polymer,
        nonsolvent=final.nonsolvent,
        path=tuple(recorder.rows),
        demixings=tuple(recorder.demixings),
        reading=reading,
        snapshots=tuple(map(_repaired, snapshots)),
        seed=int(seed),
        steps=stepper.count,
        outcome=outcome,
        least_fraction=least,
        repaired_share=final.share,
    )


def _repaired(snapshot: Snapshot) -> Snapshot:
    """Only results are repaired; checkpoints keep what the solver holds."""
    fields = repair_fractions(snapshot.polymer, snapshot.nonsolvent)
    return Snapshot(snapshot.exchange_time, fields.polymer, fields.nonsolvent, fields.share)


def check_resolution(formulation: Formulation) -> None:
    """Refuse a formulation whose interface the grid cannot resolve.

    Raises
    ------
    SettingsError
        Says how wide the interface is and which kappa would do.
    """
    width = interface_width(formulation.mixture, formulation.simulation)
    if width < LEAST_WIDTH:
        factor = (LEAST_WIDTH / width) ** 2
        settings = formulation.simulation
        raise SettingsError(
            f"[simulation]: the interface would be {width:.2f} cells wide, too thin for the grid (at least {LEAST_WIDTH}); raise "
            f"kappa_polymer to {settings.kappa_polymer * factor:.3g} and kappa_nonsolvent to {settings.kappa_nonsolvent * factor:.3g}"
        )


def _recorder(formulation: Formulation, diagram: PhaseDiagram) -> PathRecorder:
    settings, mixture = formulation.simulation, formulation.mixture
    width = min(interface_width(mixture, settings), 6.0)

    def stability(phi_n: float, phi_p: float) -> float:
        p = min(max(phi_p, 0.0), 1.0)
        return float(mixture.stability(min(max(phi_n, 0.0), 1.0 - p), p))

    return PathRecorder(
        (settings.cells,) * settings.dimensions,
        radius=settings.radius,
        dope_polymer=formulation.dope.polymer,
        margin=INTERFACE_WIDTHS * width + 2 * settings.roughness * settings.radius,
        arrest_fraction=settings.arrest_fraction,
        noise=settings.noise,
        lean_fraction=Lever(diagram).lean_fraction,
        stability=stability,
    )


def _start(
    formulation: Formulation, seed: int, recorder: PathRecorder, path: str | Path | None
) -> tuple[Stepper, list[Snapshot]]:
    if path is None or not Path(path).exists():
        fields = initial_fields(formulation, rng=np.random.default_rng(seed))
        return Stepper(formulation.mixture, formulation.simulation, *fields, seed=seed), []
    kept = load_checkpoint(path, fingerprint=formulation.fingerprint(), seed=seed)
    recorder.restore(kept.recorder)
    stepper = Stepper(
        formulation.mixture, formulation.simulation, kept.polymer, kept.nonsolvent, seed=seed,
        time=kept.time, count=kept.count, step_length=kept.step_length,
    )  # fmt: skip
    return stepper, [Snapshot(*s) for s in kept.snapshots]


def _save(
    path: str | Path,
    formulation: Formulation,
    seed: int,
    stepper: Stepper,
    recorder: PathRecorder,
    snapshots: list[Snapshot],
) -> None:
    polymer, nonsolvent = stepper.fields()
    save_checkpoint(
        path,
        Checkpoint(
            fingerprint=formulation.fingerprint(),
            seed=seed,
            time=stepper.time,
            count=stepper.count,
            step_length=stepper.step_length,
            polymer=polymer,
            nonsolvent=nonsolvent,
            recorder=recorder.state(),
            snapshots=tuple((s.exchange_time, s.polymer, s.nonsolvent) for s in snapshots),
        ),
    )


def _is_still(rows: list[PathRow], stepper: Stepper, settings: SimulationSettings) -> bool:
    if settings.noise == 0 and stepper.largest < settings.stop_rate:
        return True
    now = rows[-1]
    recent = [row for row in rows if row.exchange_time >= now.exchange_time - _QUIET_TIME]
    if len(recent) == len(rows) or any(row.moved > _QUIET_MOVED for row in recent):
        return False
    watched = ("polymer", "solvent", "nonsolvent", "core_polymer", "core_nonsolvent")
    return all(abs(getattr(now, name) - getattr(recent[0], name)) < _QUIET_CHANGE for name in watched)


def _check_range(polymer: FloatArray, nonsolvent: FloatArray, time: float) -> None:
    least = float(min(polymer.min(), nonsolvent.min(), (1 - polymer - nonsolvent).min()))
    if not least > -OUTSIDE:  # also where it is not a number
        raise SimulationError(
            f"a fraction fell to {least:.3g} at time {time:.4g}: the run cannot be trusted; lower noise or max_step, or raise kappa"
        )
