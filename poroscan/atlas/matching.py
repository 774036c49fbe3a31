"""The match: from the descriptors of a section to the regime, how sure that is, and which simulated particles look like it.

>>> from poroscan.atlas import Matcher, load_packaged  # doctest: +SKIP
>>> matcher = Matcher(load_packaged())  # doctest: +SKIP
>>> matcher.match(values, "whole").regime  # doctest: +SKIP
'spinodal'
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.atlas.calibration import Calibration, calibrate, softmax
from poroscan.atlas.features import Scaling, Scope, raw_rows, scope_of
from poroscan.atlas.model import Classifier, folds, row_weights
from poroscan.atlas.novelty import Novelty
from poroscan.atlas.parameters import INFERRED, Interval, ParameterModel, fit_parameters
from poroscan.atlas.space import NAMES
from poroscan.atlas.store import Atlas
from poroscan.atlas.table import ViewTable
from poroscan.demix.regime import REGIMES

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

COVERAGE = 0.9
UNLIKE = "unlike_atlas"
#: Views of one set that stay out of every model: they test how far flat simulations carry over to cuts of volumes.
_SET_ASIDE = "solid"
_FOLDS = 5
#: Two particles of one batch are not independent (same material, same error of the model): correlation assumed between them.
_ALIKE = 0.5


@dataclass(frozen=True)
class Neighbour:
    """A simulated particle that looks like the section.

    Parameters
    ----------
    run
        Name of the run in the atlas.
    regime
        Its regime.
    distance
        Distance to it, over the distance within which 95 % of the atlas's own views lie.
    parameters
        Its formulation.
    """

    run: str
    regime: str
    distance: float
    parameters: Mapping[str, float]


@dataclass(frozen=True)
class Match:
    """What the atlas says of one section.

    Parameters
    ----------
    regime
        Key of the most probable regime; ``unlike_atlas`` where the section is unlike every simulated particle; empty where it gives
        nothing to compare.
    probability
        Calibrated probability of the most probable regime; NaN where nothing could be compared.
    probabilities
        Regime -> calibrated probability.
    prediction_set
        Regimes that cannot be ruled out at 90 % coverage, most probable first.
    distance
        Distance to the nearest simulated particles; above 1 the section is unlike the atlas.
    unlike
        The verdict.
    nearest
        The five nearest simulated particles.
    parameters
        Interval of each inferred axis of the formulation.
    scope
        ``whole`` (particle and texture were compared) or ``texture``.
    set_level
        Probability from which on a regime is in the set.
    flags
        Keys of ``quantities.FLAGS``.
    """

    regime: str
    probability: float
    probabilities: Mapping[str, float]
    prediction_set: tuple[str, ...]
    distance: float
    unlike: bool
    nearest: tuple[Neighbour, ...]
    parameters: Mapping[str, Interval]
    scope: str
    set_level: float
    flags: tuple[str, ...] = ()


@dataclass(frozen=True)
class BatchMatch:
    """What the atlas says of particles of one batch, taken as samples of one process.

    Parameters
    ----------
    regime, probability, probabilities, prediction_set
        As for one section, pooled.
    particles, unlike
        Particles compared, and those of them that are unlike the atlas (left out of the pooling).
    agreement
        Share of the pooled particles whose own most probable regime is the pooled one; NaN where none was pooled.
    votes
        Regime -> particles whose own most probable regime it is.
    """

    regime: str
    probability: float
    probabilities: Mapping[str, float]
    prediction_set: tuple[str, ...]
    particles: int
    unlike: int
    agreement: float
    votes: Mapping[str, int]


@dataclass(frozen=True, eq=False)
class ScopeModel:
    """Everything that is fitted for one scope.

    Parameters
    ----------
    scaling, classifier, calibration, novelty, parameters
        Its parts.
    group
        Run of each row used, and below it what the model says of each row without having seen its run.
    unseen
        Logits, shape (rows, regimes).
    rows
        Index of each row in the view table.
    """

    scaling: Scaling
    classifier: Classifier
    calibration: Calibration
    novelty: Novelty
    parameters: ParameterModel
    group: IntArray
    unseen: FloatArray
    rows: IntArray


class Matcher:
    """Matches sections with an atlas; its models are fitted from the table when first needed (under 2 s).

    Parameters
    ----------
    atlas
        The library.
    """

    def __init__(self, atlas: Atlas) -> None:
        self.atlas = atlas
        self._models: dict[Scope, ScopeModel] = {}

    def model(self, scope: Scope) -> ScopeModel:
        """Fitted parts of a scope."""
        if scope not in self._models:
            self._models[scope] = fit_scope(self.atlas, scope)
        return self._models[scope]

    def match(self, values: Mapping[str, float], view: str) -> Match:
        """Match one section.

        Parameters
        ----------
        values
            Descriptors (``measure.descriptors.descriptors``).
        view
            View of the section: ``whole``, ``edge`` or ``interior``.

        Raises
        ------
        ValueError
            If the view is unknown or a descriptor is missing from ``values``.
        """
        scope = scope_of(view)
        raw = raw_rows([values], scope)
        if not math.isfinite(float(values["texture_porosity"])):
            return _nothing(scope)
        model = self.model(scope)
        x = model.scaling(raw)
        p = model.calibration.probabilities(model.classifier.logits(x))[0]
        best = int(np.argmax(p))
        distance = model.novelty.distance(x[0])
        unlike = distance > 1
        return Match(
            regime=UNLIKE if unlike else REGIMES[best],
            probability=float(p[best]),
            probabilities=dict(zip(REGIMES, map(float, p), strict=True)),
            prediction_set=_ordered(p, model.calibration.members(p)[0]),
            distance=distance,
            unlike=unlike,
            nearest=self._nearest(model, x[0]),
            parameters=model.parameters.intervals(model.classifier.features(x)[0], best),
            scope=scope,
            set_level=model.calibration.level,
            flags=("unlike_atlas",) if unlike else (),
        )

    def _nearest(self, model: ScopeModel, x: FloatArray) -> tuple[Neighbour, ...]:
        runs = self.atlas.runs
        found = []
        for index, distance in model.novelty.nearest(x, n=5):
            values = dict(zip(NAMES, map(float, runs.parameters[index]), strict=True))
            found.append(Neighbour(runs.name[index], runs.regime[index], distance, values))
        return tuple(found)


def _nothing(scope: str) -> Match:
    nothing = dict.fromkeys(REGIMES, math.nan)
    return Match("", math.nan, nothing, (), math.nan, False, (), {}, scope, math.nan, ("no_regime",))


def _ordered(p: FloatArray, member: npt.NDArray[np.bool_]) -> tuple[str, ...]:
    return tuple(REGIMES[i] for i in np.argsort(-p, kind="stable") if member[i])


def training_rows(atlas: Atlas, scope: Scope) -> IntArray:
    """Views that teach a scope: of the whole particle for ``whole``; of any kind for ``texture``."""
    views = atlas.views
    usable = np.array([g != _SET_ASIDE for g in atlas.runs.group])[views.run]
    usable &= np.isfinite(views.raw("texture")[:, 0])
    if scope == "whole":
        usable &= views.kind != "interior"
    return np.flatnonzero(usable)


def fit_scope(atlas: Atlas, scope: Scope) -> ScopeModel:
    """Fit the models of one scope from the tables.

    Parameters
    ----------
    atlas
        The library.
    scope
        ``whole`` or ``texture``.
    """
    rows = training_rows(atlas, scope)
    views: ViewTable = atlas.views.select(rows)
    label, group = atlas.runs.label()[views.run], views.run
    raw = views.raw(scope)
    scaling = Scaling.of(raw, scope)
    x = scaling(raw)
    weight = row_weights(label, group, classes=len(REGIMES))
    fold = folds(group, label, n=_FOLDS)
    unseen = _unseen_logits(x, label, weight, fold)
    judged = views.kind == "interior" if scope == "texture" and (views.kind == "interior").any() else label >= 0
    classifier = Classifier.fit(x, label, weight, classes=len(REGIMES))
    target = atlas.runs.parameters[views.run][:, [NAMES.index(n) for n in INFERRED]]
    return ScopeModel(
        scaling,
        classifier,
        calibrate(unseen[judged], label[judged], weight[judged], coverage=COVERAGE),
        Novelty.of(x, group),
        fit_parameters(classifier.features(x), target, label, weight, fold, coverage=COVERAGE),
        group,
        unseen,
        rows,
    )


def _unseen_logits(x: FloatArray, label: IntArray, weight: FloatArray, fold: IntArray) -> FloatArray:
    """Logits of every row by a model that has not seen its simulation."""
    out = np.empty((len(x), len(REGIMES)))
    for k in np.unique(fold):
        held = fold == k
        out[held] = Classifier.fit(x[~held], label[~held], weight[~held], classes=len(REGIMES)).logits(x[held])
    return out


def pool(matches: Sequence[Match]) -> BatchMatch:
    """Pool particles of one batch.

    The evidence of the particles is added, but particles of one batch err together: n of them count as n/(1 + (n − 1)/2) independent
    ones, at most two.

    Parameters
    ----------
    matches
        One per particle.

    Raises
    ------
    ValueError
        If there is none.
    """
    if not matches:
        raise ValueError("matches must hold at least one particle, but it is empty")
    known = [m for m in matches if m.regime]
    used = [m for m in known if not m.unlike]
    unlike = len(known) - len(used)
    votes = {r: sum(1 for m in used if max(m.probabilities, key=lambda k: m.probabilities[k]) == r) for r in REGIMES}
    nothing = dict.fromkeys(REGIMES, math.nan)
    if not known:
        return BatchMatch("", math.nan, nothing, (), len(matches), 0, math.nan, votes)
    if 2 * unlike >= len(known):
        return BatchMatch(UNLIKE, math.nan, nothing, (), len(known), unlike, math.nan, votes)
    logs = np.log(np.maximum([[m.probabilities[r] for r in REGIMES] for m in used], 1e-6))
    count = len(used) / (1 + (len(used) - 1) * _ALIKE)
    p = softmax(count * logs.mean(axis=0))
    level = float(np.mean([m.set_level for m in used]))
    best = REGIMES[int(np.argmax(p))]
    members = _ordered(p, (p >= level) | (p >= p.max()))
    return BatchMatch(
        best, float(p.max()), dict(zip(REGIMES, map(float, p), strict=True)), members, len(known), unlike,
        votes[best] / len(used), votes,
    )  # fmt: skip
