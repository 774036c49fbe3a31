"""The recipe of a run: one TOML file, checked key by key, whose content decides the tables.

Sections are the settings of the rooms (``[intake]``, ``[segment]``, ``[measure]``, ``[qc]``, ``[report]``); ``seed``, ``workers`` and
``batch_name`` stand above them. ``workers``, ``[qc]`` and ``[report]`` change nothing that is measured and are left out of the digest
that decides whether a run may be continued.
"""

from __future__ import annotations

import dataclasses
import difflib
import hashlib
import json
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import pydantic

from poroscan.errors import SettingsError
from poroscan.intake.settings import IntakeSettings
from poroscan.measure.settings import MeasureSettings
from poroscan.qc.limits import check_limits
from poroscan.qc.settings import Limit, QcSettings
from poroscan.report.regime import REGIME_WORDS
from poroscan.report.settings import ReportSettings
from poroscan.report.toml_text import toml_text
from poroscan.segment.settings import SegmentSettings

#: Keys that leave every measured number as it is.
_WITHOUT_EFFECT = ("workers", "qc", "report")


class Recipe(pydantic.BaseModel):
    """Everything a user can choose about a run.

    Parameters
    ----------
    seed
        Root of all randomness; each picture's own seed follows from it and from the picture's content.
    workers
        Number of processes; None leaves it to the command. Has no influence on any result.
    batch_name
        Name of the batch of pictures that lie directly in the folder; None takes the folder's own name.
    intake, segment, measure, qc, report
        Settings of the rooms; ``qc`` holds the limits.
    """

    model_config = pydantic.ConfigDict(extra="forbid", frozen=True)

    seed: int = pydantic.Field(default=0, ge=0, lt=2**63)
    workers: int | None = pydantic.Field(default=None, ge=0, le=1024)
    batch_name: str | None = pydantic.Field(default=None, min_length=1, max_length=200)
    intake: IntakeSettings = IntakeSettings()
    segment: SegmentSettings = SegmentSettings()
    measure: MeasureSettings = MeasureSettings()
    qc: QcSettings = QcSettings()
    report: ReportSettings = ReportSettings()

    def plain(self) -> dict[str, Any]:
        """The whole recipe as plain values, ready for JSON, without what belongs to the machine (``workers``)."""
        return self.model_dump(mode="json", exclude={"workers"})

    def digest(self) -> str:
        """SHA-256 of everything that decides what is measured."""
        data = self.model_dump(mode="json", exclude=set(_WITHOUT_EFFECT))
        return hashlib.sha256(json.dumps(data, sort_keys=True).encode()).hexdigest()


def load_recipe(path: str | Path, *, changes: Mapping[str, Any] | None = None) -> Recipe:
    """Read and check a recipe file.

    Parameters
    ----------
    path
        TOML file.
    changes
        Values that take precedence, by dotted key (``"segment.view"``), as given on a command line.

    Raises
    ------
    SettingsError
        If the file cannot be read, is not TOML, or holds an unknown key or a wrong value; the message names the
        key with its table, and the nearest known key.
    """
    path = Path(path)
    try:
        tables = tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except OSError as error:
        raise SettingsError(f"recipe {path}: {error.strerror or error}; give a readable TOML file") from None
    except UnicodeDecodeError:
        raise SettingsError(f"recipe {path} is not UTF-8 text; save it as UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(f"recipe {path} is not valid TOML: {error}") from None
    return make_recipe(tables, changes=changes, where=f"recipe {path}")


def make_recipe(
    tables: Mapping[str, Any] | None = None, *, changes: Mapping[str, Any] | None = None, where: str = "recipe"
) -> Recipe:
    """Build a recipe from plain tables.

    Parameters
    ----------
    tables
        Nested tables as TOML or ``Recipe.plain`` gives them; None takes every default.
    changes
        Values that take precedence, by dotted key.
    where
        What the message of an error calls the recipe.

    Raises
    ------
    SettingsError
        If a key is unknown or a value wrong, or a limit names an unknown quantity or regime.
    """
    merged = _merged(tables or {}, changes or {})
    try:
        # JSON mode is strict about types ("5" is no number, true no integer) and still takes lists for tuples.
        recipe = Recipe.model_validate_json(json.dumps(merged, default=str), strict=True)
    except pydantic.ValidationError as error:
        raise SettingsError(f"{where}: " + "; ".join(_words(e, merged) for e in error.errors())) from None
    try:
        check_limits(recipe.qc, regimes=[key for key in REGIME_WORDS if key != "unlike_atlas"])
    except SettingsError as error:
        raise SettingsError(f"{where}: {error}") from None
    return recipe


def recipe_to_toml(recipe: Recipe) -> str:
    """The recipe as TOML text with every key, to start one's own from."""
    return toml_text(recipe.plain())


def differences(one: Mapping[str, Any], two: Mapping[str, Any]) -> list[str]:
    """Keys in which two plain recipes differ, as ``[table] key: old -> new``; keys without effect are left out."""
    left, right = (dict(_flat({k: v for k, v in x.items() if k not in _WITHOUT_EFFECT})) for x in (one, two))
    return [
        f"{_shown(key)}: {left.get(key)!r} -> {right.get(key)!r}"
        for key in dict.fromkeys([*left, *right])
        if left.get(key) != right.get(key)
    ]


def _merged(tables: Mapping[str, Any], changes: Mapping[str, Any]) -> dict[str, Any]:
    merged: dict[str, Any] = {k: dict(v) if isinstance(v, Mapping) else v for k, v in tables.items()}
    for dotted, value in changes.items():
        table, _, key = dotted.rpartition(".")
        if table:
            inner = merged.setdefault(table, {})
            if isinstance(inner, dict):
                inner[key] = value
        else:
            merged[key] = value
    return merged


def _known() -> dict[str, tuple[str, ...]]:
    """Table -> its keys; the table "" holds the keys above all tables and the names of the tables."""
    known: dict[str, tuple[str, ...]] = {"": tuple(Recipe.model_fields)}
    for name, info in Recipe.model_fields.items():
        if dataclasses.is_dataclass(info.annotation):
            known[name] = tuple(f.name for f in dataclasses.fields(info.annotation))
    return known | {"qc.limits": tuple(f.name for f in dataclasses.fields(Limit))}


def _words(error: Any, data: Mapping[str, Any]) -> str:
    place = tuple(error["loc"])
    if error["type"] in ("extra_forbidden", "unexpected_keyword_argument"):
        return _unknown_key(place)
    message = error["msg"].removeprefix("Value error, ")
    found = error.get("input")
    if error["type"] == "value_error":  # from the settings' own checks, which name the key and what it got
        return f"{_shown(place)}: {message}" if len(place) > 1 else f"[{place[0]}] {message}" if place else message
    text = f"{_shown(place)}: {message[:1].lower()}{message[1:]}, not {found!r}"
    if isinstance(found, str) and found[:1].isdigit() and "number" in message:
        return f"{text}; give the number alone, without quotes: its unit is that of the column"
    return text


def _unknown_key(place: tuple[Any, ...]) -> str:
    table, key, known = ".".join(str(p) for p in place[:-1] if not isinstance(p, int)), str(place[-1]), _known()
    here = difflib.get_close_matches(key, known.get(table, ()), n=1, cutoff=0.6)
    elsewhere = [t for t, keys in known.items() if t != table and key in keys]
    if here and key not in known.get(table, ()):
        advice = f"did you mean {_shown((*place[:-1], here[0]))}?"
    elif elsewhere:
        advice = f"it belongs in {_table(elsewhere[0]) if elsewhere[0] else 'the top of the file, above all tables'}"
    else:
        advice = f"known here: {', '.join(known.get(table, ()))}"
    return f"unknown key {_shown(place)}; {advice}"


def _table(name: str) -> str:
    return f"[[{name}]]" if "." in name else f"[{name}]"


def _shown(place: tuple[Any, ...]) -> str:
    numbers = [i for i, p in enumerate(place) if isinstance(p, int)]
    if numbers:  # one of several tables of the same name: the reader counts from 1
        i = numbers[0]
        table, rest = ".".join(str(p) for p in place[:i]), ".".join(str(p) for p in place[i + 1 :])
        return f"[[{table}]] number {place[i] + 1}{f', {rest}' if rest else ''}"
    parts = [str(p) for p in place if p != ""]
    if len(parts) == 1:
        return f"[{parts[0]}]" if parts[0] in _known() else parts[0]
    return f"[{parts[0]}] " + ".".join(parts[1:])


def _flat(data: Mapping[str, Any], prefix: tuple[str, ...] = ()) -> Iterator[tuple[tuple[str, ...], Any]]:
    for key, value in data.items():
        if isinstance(value, Mapping):
            yield from _flat(value, (*prefix, key))
        else:
            yield (*prefix, key), value
