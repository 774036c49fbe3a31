"""Plain tables as TOML text, as a user would write them into a recipe."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any


def toml_text(tables: Mapping[str, Any]) -> str:
    """Keys and one level of tables as TOML; what is not set (None) stands as a comment.

    Parameters
    ----------
    tables
        Values that TOML knows, lists of them, and tables of these.

    Examples
    --------
    >>> print(toml_text({"seed": 1, "segment": {"view": "auto", "threshold": None}}), end="")
    seed = 1
    <BLANKLINE>
    [segment]
    view = "auto"
    # threshold = (not set)
    """
    lines = [_line(key, value) for key, value in tables.items() if not isinstance(value, Mapping)]
    for name, table in tables.items():
        if isinstance(table, Mapping):
            lines += ["", f"[{name}]", *(_line(k, v) for k, v in table.items() if not _are_tables(v))]
            for key, several in table.items():
                for inner in several if _are_tables(several) else ():
                    lines += ["", f"[[{name}.{key}]]", *(_line(k, v) for k, v in inner.items())]
    return "\n".join(lines) + "\n"


def _are_tables(value: Any) -> bool:
    return isinstance(value, list | tuple) and len(value) > 0 and all(isinstance(v, Mapping) for v in value)


def _line(key: str, value: Any) -> str:
    return f"# {key} = (not set)" if value is None else f"{key} = {_value(value)}"


def _value(value: Any) -> str:
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_value(v) for v in value) + "]"
    return json.dumps(value, ensure_ascii=False)  # for text, numbers and truth values the two notations are the same
