from __future__ import annotations

import math

import numpy as np
import pytest
from media import boolean_discs, disc, level_cut
from scipy import special

from poroscan.measure.chords import (
    _distribution,
    _median,
    chord_counts,
    mean_chord,
    mean_chord_by_direction,
    product_limit,
)
from poroscan.measure.surface import count_crossings


def everywhere(mask: np.ndarray) -> np.ndarray:
    return np.ones(mask.shape, bool)


@pytest.mark.parametrize(("fraction", "length"), [(0.5, 6.0), (0.3, 6.0)])
def test_mean_chords_of_level_cut_fields_within_one_per_cent(
    fraction: float, length: float, rng: np.random.Generator
) -> None:
    # 2 p / P_L with P_L = (√λ2/π) exp(−u²/2) (Rice 1944). Ratios of the sums: porosity and crossings over all images.
    share, crossings = [], []
    for _ in range(8):
        mask = level_cut((1024, 1024), length=length, fraction=fraction, rng=rng)
        counts = count_crossings(mask, everywhere(mask))
        share.append(mask.mean())
        crossings.append(counts.mean_per_length)
        assert mean_chord(counts, pixel_size=1.0) == pytest.approx(2 * mask.mean() / counts.mean_per_length, rel=0.005)
    per_length = math.exp(-(special.ndtri(1 - fraction) ** 2) / 2) / math.pi / length
    found = 2 * np.mean(share) / np.mean(crossings)
    print(f"chord: p {fraction} {found / (2 * fraction / per_length) - 1:+.4f}")
    assert found == pytest.approx(2 * fraction / per_length, rel=0.01)


def test_boolean_discs(rng: np.random.Generator) -> None:
    # Void chord of Boolean discs: exponential with mean 1/(2 ρ R) = 2.26618 R at η = ln 2 (Lu and Torquato 1993).
    radius, counts = 20.0, None
    for _ in range(4):
        void = ~boolean_discs((1024, 1024), radius=radius, eta=math.log(2), rng=rng)
        runs = chord_counts(void, everywhere(void))
        counts = runs if counts is None else counts + runs
    lengths, chance = _distribution(counts[:, 1], 2)
    mean = float(lengths @ chance / chance.sum())
    assert mean / radius == pytest.approx(2.26618, rel=0.06)
    assert _median(lengths, chance) / mean == pytest.approx(math.log(2), rel=0.04)  # of an exponential law
    # Length-weighted, the median of an exponential law is 1.67835 means (root of (1 + x) e^−x = ½).
    assert _median(lengths, chance * lengths) / mean == pytest.approx(1.67835, rel=0.04)


def test_cut_chords_do_not_bias_the_distribution(rng: np.random.Generator) -> None:
    # The same field cut into windows of three mean chords: counting cut chords as whole is far too short.
    void = ~boolean_discs((1200, 1200), radius=12, eta=math.log(2), rng=rng)
    lengths, chance = _distribution(chord_counts(void, everywhere(void))[:, 1], 2)
    expected = _median(lengths, chance)
    runs = sum(_padded(chord_counts(w, everywhere(w))) for w in _windows(void, 80))
    lengths, chance = _distribution(runs[:, 1], 2)
    assert _median(lengths, chance) == pytest.approx(expected, rel=0.06)
    naive = runs.copy()
    naive[:, :, 0] += naive[:, :, 1] + naive[:, :, 2]
    naive[:, :, 1:] = 0
    lengths, chance = _distribution(naive[:, 1], 2)
    assert _median(lengths, chance) < 0.9 * expected


def _windows(mask: np.ndarray, side: int) -> list[np.ndarray]:
    return [mask[i : i + side, j : j + side] for i in range(0, 1200, side) for j in range(0, 1200, side)]


def _padded(runs: np.ndarray) -> np.ndarray:
    return np.pad(runs, [(0, 0)] * 3 + [(0, 100 - runs.shape[3])])


def test_stripes() -> None:
    mask = np.zeros((60, 63), bool)
    for start in range(3, 63, 10):
        mask[:, start : start + 4] = True
    counts = count_crossings(mask, everywhere(mask))
    pores = mean_chord_by_direction(counts, pixel_size=0.5)
    assert np.isnan(pores[4])  # along the stripes nothing is crossed
    runs = chord_counts(mask, everywhere(mask))
    assert runs[0, 1, 0, 4] == 60 * 6  # whole chords of 4 pixels
    assert runs[0, 0, 0, 6] == 60 * 5
    assert runs[0, 0, 1, 3] == runs[0, 0, 1, 6] == 60  # the outer walls are cut by the frame at one end
    assert runs[1, 1, 2, 60] == 24
    assert runs[1, :, :2].sum() == 0


def test_outline_is_no_chord_end() -> None:
    particle = disc(20)
    runs = chord_counts(particle & False, particle)
    assert runs[:, :, 0].sum() == 0  # a dense particle has no whole wall chord
    assert math.isnan(mean_chord(count_crossings(particle & False, particle), pixel_size=1.0))


def test_runs_against_a_slow_version(rng: np.random.Generator) -> None:
    mask, inside = rng.random((13, 17)) < 0.5, rng.random((13, 17)) < 0.9
    runs = chord_counts(mask, inside)
    slow = np.zeros_like(runs)
    state = mask + 2 * inside
    lines = [list(state), list(state.T), [state.diagonal(k) for k in range(-12, 17)]]
    lines.append([state[:, ::-1].diagonal(k) for k in range(-12, 17)])
    for k, family in enumerate(lines):
        for line in family:
            padded = [0, *line, 0]
            start = 1
            for i in range(2, len(padded)):
                if padded[i] != padded[start]:
                    if padded[start] >= 2:
                        cut = int(padded[start - 1] < 2) + int(padded[i] < 2)
                        slow[k, padded[start] & 1, cut, i - start] += 1
                    start = i
    np.testing.assert_array_equal(runs, slow)


def test_volume_directions(rng: np.random.Generator) -> None:
    mask = rng.random((6, 7, 8)) < 0.5
    runs = chord_counts(mask, everywhere(mask))
    lengths = np.arange(runs.shape[3])
    for k in range(3):
        assert (runs[k] * lengths).sum() == mask.size
    swapped = chord_counts(np.moveaxis(mask, 0, 2).copy(), everywhere(np.moveaxis(mask, 0, 2)))
    np.testing.assert_array_equal(runs[2], swapped[0])


def test_product_limit_textbook() -> None:
    # Freireich et al. 1963, 6-MP arm (the classic worked example): S(6) = 0.857, S(23) = 0.448.
    t = np.array([6, 7, 9, 10, 11, 13, 16, 17, 19, 20, 22, 23, 25, 32, 34, 35.0])
    events = np.array([3, 1, 0, 1, 0, 1, 1, 0, 0, 0, 1, 1, 0, 0, 0, 0.0])
    cut = np.array([1, 0, 1, 1, 1, 0, 0, 1, 1, 1, 0, 0, 1, 2, 1, 1.0])
    alive = 1 - np.cumsum(product_limit(t, events, cut))
    assert alive[0] == pytest.approx(0.857, abs=5e-4)
    assert alive[11] == pytest.approx(0.448, abs=5e-4)


def test_wrong_shapes_are_named() -> None:
    with pytest.raises(ValueError, match="phase and inside must be 2-D or 3-D of one shape"):
        chord_counts(np.zeros((3, 3), bool), np.zeros((3, 4), bool))
