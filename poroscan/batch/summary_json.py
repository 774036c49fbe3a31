"""summary.json: the run in one structured file for other programs, with a published JSON Schema."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping
from importlib import resources
from typing import Any

from poroscan.batch.limits_table import LIMIT_COLUMNS
from poroscan.batch.summary import AVERAGED, COUNT_COLUMNS

#: Grows when a key changes its meaning or goes; new keys leave it as it is.
SUMMARY_FORMAT = 1

_INPUT_KEYS = ("batch", "image", "sha256", "outcome", "particles", "reason", "remedy")


def summary_json(
    about: Mapping[str, Any], batches: Iterable[Mapping[str, Any]], limits: Iterable[Mapping[str, Any]]
) -> str:
    """Text of summary.json.

    Parameters
    ----------
    about
        Content of run.json.
    batches
        Rows of batches.csv.
    limits
        Rows of limits.csv.
    """
    by_batch: dict[str, list[dict[str, Any]]] = {}
    for row in limits:
        by_batch.setdefault(row["batch"], []).append(_limit(row))
    content = {
        "format": SUMMARY_FORMAT,
        "program": about["program"],
        "version": about["version"],
        "seed": about["seed"],
        "recipe_sha256": about["recipe_sha256"],
        "batches": [_batch(row, by_batch.get(row["batch"], [])) for row in batches],
        "inputs": [{key: line[key] for key in _INPUT_KEYS if key in line} for line in about["inputs"]],
    }
    return json.dumps(content, ensure_ascii=False, indent=1, allow_nan=False) + "\n"


def schema() -> dict[str, Any]:
    """The JSON Schema of summary.json (draft 2020-12), as packaged and as published in ``docs/summary.schema.json``."""
    content: dict[str, Any] = json.loads(
        resources.files("poroscan.batch").joinpath("summary.schema.json").read_text(encoding="utf-8")
    )
    return content


def _batch(row: Mapping[str, Any], limits: list[dict[str, Any]]) -> dict[str, Any]:
    return {
        **{key: row[key] for key in COUNT_COLUMNS},
        "regime": row.get("regime"),
        "regime_probability": _known(row.get("regime_probability")),
        "regime_set": (row.get("regime_set") or "").split(),
        "verdict": row.get("verdict"),
        "flags": (row.get("flags") or "").split(),
        "estimates": {q.key: _estimate(row, q.key, q.unit_words) for q in AVERAGED if _known(row[q.key]) is not None},
        "limits": limits,
    }


def _estimate(row: Mapping[str, Any], key: str, unit: str) -> dict[str, Any]:
    ends = {end: _known(row[f"{key}_{end}"]) for end in ("low", "high", "sd")}
    return {"value": row[key], **ends, "n": row[f"{key}_n"], "unit": unit}


def _limit(row: Mapping[str, Any]) -> dict[str, Any]:
    return {key: row[key] for key in LIMIT_COLUMNS if key != "batch" and row[key] is not None}


def _known(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value
