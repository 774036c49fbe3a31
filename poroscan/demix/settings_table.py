"""Reads one TOML table into a frozen settings dataclass: types, ranges, and hints for misspelt keys."""

from __future__ import annotations

import difflib
import types
from collections.abc import Iterable, Mapping
from dataclasses import fields
from typing import Any, Literal, TypeVar, Union, get_args, get_origin, get_type_hints

from poroscan.errors import SettingsError

Settings = TypeVar("Settings")


def check_keys(table: Mapping[str, Any], known: Iterable[str], *, where: str) -> None:
    """Refuse keys that are not known, naming the nearest known one.

    Raises
    ------
    SettingsError
        For the first unknown key.
    """
    known = list(known)
    for key in table:
        if key not in known:
            near = _nearest(key, known)
            hint = f"did you mean {near!r}?" if near else f"known are {', '.join(known)}"
            raise SettingsError(f"{where}: unknown key {key!r}; {hint}")


def _nearest(key: str, known: list[str]) -> str | None:
    """The known key most like ``key``: one of the same letters before all others (``chi_np`` is ``chi_pn``)."""
    near = difflib.get_close_matches(key, known, n=len(known) or 1, cutoff=0.5)
    return next((k for k in near if sorted(k) == sorted(key)), near[0] if near else None)


def read_settings(cls: type[Settings], table: Mapping[str, Any], *, where: str) -> Settings:
    """Settings of class ``cls`` from a table of plain values.

    Parameters
    ----------
    cls
        Frozen dataclass with annotated fields; its own ``__post_init__`` checks ranges.
    table
        Plain values by field name; what is not given keeps its default.
    where
        Name of the table for messages.

    Raises
    ------
    SettingsError
        An unknown key, a value of the wrong kind, or one out of range.
    """
    hints = get_type_hints(cls)
    names = [f.name for f in fields(cls)]  # type: ignore[arg-type]
    check_keys(table, names, where=where)
    values = {key: _converted(value, hints[key], f"{where}: {key}") for key, value in table.items()}
    try:
        return cls(**values)
    except ValueError as error:
        raise SettingsError(f"{where}: {error}") from error


def _converted(value: Any, kind: Any, where: str) -> Any:
    origin = get_origin(kind)
    if origin in (Union, types.UnionType):
        return _one_of(value, get_args(kind), where)
    if origin is Literal:
        if value in get_args(kind) and not isinstance(value, bool):
            return value
        raise SettingsError(f"{where} must be one of {', '.join(map(repr, get_args(kind)))}, got {value!r}")
    if origin is tuple:
        if not isinstance(value, list | tuple):
            raise SettingsError(f"{where} must be a list, got {value!r}")
        return tuple(_converted(item, get_args(kind)[0], where) for item in value)
    return _plain(value, kind, where)


def _one_of(value: Any, kinds: tuple[Any, ...], where: str) -> Any:
    for kind in kinds:
        if kind is type(None):
            if value is None:
                return None
            continue
        try:
            return _converted(value, kind, where)
        except SettingsError:
            if kind is [k for k in kinds if k is not type(None)][-1]:
                raise
    return value


def _plain(value: Any, kind: Any, where: str) -> Any:
    words = {float: "a number", int: "a whole number", bool: "true or false", str: "a text in quotes"}
    if kind is float and isinstance(value, int | float) and not isinstance(value, bool):
        return float(value)
    if kind in (int, bool, str) and type(value) is kind:
        return value
    raise SettingsError(f"{where} must be {words.get(kind, kind)}, got {value!r}")
