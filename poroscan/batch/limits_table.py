"""limits.csv: one row per batch and limit, what was held against what, and what came of it."""

from __future__ import annotations

import functools
import math
from collections.abc import Iterator, Mapping
from types import MappingProxyType
from typing import Any

import pyarrow as pa

from poroscan.qc.assess import BatchAssessment, LimitResult
from poroscan.qc.limits import Outcome
from poroscan.qc.regime_check import RegimeVerdict

_TEXT = "text"
_NUMBER = "number"
_WHOLE = "whole number"
_TRUTH = "true or false"

#: Column -> type and words, in order.
LIMIT_COLUMNS: Mapping[str, tuple[str, str]] = MappingProxyType(
    {
        "batch": (_TEXT, "name of the batch"),
        "quantity": (_TEXT, "column that is held against the limit; regime for the regime wanted"),
        "on": (_TEXT, "what of it: mean, percentile, share_outside or regime"),
        "percentile": (_NUMBER, "percentile of the particles, where that is held against the limit"),
        "limit_low": (_NUMBER, "lower limit, in the unit of the quantity"),
        "limit_high": (_NUMBER, "upper limit, in the unit of the quantity"),
        "max_share": (_NUMBER, "largest share of particles outside the limits"),
        "wanted": (_TEXT, "regime wanted"),
        "value": (_NUMBER, "what was found"),
        "low": (_NUMBER, "lower end of its interval"),
        "high": (_NUMBER, "upper end of its interval"),
        "found": (_TEXT, "regime found"),
        "n": (_WHOLE, "particles that entered"),
        "verdict": (_TEXT, "within, outside or not_decided"),
        "reason": (_TEXT, "why it is not decided, in words"),
        "further": (
            _WHOLE,
            "further particles that would decide it, the estimate staying where it is, or that are needed first",
        ),
        "tolerance_low": (_NUMBER, "lower end of the tolerance interval (ISO 16269-6)"),
        "tolerance_high": (_NUMBER, "upper end of the tolerance interval (ISO 16269-6)"),
        "tolerance_content": (_NUMBER, "share of the particles that it holds"),
        "tolerance_confidence": (_NUMBER, "confidence with which it does"),
        "cp": (_NUMBER, "capability index Cp (ISO 22514-2)"),
        "cp_low": (_NUMBER, "lower end of its 95 % interval"),
        "cp_high": (_NUMBER, "upper end of its 95 % interval"),
        "cpk": (_NUMBER, "capability index Cpk (ISO 22514-2)"),
        "cpk_low": (_NUMBER, "lower end of its 95 % interval (Bissell 1990)"),
        "cpk_high": (_NUMBER, "upper end of its 95 % interval (Bissell 1990)"),
        "cpm": (_NUMBER, "capability index Cpm against the target"),
        "plan_n": (_WHOLE, "sample size of the acceptance plan (ISO 3951 form)"),
        "plan_k": (_NUMBER, "acceptability constant of the plan"),
        "plan_statistic": (_NUMBER, "quality statistic of the first plan_n particles"),
        "plan_accepted": (_TRUTH, "the plan accepts the lot"),
    }
)

_ARROW = {_TEXT: pa.string(), _NUMBER: pa.float64(), _WHOLE: pa.int64(), _TRUTH: pa.bool_()}

#: Verdict in words for people.
VERDICT_WORDS: Mapping[Outcome, str] = MappingProxyType(
    {"within": "within limits", "outside": "outside limits", "not_decided": "not decided"}
)


@functools.cache
def limit_schema() -> pa.Schema:
    """Arrow schema of limits.parquet."""
    return pa.schema([(name, _ARROW[kind]) for name, (kind, _) in LIMIT_COLUMNS.items()])


def limit_rows(assessment: BatchAssessment) -> Iterator[dict[str, Any]]:
    """Rows of one batch: its limits in the order of the recipe, then the regime wanted.

    Parameters
    ----------
    assessment
        The batch against its limits.
    """
    for result in assessment.results:
        yield _complete({"batch": assessment.batch} | _limit(result) | _statements(result))
    if assessment.regime is not None:
        yield _complete({"batch": assessment.batch} | _regime(assessment.regime, assessment.particles))


def verdict_line(assessment: BatchAssessment) -> str:
    """One line for a terminal: the batch, its verdict, and what decides it.

    Parameters
    ----------
    assessment
        The batch against its limits; with at least one.

    Raises
    ------
    ValueError
        If the batch has no limits.
    """
    if assessment.outcome is None:
        raise ValueError(f"batch {assessment.batch!r} has no limits and therefore no verdict")
    deciding = [
        _short(row) for row in limit_rows(assessment) if row["verdict"] == assessment.outcome != "within"
    ]  # fmt: skip
    tail = f": {'; '.join(deciding)}" if deciding else ""
    return f"batch {assessment.batch}: {VERDICT_WORDS[assessment.outcome]}{tail}"


def _short(row: Mapping[str, Any]) -> str:
    what = row["quantity"] + {"percentile": f" ({row['percentile']:g}th percentile)" if row["percentile"] else "",
                              "share_outside": " (share outside)"}.get(row["on"], "")  # fmt: skip
    value = "" if row["value"] is None else f" {row['value']:.4g}"
    if row["low"] is not None and row["high"] is not None:
        value += f" ({row['low']:.4g} to {row['high']:.4g})"
    reason = f", {row['reason']}" if row["reason"] else ""
    further = f", about {row['further']} more needed" if row["further"] else ""
    return f"{what}{value}, wanted {_wanted(row)}{reason}{further}"


def _wanted(row: Mapping[str, Any]) -> str:
    if row["wanted"]:
        return str(row["wanted"])
    low, high = row["limit_low"], row["limit_high"]
    between = f"at most {high:g}" if low is None else f"at least {low:g}" if high is None else f"{low:g} to {high:g}"
    return between if row["max_share"] is None else f"at most {row['max_share']:g} outside {between}"


def _limit(result: LimitResult) -> dict[str, Any]:
    v = result.verdict
    return {
        "quantity": v.limit.quantity,
        "on": v.limit.on,
        "percentile": v.limit.percentile if v.limit.on == "percentile" else None,
        "limit_low": v.limit.low,
        "limit_high": v.limit.high,
        "max_share": v.limit.max_share if v.limit.on == "share_outside" else None,
        "value": v.value,
        "low": v.low,
        "high": v.high,
        "n": v.n,
        "verdict": v.outcome,
        "reason": v.reason,
        "further": v.further,
    }


def _statements(result: LimitResult) -> dict[str, Any]:
    row: dict[str, Any] = {}
    if (t := result.tolerance) is not None:
        row |= {"tolerance_low": t.low, "tolerance_high": t.high}
        row |= {"tolerance_content": t.content, "tolerance_confidence": t.confidence}
    if (c := result.capability) is not None:
        row |= {name: getattr(c, name) for name in ("cp", "cp_low", "cp_high", "cpk", "cpk_low", "cpk_high", "cpm")}
    if (a := result.acceptance) is not None:
        row |= {"plan_n": result.verdict.limit.plan_n, "plan_k": a.k}
        row |= {"plan_statistic": a.statistic, "plan_accepted": a.accepted}
    return row


def _regime(verdict: RegimeVerdict, particles: int) -> dict[str, Any]:
    return {
        "quantity": "regime",
        "on": "regime",
        "wanted": verdict.wanted,
        "found": verdict.found,
        "n": particles,
        "verdict": verdict.outcome,
        "reason": verdict.reason,
    }


def _complete(row: Mapping[str, Any]) -> dict[str, Any]:
    return {name: _plain(row.get(name)) for name in LIMIT_COLUMNS}


def _plain(value: Any) -> Any:
    return None if value == "" or (isinstance(value, float) and not math.isfinite(value)) else value
