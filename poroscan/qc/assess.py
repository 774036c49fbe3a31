"""All limits on all batches: verdicts, and the standardised statements asked for beside them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from poroscan.qc.acceptance import Acceptance, Plan, accept
from poroscan.qc.capability import Capability, capability
from poroscan.qc.estimate import Sample, counted, sample
from poroscan.qc.limits import Outcome, Verdict, judge, overall
from poroscan.qc.regime_check import RegimeVerdict, judge_regime
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
    """One batch against all limits; ``outcome`` is None where there are none, ``regime`` where none is wanted."""

    batch: str
    particles: int
    images: int
    results: tuple[LimitResult, ...]
    outcome: Outcome | None
    regime: RegimeVerdict | None = None


def assess(
    particles: pd.DataFrame, settings: QcSettings, *, batches: Mapping[str, Mapping[str, Any]] | None = None
) -> dict[str, BatchAssessment]:
    """Hold every batch against the limits.

    Parameters
    ----------
    particles
        Rows of particles.csv.
    settings
        Limits; checked before (``limits.check_limits``).
    batches
        Rows of batches.csv by name, for their regime; a batch without any particle is assessed too. None takes the
        batches of the particles, without regime.
    """
    found = {str(name): rows for name, rows in particles.groupby("batch", sort=False, dropna=False)}
    regimes: Mapping[str, Mapping[str, Any]] = {name: {} for name in found} if batches is None else batches
    none = particles.iloc[:0]
    return {name: assess_batch(name, found.get(name, none), settings, row=row) for name, row in regimes.items()}


def assess_batch(
    name: str, rows: pd.DataFrame, settings: QcSettings, *, row: Mapping[str, Any] | None = None
) -> BatchAssessment:
    """Hold one batch against the limits.

    Parameters
    ----------
    name
        Name of the batch.
    rows
        Its rows of particles.csv; none give verdicts that are not decided.
    settings
        Limits, regime wanted, smallest counts.
    row
        Its row of batches.csv, for the regime found.
    """
    used = counted(rows)
    images = int(used["image"].nunique())
    results = tuple(_result(limit, rows, settings, images) for limit in settings.limits)
    regime = _regime(settings, row or {}, len(used), images)
    outcomes = [r.verdict.outcome for r in results] + ([regime.outcome] if regime else [])
    return BatchAssessment(name, len(used), images, results, overall(outcomes) if outcomes else None, regime)


def _regime(settings: QcSettings, row: Mapping[str, Any], particles: int, images: int) -> RegimeVerdict | None:
    if settings.regime is None:
        return None
    verdict = judge_regime(settings.regime, row)
    if verdict.found is not None and particles < settings.min_particles:
        few = f"{particles} of at least {settings.min_particles} particles"
        return replace(verdict, outcome="not_decided", reason=few)
    if verdict.found is not None and images < settings.min_images:
        return replace(verdict, outcome="not_decided", reason=f"{images} of at least {settings.min_images} pictures")
    return verdict


def _result(limit: Limit, rows: pd.DataFrame, settings: QcSettings, images: int) -> LimitResult:
    s = sample(rows, limit.quantity)
    verdict = judge(limit, s.values, s.mean, settings, images=images)
    return LimitResult(
        verdict,
        s,
        tolerance=_tolerance(limit, s),
        capability=_capability(limit, s),
        acceptance=_acceptance(limit, s) if "acceptance_by_variables" in limit.also else None,
    )


def _tolerance(limit: Limit, s: Sample) -> ToleranceInterval | None:
    if "tolerance_interval" not in limit.also or s.values.size < 2:
        return None
    return tolerance_interval(s.values, side=_side(limit))


def _side(limit: Limit) -> str:
    return "both" if limit.low is not None and limit.high is not None else "low" if limit.high is None else "high"


def _capability(limit: Limit, s: Sample) -> Capability | None:
    if "capability" not in limit.also or s.values.size < 2 or not np.ptp(s.values) > 0:
        return None
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
