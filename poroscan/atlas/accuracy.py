"""How good the match is: on simulations it has not seen, on cuts of volumes, and on textures that no demixing made.

Splits are by simulation, never by view. Every view is judged by models fitted without its simulation; calibration and set level are
found on the other simulations as well.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.atlas.calibration import calibrate, calibration_error
from poroscan.atlas.features import Scope
from poroscan.atlas.matching import COVERAGE, Matcher, ScopeModel
from poroscan.atlas.model import folds, row_weights
from poroscan.atlas.store import Atlas
from poroscan.demix.regime import LATE, LEAN_DISPERSED, REGIMES, RICH_DISPERSED

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

_BORDER_TIME, _BORDER_SHARE = 1.5, 0.04


@dataclass(frozen=True, eq=False)
class Accuracy:
    """Figures of one kind of views.

    Parameters
    ----------
    title
        Which views.
    views, runs
        How many views of how many simulations.
    balanced
        Mean over the regimes of the share told right.
    error
        Expected calibration error.
    coverage, size
        Share of prediction sets that hold the truth, and their mean size.
    inside
        Share of the views not told ``unlike_atlas``.
    confusion
        Views by true regime (rows) and most probable regime (columns).
    """

    title: str
    views: int
    runs: int
    balanced: float
    error: float
    coverage: float
    size: float
    inside: float
    confusion: IntArray


def held_out(atlas: Atlas, matcher: Matcher) -> tuple[Accuracy, ...]:
    """Accuracy on held-out simulations: rendered whole views, clean fields, interior views."""
    found = []
    for title, scope, kind in (
        ("whole particles, rendered and segmented", "whole", "whole"),
        ("whole particles, clean fields", "whole", "clean"),
        ("interior views, rendered and segmented", "texture", "interior"),
    ):
        model = matcher.model(scope)  # type: ignore[arg-type]
        chosen = atlas.views.kind[model.rows] == kind
        if chosen.any():
            found.append(_figures(title, atlas, model, chosen, chosen))
        clear = chosen & clear_cut(atlas)[model.group]
        if clear.any() and not clear[chosen].all():
            found.append(_figures(f"{title}; clear cases", atlas, model, chosen, clear))
    return tuple(found)


def clear_cut(atlas: Atlas) -> npt.NDArray[np.bool_]:
    """Runs that do not stand at a border of the rules their regime was read by: the limits are conventions, and no section tells
    their two sides apart (docs/regimes.md). At a border: onset within a factor 1.5 of T_late, or, of an instantaneous run, a
    polymer-lean share within 0.04 of a limit.
    """
    runs = atlas.runs
    instantaneous = ~np.isin(runs.regime, ("undemixed", "delayed"))
    late = np.array([LATE[3 if g == "solid" else 2] for g in runs.group])
    with np.errstate(invalid="ignore"):
        at_late = (runs.onset > late / _BORDER_TIME) & (runs.onset < late * _BORDER_TIME)
        shares = np.minimum(np.abs(runs.lean_fraction - LEAN_DISPERSED), np.abs(runs.lean_fraction - RICH_DISPERSED))
        at_share = instantaneous & (shares < _BORDER_SHARE)
    return ~(at_late | at_share)


def _figures(
    title: str, atlas: Atlas, model: ScopeModel, kind: npt.NDArray[np.bool_], chosen: npt.NDArray[np.bool_]
) -> Accuracy:
    """Figures of the chosen rows, calibrated on all rows of their kind."""
    label = atlas.runs.label()[model.group]
    weight = row_weights(label, model.group, classes=len(REGIMES))
    probabilities, members = _cross_calibrated(model.unseen, label, model.group, weight, kind)
    inside = np.array([
        model.novelty.distance(_features(atlas, model, int(i)), without=int(model.group[i])) <= 1
        for i in np.flatnonzero(chosen)
    ])  # fmt: skip
    return _judge(
        title, probabilities[chosen], members[chosen], label[chosen], model.group[chosen], weight[chosen], inside
    )


def _features(atlas: Atlas, model: ScopeModel, index: int) -> FloatArray:
    row = atlas.views.select(model.rows[index : index + 1])
    return model.scaling(row.raw(model.scaling.scope))[0]


def _cross_calibrated(
    logits: FloatArray, label: IntArray, group: IntArray, weight: FloatArray, chosen: npt.NDArray[np.bool_]
) -> tuple[FloatArray, npt.NDArray[np.bool_]]:
    """Probabilities and sets of the chosen rows (others are left undefined), calibrated on the other half of the simulations."""
    half = folds(group, label, n=2)
    probabilities = np.empty_like(logits)
    members = np.empty(logits.shape, dtype=bool)
    for k in (0, 1):
        other, mine = chosen & (half != k), chosen & (half == k)
        calibration = calibrate(logits[other], label[other], weight[other], coverage=COVERAGE)
        probabilities[mine] = calibration.probabilities(logits[mine])
        members[mine] = calibration.members(probabilities[mine])
    return probabilities, members


def _judge(
    title: str, probabilities: FloatArray, members: npt.NDArray[np.bool_], label: IntArray, group: IntArray,
    weight: FloatArray, inside: npt.NDArray[np.bool_],
) -> Accuracy:  # fmt: skip
    rows = np.arange(len(label))
    best = probabilities.argmax(axis=1)
    confusion = np.zeros((len(REGIMES), len(REGIMES)), dtype=np.intp)
    np.add.at(confusion, (label, best), 1)
    share = weight / weight.sum()
    present = confusion.sum(axis=1) > 0
    right = np.diag(confusion)[present] / confusion.sum(axis=1)[present]
    return Accuracy(
        title, len(label), len(np.unique(group)), float(right.mean()),
        calibration_error(probabilities, label, weight), float(share @ members[rows, label]),
        float(share @ members.sum(axis=1)), float(inside.mean()), confusion,
    )  # fmt: skip


def volumes(atlas: Atlas, matcher: Matcher) -> tuple[Accuracy, ...]:
    """Accuracy on the cuts of three-dimensional runs, which no model has seen: centred and off-centre cuts, interior views."""
    solid = np.array([g == "solid" for g in atlas.runs.group])[atlas.views.run]
    found = []
    for title, scope, kind, cut in (
        ("cuts of volumes through the centre", "whole", "whole", 0.0),
        ("cuts of volumes off the centre", "whole", "whole", None),
        ("cuts of volumes, interior views", "texture", "interior", -1.0),
    ):
        chosen = solid & (atlas.views.kind == kind)
        if cut == 0.0:
            chosen &= atlas.views.cut == 0
        elif cut is None:
            chosen &= atlas.views.cut > 0
        if chosen.any():
            found.append(_unseen_set(title, atlas, matcher, scope, np.flatnonzero(chosen)))  # type: ignore[arg-type]
    return tuple(found)


def _unseen_set(title: str, atlas: Atlas, matcher: Matcher, scope: Scope, rows: IntArray) -> Accuracy:
    model, views = matcher.model(scope), atlas.views.select(rows)
    label = atlas.runs.label()[views.run]
    x = model.scaling(views.raw(scope))
    p = model.calibration.probabilities(model.classifier.logits(x))
    inside = np.array([model.novelty.distance(row) <= 1 for row in x])
    weight = np.ones(len(rows))
    return _judge(title, p, model.calibration.members(p), label, views.run, weight, inside)


def own_distances(atlas: Atlas, matcher: Matcher, scope: Scope, kind: str) -> FloatArray:
    """Distance of every view of a kind, without its own simulation."""
    model = matcher.model(scope)
    chosen = np.flatnonzero(atlas.views.kind[model.rows] == kind)
    return np.array([
        model.novelty.distance(_features(atlas, model, int(i)), without=int(model.group[i])) for i in chosen
    ])  # fmt: skip


def area_under_curve(own: FloatArray, foreign: FloatArray) -> float:
    """Chance that a foreign view is further away than an own one (area under the ROC curve; Hanley and McNeil 1982)."""
    order = np.sort(own)
    below = np.searchsorted(order, foreign, side="left") + np.searchsorted(order, foreign, side="right")
    return float(below.mean() / (2 * len(order)))


def table(figures: Sequence[Accuracy]) -> str:
    """Figures as a table in Markdown, with the confusion matrix of each kind of views."""
    lines = [
        "| views | simulations | views | balanced accuracy | calibration error | coverage of 90 % sets | mean size | inside atlas |",
        "|---|---|---|---|---|---|---|---|",
    ]
    for f in figures:
        lines.append(
            f"| {f.title} | {f.runs} | {f.views} | {f.balanced:.3f} | {f.error:.3f} | {f.coverage:.3f} | {f.size:.2f} "
            f"| {f.inside:.3f} |"
        )
    for f in figures:
        lines += [
            "",
            f"{f.title}, true regime by row, most probable by column:",
            "",
            "| | " + " | ".join(REGIMES) + " |",
        ]
        lines.append("|---" * (len(REGIMES) + 1) + "|")
        for name, row in zip(REGIMES, f.confusion, strict=True):
            lines.append(f"| {name} | " + " | ".join(str(int(n)) for n in row) + " |")
    return "\n".join(lines)
