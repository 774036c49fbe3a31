"""Limits and verdicts as the report shows them: a table, a sentence, and the particles against the limits."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from types import MappingProxyType

from markupsafe import Markup

from poroscan.qc.assess import BatchAssessment, LimitResult
from poroscan.qc.interval import bounds_of, mean_interval
from poroscan.qc.limits import Outcome, Verdict
from poroscan.qc.regime_check import RegimeVerdict
from poroscan.qc.settings import Limit
from poroscan.report.numbers import UNDEFINED, interval, plain
from poroscan.report.qc_charts import distribution_chart
from poroscan.report.regime import regime_words
from poroscan.report.words import count, labelled

VERDICT_WORDS: Mapping[Outcome, str] = MappingProxyType(
    {"within": "within limits", "outside": "outside limits", "not_decided": "not decided"}
)


@dataclass(frozen=True)
class LimitLine:
    """One row of the table of limits, in words.

    Parameters
    ----------
    what
        Quantity with its unit, and what of it.
    limits
        Limits in words.
    found
        What was found, with its interval.
    n
        Particles that entered.
    outcome, verdict
        Key and words of the verdict.
    note
        Why it is not decided, what would decide it, and the statements asked for.
    further
        What would decide it; empty where nothing is known to.
    """

    what: str
    limits: str
    found: str
    n: int
    outcome: Outcome
    verdict: str
    note: str
    further: str = ""


def limit_lines(assessment: BatchAssessment) -> Iterator[LimitLine]:
    """Rows of the table of limits of one batch.

    Parameters
    ----------
    assessment
        The batch against its limits.
    """
    for result in assessment.results:
        v = result.verdict
        further = _further(v)
        notes = [v.reason, further, *_statements(result)]
        yield LimitLine(
            _what(v.limit),
            _limits(v.limit),
            _found(v),
            v.n,
            v.outcome,
            VERDICT_WORDS[v.outcome],
            _sentences(notes),
            further,
        )
    if assessment.regime is not None:
        yield _regime_line(assessment.regime, assessment.particles)


def _further(v: Verdict) -> str:
    """What would decide it; where the smallest number is not reached, more may be needed after that."""
    if not v.further:
        return ""
    number = count(v.further, "further particle")
    if v.n and " of at least " in v.reason:
        return f"{number} {'is' if v.further == 1 else 'are'} needed before it can be decided"
    return f"about {number} would decide it"


def verdict_answer(assessment: BatchAssessment) -> list[str]:
    """Is the batch good: the verdict with what it rests on, then each limit that decides it.

    Parameters
    ----------
    assessment
        The batch against its limits.
    """
    if assessment.outcome is None:
        return ["No verdict: the recipe gives no limits ([[qc.limits]])."]
    lines = list(limit_lines(assessment))
    head = VERDICT_WORDS[assessment.outcome]
    basis = f"{count(assessment.particles, 'particle')} in {count(assessment.images, 'picture')}"
    text = f"{head[:1].upper()}{head[1:]}, judged on {basis}"
    if assessment.outcome == "within":
        met = "the only limit is met" if len(lines) == 1 else f"all {len(lines)} limits are met"
        return [f"{text}: {met}."]
    deciding = [x for x in lines if x.outcome == assessment.outcome]
    return [f"{text}.", *(_deciding(line) for line in deciding)]


def _deciding(line: LimitLine) -> str:
    found = "not determined" if line.found == UNDEFINED else line.found
    further = f"; {line.further}" if line.further else ""
    return f"{line.what}: {found}, wanted {line.limits}{further}."


def distribution_figures(assessment: BatchAssessment, *, level: float = 0.95) -> Iterator[tuple[str, Markup]]:
    """Particles against the limits, one chart per limited quantity.

    Parameters
    ----------
    assessment
        The batch against its limits.
    level
        Confidence level of the interval of the mean.

    Yields
    ------
    tuple
        Caption and chart.
    """
    done = set()
    for result in assessment.results:
        limit, s = result.verdict.limit, result.sample
        if (limit.quantity, limit.low, limit.high) in done:
            continue
        done.add((limit.quantity, limit.low, limit.high))
        ends = (s.mean.mean, *mean_interval(s.mean, level=level, bounds=bounds_of(limit.quantity)))
        label = (
            f"{labelled(limit.quantity)} of {count(s.values.size, 'particle')} against {_limits_of_particles(limit)}"
        )
        yield label, distribution_chart(
            s.values, limits=(limit.low, limit.high), mean=ends, x_label=labelled(limit.quantity),
            label=f"{label}; {_share(result)}",
        )  # fmt: skip


def _share(result: LimitResult) -> str:
    limit, x = result.verdict.limit, result.sample.values
    out = int(
        (
            (x < (-math.inf if limit.low is None else limit.low))
            | (x > (math.inf if limit.high is None else limit.high))
        ).sum()
    )
    return f"{out} outside"


def _what(limit: Limit) -> str:
    of = {
        "mean": "batch mean",
        "percentile": f"{limit.percentile:g}th percentile of the particles",
        "share_outside": "share of particles outside",
    }[limit.on]
    return f"{labelled(limit.quantity)}, {of}"


def _limits(limit: Limit) -> str:
    if limit.on == "share_outside":
        return f"at most {100 * limit.max_share:g}\u00a0% outside {_limits_of_particles(limit)}"
    return _limits_of_particles(limit)


def _limits_of_particles(limit: Limit) -> str:
    if limit.low is None:
        return f"at most {limit.high:g}"
    return f"at least {limit.low:g}" if limit.high is None else f"{limit.low:g} to {limit.high:g}"


def _found(v: Verdict) -> str:
    if math.isnan(v.value):
        return UNDEFINED
    if v.limit.on == "share_outside":
        ends = f" ({100 * v.low:.0f} to {100 * v.high:.0f}\u00a0%)" if math.isfinite(v.low + v.high) else ""
        return f"{100 * v.value:.0f}\u00a0%{ends}"
    if math.isfinite(v.low + v.high):
        return interval(v.value, v.low, v.high)
    ends = f" (at least {plain(v.low)})" if math.isfinite(v.low) else ""
    return plain(v.value) + (f" (at most {plain(v.high)})" if math.isfinite(v.high) else ends)


def _statements(result: LimitResult) -> Iterator[str]:
    if (t := result.tolerance) is not None and math.isfinite(t.factor):
        ends = " to ".join(plain(x) for x in (t.low, t.high) if math.isfinite(x))
        yield (
            f"{100 * t.content:.0f}\u00a0% of the particles lie in {ends} with {100 * t.confidence:.0f}\u00a0% confidence "
            "(ISO 16269-6, normal population)"
        )
    if (c := result.capability) is not None:
        parts = [
            ("Cp", c.cp, c.cp_low, c.cp_high),
            ("Cpk", c.cpk, c.cpk_low, c.cpk_high),
            ("Cpm", c.cpm, math.nan, math.nan),
        ]
        shown = [f"{name} {interval(*ends)}" for name, *ends in parts if math.isfinite(ends[0])]
        if shown:
            yield f"{', '.join(shown)} (ISO 22514-2)"
    if (a := result.acceptance) is not None:
        word = "accepted" if a.accepted else "not accepted"
        yield f"{word} by the plan n = {result.verdict.limit.plan_n}, k = {a.k:g}: statistic {plain(a.statistic)} (form of ISO 3951)"


def _regime_line(v: RegimeVerdict, n: int) -> LimitLine:
    found = regime_words(v.found) if v.found else UNDEFINED
    why = v.reason if v.outcome == "not_decided" else ""
    return LimitLine(
        "Demixing regime", regime_words(v.wanted), found, n, v.outcome, VERDICT_WORDS[v.outcome], _sentences([why])
    )


def _sentences(parts: list[str]) -> str:
    return " ".join(f"{p[:1].upper()}{p[1:]}." for p in parts if p)
