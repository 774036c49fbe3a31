"""All limits on all batches: verdicts, and the standardised statements asked for beside them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from poroscan.qc.acceptance import Acceptance, Plan, accept
from poroscan.qc.capability import Capability, capability
from poroscan.qc.estimate import Sample, counted, sample
from poroscan.qc.limits import Outcome, Verdict, judge, overall
from poroscan.qc.settings import Limit, QcSettings
from poroscan.qc.tolerance import ToleranceInterval, tolerance_interval


@dataclass(frozen=True, eq=False)
class LimitResult:
    """One limit on one batch: verdict, values, and the statements asked for (None where not asked for or not possible)."""

    verdict: Verdict
    sample: Sample
    tolerance: ToleranceInterval | None = None
    capability: Capability | None = None
    acceptance: Acceptance | None = None


@dataclass(frozen=True, eq=False)
class BatchAssessment:
    """One batch against all limits; ``outcome`` is None where there are none."""

    batch: str
    particles: int
    images: int
    results: tuple[LimitResult, ...]
    outcome: Outcome | None


def assess(particles: pd.DataFrame, settings: QcSettings) -> dict[str, BatchAssessment]:
    """Hold every batch against the limits.

    Parameters
    ----------
    particles
        Rows of particles.csv.
    settings
        Limits; checked before (``limits.check_limits``).
    """
    return {
        str(name): assess_batch(str(name), rows, settings)
        for name, rows in particles.groupby("batch", sort=False, dropna=False)
    }


def assess_batch(name: str, rows: pd.DataFrame, settings: QcSettings) -> BatchAssessment:
    """Hold one batch against the limits."""
    used = counted(rows)
    images = int(used["image"].nunique())
    results = tuple(_result(limit, rows, settings, images) for limit in settings.limits)
    outcome = overall([r.verdict for r in results]) if results else None
    return BatchAssessment(name, len(used), images, results, outcome)


def _result(limit: Limit, rows: pd.DataFrame, settings: QcSettings, images: int) -> LimitResult:
    s = sample(rows, limit.quantity)
    verdict = judge(limit, s.values, s.mean, settings, images=images)
    return LimitResult(
        verdict,
        s,
        tolerance=tolerance_interval(s.values, side=_side(limit)) if "tolerance_interval" in limit.also else None,
        capability=_capability(limit, s) if "capability" in limit.also else None,
        acceptance=_acceptance(limit, s) if "acceptance_by_variables" in limit.also else None,
    )


def _side(limit: Limit) -> str:
    return "both" if limit.low is not None and limit.high is not None else "low" if limit.high is None else "high"


def _capability(limit: Limit, s: Sample) -> Capability:
    return capability(s.values, low=limit.low, high=limit.high, target=limit.target)


def _acceptance(limit: Limit, s: Sample) -> Acceptance | None:
    """The first ``plan_n`` particles in the order of the table, so that the choice cannot follow the values."""
    one_sided = (limit.low is None) != (limit.high is None)
    if limit.plan_n is None or limit.plan_k is None or s.values.size < limit.plan_n or not one_sided:
        return None
    first = s.values[: limit.plan_n]
    if not np.ptp(first) > 0:
        return None
    return accept(first, Plan(limit.plan_n, limit.plan_k), low=limit.low, high=limit.high)


def exit_outside(assessments: Mapping[str, BatchAssessment]) -> bool:
    """True where any batch is outside its limits (exit code 1)."""
    return any(a.outcome == "outside" for a in assessments.values())
