"""``poroscan match``: regime of the particles of a run folder, or of simulated fields."""

from __future__ import annotations

import json
import math
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from poroscan.errors import InputError, SettingsError

if TYPE_CHECKING:
    from poroscan.atlas.matching import BatchMatch, Match
    from poroscan.atlas.sources import Described

_CAUTION = "A regime is an inference from simulations with stated assumptions, not a measurement."


def command(
    inputs: Annotated[
        list[Path], typer.Argument(metavar="RUN or FIELDS", help="A run folder, or files of simulated fields.")
    ],
    atlas: Annotated[
        Path | None,
        typer.Option("--atlas", help="Folder of an atlas; the packaged one by default.", show_default=False),
    ] = None,
    wanted: Annotated[
        str | None, typer.Option("--wanted", help="Regime wanted: adds what to change.", show_default=False)
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON instead of a table.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="No words beside the table.")] = False,
) -> int:
    """Say which demixing regime made the particles, and how sure that is."""
    from poroscan.atlas import Matcher, load_atlas, load_packaged
    from poroscan.demix.regime import REGIMES

    if wanted is not None and wanted not in REGIMES:
        raise SettingsError(f"--wanted is {wanted!r}; give one of {', '.join(REGIMES)}")
    library = load_packaged() if atlas is None else load_atlas(atlas)
    found, unread = _described(inputs)
    matcher = Matcher(library)
    matches = [(d, matcher.match(d.values, d.view)) for d in found]
    batches = _pooled(matches)
    advice = _advice(library, batches, matches, wanted)
    if as_json:
        print(json.dumps(_as_data(matches, batches, advice), indent=2, ensure_ascii=False))
    else:
        _print(matches, batches, advice)
    if not quiet:
        for words in unread:
            print(f"poroscan: {words}", file=sys.stderr)
        print(_CAUTION, file=sys.stderr)
    return 3 if unread else 0


def _described(inputs: list[Path]) -> tuple[list[Described], list[str]]:
    from poroscan.atlas.sources import is_field, is_run, particle_of_field, particles_of_run

    found: list[Described] = []
    unread: list[str] = []
    for path in inputs:
        if is_run(path):
            found += particles_of_run(path)
        elif path.is_file() and is_field(path):
            try:
                found.append(particle_of_field(path))
            except InputError as error:
                unread.append(" ".join(str(error).split()))
        else:
            raise SettingsError(f"{path}: is neither a run folder nor the file of a field (.npz, .npy, .h5, .vti, …)")
    if not found:
        raise InputError(unread[0] if unread else "no particle to match; scan pictures first")
    return found, unread


def _pooled(matches: list[tuple[Described, Match]]) -> dict[str, BatchMatch]:
    from poroscan.atlas import pool

    groups: dict[str, list[Match]] = {}
    for described, match in matches:
        groups.setdefault(described.batch, []).append(match)
    return {batch: pool(found) for batch, found in groups.items()}


def _advice(
    library: Any, batches: dict[str, BatchMatch], matches: list[tuple[Described, Match]], wanted: str | None
) -> dict[str, list[str]]:
    from poroscan.atlas import what_to_change

    if wanted is None:
        return {}
    out: dict[str, list[str]] = {}
    for batch, pooled in batches.items():
        if pooled.regime not in pooled.probabilities or pooled.regime == wanted:
            continue
        like = [n.run for d, m in matches if d.batch == batch for n in m.nearest]
        directions = what_to_change(library, pooled.regime, wanted, like=like)
        out[batch] = [f"{d.words} ({d.up} pairs of runs up, {d.down} down)" for d in directions]
    return out


def _as_data(
    matches: list[tuple[Described, Match]], batches: dict[str, BatchMatch], advice: dict[str, list[str]]
) -> dict[str, Any]:
    from dataclasses import asdict

    particles = [
        {"batch": d.batch, "image": d.image, "particle": d.particle, "view": d.view} | _plain(asdict(m))
        for d, m in matches
    ]
    pooled = [{"batch": b, "what_to_change": advice.get(b, [])} | _plain(asdict(m)) for b, m in batches.items()]
    return {"particles": particles, "batches": pooled, "caution": _CAUTION}


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _print(
    matches: list[tuple[Described, Match]], batches: dict[str, BatchMatch], advice: dict[str, list[str]]
) -> None:
    width = max(8, *(len(f"{d.image} {d.particle}") for d, _ in matches))
    print(f"{'particle':<{width}}  {'regime':<16} {'prob.':>6} {'distance':>8}  not ruled out")
    for d, m in matches:
        print(
            f"{d.image + ' ' + d.particle:<{width}}  {m.regime or '–':<16} {_number(m.probability, 2):>6} "
            f"{_number(m.distance, 2):>8}  {', '.join(m.prediction_set) or '–'}"
        )
    for batch, pooled in batches.items():
        print(
            f"{'batch ' + batch if batch else 'taken as one batch'}: {pooled.regime or 'nothing to compare'}, probability "
            f"{_number(pooled.probability, 2)}, not ruled out: {', '.join(pooled.prediction_set) or '–'}; "
            f"{_number(100 * pooled.agreement, 0)} % of {pooled.particles - pooled.unlike} particles agree, "
            f"{pooled.unlike} unlike the atlas"
        )
        for line in advice.get(batch, []):
            print(f"  to change: {line}")
    if len(matches) == 1:
        _print_one(matches[0][1])


def _print_one(match: Match) -> None:
    for interval in match.parameters.values():
        words = f"{interval.value:.2f} ({interval.low:.2f} … {interval.high:.2f})"
        print(f"  {interval.name}: {words if interval.determined else 'not determined'}")
    for near in match.nearest:
        print(f"  looks like {near.run} ({near.regime}), distance {near.distance:.2f}")


def _number(value: float, digits: int) -> str:
    return f"{value:.{digits}f}" if math.isfinite(value) else "–"
