"""Two or more batches, quantity by quantity: effect, test, equivalence, distributions, with Holm's correction over quantities."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import pandas as pd

from poroscan.errors import SettingsError
from poroscan.qc.comparison import (
    BatchMean,
    Difference,
    Equivalence,
    difference,
    earth_mover,
    equivalence,
    holm,
    kolmogorov_smirnov,
    permutation_p,
    welch_anova,
)
from poroscan.qc.estimate import Sample, sample
from poroscan.quantities import by_key

#: Compared where nothing else is asked for.
DEFAULT_QUANTITIES: tuple[str, ...] = (
    "porosity", "pore_d50_um", "wall_d50_um", "skin_thickness_um", "radial_asymmetry", "polar_asymmetry",
    "surface_per_volume_per_um", "characteristic_spacing_um", "equivalent_diameter_um",
)  # fmt: skip


@dataclass(frozen=True)
class PairComparison:
    """Second batch against the first, one quantity.

    Parameters
    ----------
    quantity
        Key.
    first, second
        Names of the batches.
    means
        Their nested means.
    difference
        Second minus first with its interval.
    p_holm
        Probability corrected for all comparisons of the table; NaN where none could be made.
    equivalence
        Two one-sided tests against the margin of this quantity; None where no margin was given.
    kolmogorov_smirnov, earth_mover
        Distances of the distributions over particles; NaN where a batch has no value.
    p_distribution
        Probability of so large a Kolmogorov–Smirnov distance when whole pictures are exchanged; NaN where it cannot be had.
    """

    quantity: str
    first: str
    second: str
    means: tuple[BatchMean, BatchMean]
    difference: Difference
    p_holm: float
    equivalence: Equivalence | None
    kolmogorov_smirnov: float
    earth_mover: float
    p_distribution: float


@dataclass(frozen=True)
class Comparison:
    """All pairs against the first batch, and Welch's test over all batches per quantity (F, p, p after Holm)."""

    batches: tuple[str, ...]
    pairs: tuple[PairComparison, ...]
    overall: Mapping[str, tuple[float, float, float]]


def compare(
    batches: Mapping[str, pd.DataFrame],
    *,
    quantities: Sequence[str] = DEFAULT_QUANTITIES,
    margins: Mapping[str, float] | None = None,
    rounds: int = 499,
    seed: int = 0,
) -> Comparison:
    """Compare batches, each with the first.

    Parameters
    ----------
    batches
        Name -> rows of particles.csv, in order.
    quantities
        Columns to compare.
    margins
        Quantity -> largest difference that does not matter, for equivalence.
    rounds, seed
        Random exchanges of pictures for the distribution test, and their seed.

    Raises
    ------
    SettingsError
        If fewer than 2 batches are given, or a quantity or margin is unknown.
    """
    names, margins = tuple(batches), dict(margins or {})
    if len(names) < 2:
        raise SettingsError(f"compare needs at least 2 batches, but found {len(names)}")
    _check(quantities, margins)
    samples = {q: [sample(batches[b], q) for b in names] for q in quantities}
    pairs = [
        _pair(q, names[0], name, samples[q][0], samples[q][i], margins.get(q), rounds, seed)
        for q in quantities
        for i, name in enumerate(names[1:], start=1)
    ]
    corrected = holm([p.difference.p for p in pairs])
    tests = {q: welch_anova([s.mean for s in samples[q]]) for q in quantities}
    overall = holm([p for _, p in tests.values()])
    return Comparison(
        names,
        tuple(replace(pair, p_holm=float(p)) for pair, p in zip(pairs, corrected, strict=True)),
        {q: (f, p, float(c)) for (q, (f, p)), c in zip(tests.items(), overall, strict=True)},
    )


def _check(quantities: Sequence[str], margins: Mapping[str, float]) -> None:
    for key in (*quantities, *margins):
        try:
            q = by_key(key)
        except KeyError as error:
            raise SettingsError(f"compare: {error.args[0]}") from None
        if key not in (q.key, q.pixel_key):
            raise SettingsError(f"compare: {key!r} lacks its unit: write {q.key!r}")
    for key in margins:
        if key not in quantities:
            raise SettingsError(f"compare: a margin is given for {key!r}, which is not compared")


def _pair(
    q: str, first: str, second: str, a: Sample, b: Sample, margin: float | None, rounds: int, seed: int
) -> PairComparison:  # fmt: skip
    known = a.values.size > 0 and b.values.size > 0
    return PairComparison(
        q, first, second, (a.mean, b.mean), difference(a.mean, b.mean), math.nan,
        equivalence(a.mean, b.mean, margin=margin) if margin is not None else None,
        kolmogorov_smirnov(a.values, b.values) if known else math.nan,
        earth_mover(a.values, b.values) if known else math.nan,
        permutation_p(a.by_image(), b.by_image(), rounds=rounds, rng=seed) if known else math.nan,
    )  # fmt: skip
