"""Regime of measured particles from the packaged atlas, and of their batch.

The models are fitted once per process, when the first particle is matched. Without an atlas the columns stay empty and the
particle is flagged ``no_atlas``.
"""

from __future__ import annotations

import functools
import hashlib
import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from poroscan.atlas import BatchMatch, Match, Matcher, has_packaged, load_packaged, pool, what_to_change
from poroscan.atlas.advice import CAUTION
from poroscan.atlas.parameters import Interval
from poroscan.atlas.store import PACKAGED
from poroscan.atlas.views import masks
from poroscan.errors import StoreError
from poroscan.measure import Measurement
from poroscan.measure.descriptors import descriptors
from poroscan.report.picture import thumbnail

#: Look-alikes kept of each particle, and the grey of pores and polymer in their pictures.
SHOWN = 3
_PORE_GREY, _POLYMER_GREY = 0.12, 0.6
#: Columns of particles.csv that are filled here.
COLUMNS = ("regime", "regime_probability", "regime_set", "atlas_distance")


@dataclass(frozen=True)
class RegimeResult:
    """What is written of one particle's match: its cells, its flags, and the match as plain values (None without an atlas)."""

    cells: Mapping[str, Any]
    flags: tuple[str, ...]
    match: Mapping[str, Any] | None


def atlas_key() -> str:
    """SHA-256 of the packaged atlas's index (which lists the hash of every file); empty without one."""
    if not has_packaged():
        return ""
    return hashlib.sha256((PACKAGED / "atlas.json").read_bytes()).hexdigest()


@functools.cache
def _matcher() -> Matcher | None:
    return Matcher(load_packaged()) if has_packaged() else None


def regime_of(measurement: Measurement, view: str) -> RegimeResult:
    """Match one particle.

    Parameters
    ----------
    measurement
        As measured.
    view
        View of its section.
    """
    matcher = _matcher()
    if matcher is None:
        return RegimeResult(dict.fromkeys(COLUMNS), ("no_atlas",), None)
    match = matcher.match(descriptors(measurement.record, measurement.curves), view)
    cells = {
        "regime": match.regime or None,
        "regime_probability": _number(match.probability),
        "regime_set": " ".join(match.prediction_set) or None,
        "atlas_distance": _number(match.distance),
    }
    return RegimeResult(cells, match.flags, _plain(asdict(match)))


@functools.cache
def look_alike(run: str, *, longest: int, quality: int) -> bytes:
    """Picture of a simulated particle in the style of a particle's own picture (WebP): same grey, outline and pores drawn.

    Parameters
    ----------
    run
        Name of the run in the packaged atlas.
    longest
        Longer side in pixels.
    quality
        Quality of the compression, 1…100.

    Raises
    ------
    StoreError
        If the atlas holds no such run.
    """
    matcher = _matcher()
    if matcher is None:
        raise StoreError("no atlas comes with this installation, so there is no simulated particle to show")
    field = matcher.atlas.run(run).field
    pores, particle = masks(field)
    bath, rich = np.quantile(field, [0.01, 0.99])
    grey = _PORE_GREY + (_POLYMER_GREY - _PORE_GREY) * (field - bath) / (rich - bath)
    return thumbnail(
        np.clip(grey, 0, 1).astype(np.float32), particle.astype(np.uint8), pores, longest=longest, quality=quality
    )


def pooled_cells(matches: Sequence[Mapping[str, Any]], *, wanted: str | None = None) -> dict[str, Any]:
    """Columns of batches.csv from the matches of a batch's particles, as ``regime_of`` wrote them.

    Parameters
    ----------
    matches
        One per particle that counts; empty where none was matched.
    wanted
        Regime wanted, for the advice; None asks for none.
    """
    if not matches:
        return {"regime": None, "regime_probability": None, "regime_set": None, "advice": None}
    found = pool([_match(m) for m in matches])
    return {
        "regime": found.regime or None,
        "regime_probability": _number(found.probability),
        "regime_set": " ".join(found.prediction_set) or None,
        "advice": _advice(found, matches, wanted),
    }


def _advice(found: BatchMatch, matches: Sequence[Mapping[str, Any]], wanted: str | None) -> str | None:
    """Moves from the regime found to the one wanted, with their evidence; None where there is nothing to say."""
    matcher = _matcher()
    if matcher is None or wanted is None or found.regime not in found.probabilities or found.regime == wanted:
        return None
    like = [n["run"] for m in matches for n in m["nearest"]]
    moves = what_to_change(matcher.atlas, found.regime, wanted, like=like)
    if not moves:
        return None
    told = "; ".join(f"{m.words} ({max(m.up, m.down)} of {m.up + m.down} pairs of simulations)" for m in moves)
    return f"{told[:1].upper()}{told[1:]}. {CAUTION}"


def _match(plain: Mapping[str, Any]) -> Match:
    """The part of a match that pooling needs, from plain values."""
    numbers = {k: _undefined(v) for k, v in plain["probabilities"].items()}
    return Match(
        regime=plain["regime"],
        probability=_undefined(plain["probability"]),
        probabilities=numbers,
        prediction_set=tuple(plain["prediction_set"]),
        distance=_undefined(plain["distance"]),
        unlike=plain["unlike"],
        nearest=(),
        parameters={},
        scope=plain["scope"],
        set_level=_undefined(plain["set_level"]),
        flags=tuple(plain["flags"]),
    )


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, Interval):
        return _plain(asdict(value))
    return _number(value) if isinstance(value, float) else value


def _number(value: float) -> float | None:
    """JSON knows no NaN: an undefined value is null. Nine digits keep the file short and lose nothing that is known."""
    return float(f"{value:.9g}") if math.isfinite(value) else None


def _undefined(value: float | None) -> float:
    return math.nan if value is None else float(value)
