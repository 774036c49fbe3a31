"""What ``poroscan atlas`` does: build, add, show and check, each as one function."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from poroscan import __version__
from poroscan.atlas.accuracy import Accuracy, area_under_curve, held_out, own_distances, table, volumes
from poroscan.atlas.build import BuildPlan, build
from poroscan.atlas.collect import collect, relabelled
from poroscan.atlas.describe import ViewPlan, describe_folder, describe_run
from poroscan.atlas.foreign import foreign_views
from poroscan.atlas.matching import Matcher
from poroscan.atlas.run_file import AtlasRun, crop_to_particle, run_to_bytes
from poroscan.atlas.show import page
from poroscan.atlas.space import NAMES
from poroscan.atlas.store import PACKAGED, Atlas, load_atlas, run_table, verify, write_atlas
from poroscan.atlas.table import RunTable, ViewTable, view_table
from poroscan.demix.formulation import load_formulation
from poroscan.demix.regime import REGIMES
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.errors import InputError, SettingsError, StoreError
from poroscan.intake import read_field
from poroscan.intake.field_sections import midway

Say = Callable[[str], None] | None

#: Radius of the drop over the edge of the grid, by dimensions.
_RADIUS = {2: 0.335, 3: 0.36}


def build_settings(*, cells: int, dimensions: int) -> SimulationSettings:
    """Settings of the runs of a build.

    Raises
    ------
    SettingsError
        If the grid is too small for a particle.
    """
    try:
        return SimulationSettings(
            dimensions=3 if dimensions == 3 else 2, cells=cells, radius=round(_RADIUS[dimensions] * cells),
            end_time=0.45, record_every=0.005,
        )  # fmt: skip
    except ValueError as error:
        raise SettingsError(f"atlas build: {error}") from error


def pinned_values(formulation: Path | None, pins: Sequence[str]) -> dict[str, float]:
    """Axes whose value is known: χ and chain length of a formulation, then single pins.

    Raises
    ------
    SettingsError
        If a pin is not NAME=VALUE with the name of an axis, or the formulation cannot be reduced to the axes.
    """
    pinned: dict[str, float] = {}
    if formulation is not None:
        pinned |= _of_formulation(formulation)
    for pin in pins:
        name, _, value = pin.partition("=")
        if name not in NAMES:
            raise SettingsError(f"--pin {pin}: {name!r} is no axis; known: {', '.join(NAMES)}")
        try:
            pinned[name] = float(value)
        except ValueError as error:
            raise SettingsError(f"--pin {pin}: {value!r} is no number") from error
    return pinned


def _of_formulation(path: Path) -> dict[str, float]:
    """χ and chain length, per site of the size of a solvent molecule."""
    mixture = load_formulation(path).mixture
    if mixture.N_s != mixture.N_n:
        raise SettingsError(f"{path}: an atlas takes solvent and non-solvent of one size; pin values with --pin")
    pinned = {"chain_length": mixture.N_p / mixture.N_s}
    for name in ("chi_pn", "chi_ps", "chi_sn"):
        value = getattr(mixture, name)
        if not isinstance(value, int | float):
            raise SettingsError(f"{path}: {name} depends on composition; pin a mean value with --pin {name}=…")
        pinned[name] = float(value) * mixture.N_s
    return pinned


def build_atlas(
    folder: Path,
    *,
    settings: SimulationSettings,
    pinned: Mapping[str, float],
    total: int,
    per_regime: int,
    seed: int,
    workers: int,
    say: Say,
) -> dict[str, int]:
    """Simulate, describe and collect; returns the number of runs per regime. Given again, it goes on where it stopped.

    Raises
    ------
    StoreError
        If the folder holds an atlas of another plan.
    """
    cores = workers or os.cpu_count() or 1
    work = folder / "work"
    if (folder / "atlas.json").exists() and not work.exists():
        raise StoreError(f"{folder}: holds an atlas that was not built here; name another folder")
    plan = BuildPlan(settings=settings, pinned=pinned, per_regime=per_regime, total=total, seed=seed)
    build(work, plan, workers=cores, progress=None if say is None else lambda name, outcome: say(f"{name} {outcome}"))
    describe_folder(work, ViewPlan(), workers=cores, progress=None if say is None else lambda name: say(f"{name} seen"))
    group = "solid" if settings.dimensions == 3 else "fine" if settings.cells >= 448 else "flat"
    about = {"pinned": dict(pinned), "cells": settings.cells, "seed": seed}
    return collect(folder, {group: work}, about=about, replace=True).counts()


def add_fields(folder: Path, files: Sequence[Path], *, label: str, out: Path) -> dict[str, int]:
    """A new atlas with a user's own fields added; returns the number of runs per regime.

    Raises
    ------
    SettingsError
        If the label is not of the list.
    InputError
        If a file holds no polymer fraction of a particle.
    """
    if label not in REGIMES:
        raise SettingsError(f"--label is {label!r}; give one of {', '.join(REGIMES)}")
    atlas = load_atlas(folder)
    taken = set(atlas.runs.name)
    own = [_own_run(path, label, taken) for path in files]
    first = len(atlas.runs)
    rows = [(first + i, row) for i, run in enumerate(own) for row in describe_run(run, ViewPlan())]
    fields: dict[str, list[tuple[str, bytes]]] = {"own": [(run.name, run_to_bytes(run)) for run in own]}
    for name, group in zip(atlas.runs.name, atlas.runs.group, strict=True):
        fields.setdefault(group, []).append((name, run_to_bytes(atlas.run(name))))
    runs = _joined_runs(atlas.runs, run_table([("own", run) for run in own], NAMES))
    return write_atlas(
        out, runs, _joined_views(atlas.views, view_table(rows)), fields=fields, about=atlas.about
    ).counts()


def _own_run(path: Path, label: str, taken: set[str]) -> AtlasRun:
    values = read_field(path).values
    if values.min() < -0.05 or values.max() > 1.05:
        raise InputError(
            f"{path}: values reach from {values.min():.3g} to {values.max():.3g}; give the polymer fraction (0…1)"
        )
    try:
        field = crop_to_particle(values, midway(values))
    except ValueError as error:
        raise InputError(f"{path}: {error}") from error
    name = f"own-{path.stem}"
    if name in taken:
        raise InputError(f"{path}: the atlas holds a particle named {name} already; rename the file")
    taken.add(name)
    nothing = np.zeros((0, 0), dtype=np.float32)
    return AtlasRun(name, {}, label, {}, field, (), nothing, (), nothing, {}, 0, __version__, "user")


def _joined_runs(a: RunTable, b: RunTable) -> RunTable:
    return RunTable(
        a.name + b.name, a.group + b.group, a.regime + b.regime, a.source + b.source,
        *(np.concatenate([getattr(a, n), getattr(b, n)]) for n in ("parameters", "onset", "lean_fraction")),
    )  # fmt: skip


def _joined_views(a: ViewTable, b: ViewTable) -> ViewTable:
    pairs: list[Any] = [
        np.concatenate([getattr(a, n), getattr(b, n)]) for n in ("run", "kind", "look", "diameter_px", "cut", "values")
    ]
    return ViewTable(*pairs)


def show(folder: Path | None, target: Path) -> None:
    """Write the page of thumbnails of an atlas.

    Raises
    ------
    StoreError
        If the folder holds no atlas.
    """
    atlas = load_atlas(PACKAGED if folder is None else folder)
    target.write_text(page(atlas), encoding="utf-8")


def check(folder: Path | None, *, foreign: int, say: Say) -> str:
    """Hashes, regimes and accuracy of an atlas, in Markdown.

    Parameters
    ----------
    folder
        Folder of the atlas; None is the packaged one.
    foreign
        Particles of each foreign texture that are tried.
    say
        Told what is being done.

    Raises
    ------
    StoreError
        If a file differs from its hash, or a run's regime from its path.
    """
    root = PACKAGED if folder is None else folder
    files = verify(root)
    atlas = load_atlas(root)
    if say is not None:
        say(f"{files} files as listed; reading the regimes again")
    _check_regimes(atlas)
    matcher = Matcher(atlas)
    figures: list[Accuracy] = [*held_out(atlas, matcher), *volumes(atlas, matcher)]
    parts = [
        f"{len(atlas.runs)} runs ({', '.join(f'{n} {r}' for r, n in atlas.counts().items())}), {len(atlas.views)} views; "
        f"all {files} files as listed, every regime as its path says.",
        table(figures),
    ]
    if foreign:
        if say is not None:
            say("drawing foreign textures")
        parts.append(foreign_table(atlas, matcher, n=foreign))
    return "\n\n".join(parts)


def _check_regimes(atlas: Atlas) -> None:
    for name, regime in zip(atlas.runs.name, atlas.runs.regime, strict=True):
        found = relabelled(atlas.run(name)).regime
        if found != regime:
            raise StoreError(f"{name}: the atlas says {regime}, its path says {found}; build the atlas again")


def foreign_table(atlas: Atlas, matcher: Matcher, *, n: int) -> str:
    """How well foreign textures are told ``unlike_atlas``: area under the ROC curve and share told so, in Markdown."""
    lines = ["| foreign texture | view | pictures | area under ROC | told unlike |", "|---|---|---|---|---|"]
    for scope, kind in (("whole", "whole"), ("texture", "interior")):
        own = own_distances(atlas, matcher, scope, kind)  # type: ignore[arg-type]
        found: dict[str, list[float]] = {}
        for name, described in foreign_views(n, kind=kind, seed=0):  # type: ignore[arg-type]
            match = matcher.match(described.values, kind)
            found.setdefault(name, []).append(match.distance if np.isfinite(match.distance) else np.inf)
        for name, distances in {**found, "all": [d for ds in found.values() for d in ds]}.items():
            far = np.array(distances)
            area = area_under_curve(own, far)
            lines.append(f"| {name} | {kind} | {len(far)} | {area:.3f} | {np.mean(far > 1):.2f} |")
    return "\n".join(lines)
