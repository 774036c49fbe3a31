"""Two-point correlation of the pores inside an arbitrary outline, with exact pair counts.

S2(h) is the share of pore–pore pairs among all pairs of points h apart that both lie inside the outline:

    S2(h) = Σ_x I(x) I(x+h) / Σ_x W(x) W(x+h),

I the pores, W the particle. Both sums are autocorrelations and come from real fast Fourier transforms. The arrays are
padded by the largest lag only, which is all that is needed for the lags kept to be free of wrap-around, and the sums
are whole numbers, so rounding makes them exact. S2(0) is the porosity; far apart, S2 tends to its square.

References
----------
Debye, Anderson and Brumberger, J. Appl. Phys. 28 (1957) 679; Torquato, Random Heterogeneous Materials (2002), chapter 2;
Padfield, IEEE Trans. Image Process. 21 (2012) 2706 (masked correlation by Fourier transforms).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.fft

BoolArray = npt.NDArray[np.bool_]
Float = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int32] | npt.NDArray[np.int64]

#: Columns of the spectrum handled at a time: bounds the working memory, and is wide enough for vector instructions.
_CHUNK = 64


@dataclass(frozen=True, eq=False)
class TwoPoint:
    """Exact pair counts at every lag of one half-space; the other half mirrors it.

    Parameters
    ----------
    hits, pairs
        Integer arrays: pore–pore pairs and all pairs inside the outline. Lags run from −n to +n along every axis but the last but
        one, where they run from 0 to n (S2(−h) = S2(h)).
    reach
        The largest lag n along each axis.
    """

    hits: Counts
    pairs: Counts
    reach: tuple[int, ...]

    @property
    def porosity(self) -> float:
        """S2 at lag zero."""
        return float(self.hits[self.zero] / self.pairs[self.zero])

    @property
    def zero(self) -> tuple[int, ...]:
        """Index of lag zero."""
        half = len(self.reach) - 2
        return tuple(0 if axis == half else n for axis, n in enumerate(self.reach))

    @property
    def s2(self) -> Float:
        """S2 at every lag; NaN where no pair of points is that far apart."""
        return _ratio(self.hits, self.pairs)

    def axis(self, axis: int) -> tuple[Float, Counts]:
        """S2 and pair counts along one array axis, lags 0…reach[axis]."""
        index: list[int | slice] = list(self.zero)
        index[axis] = slice(self.zero[axis], None)
        return _ratio(self.hits[tuple(index)], self.pairs[tuple(index)]), self.pairs[tuple(index)]

    def multiplicity(self) -> npt.NDArray[np.int64]:
        """2 for lags that stand for their mirror image too, 1 for lags that are listed with it (half-axis lag 0)."""
        shape = [1] * len(self.reach)
        half = len(self.reach) - 2
        shape[half] = self.reach[half] + 1
        return np.where(np.arange(shape[half]) == 0, 1, 2).reshape(shape).astype(np.int64)

    def lags(self) -> list[Float]:
        """Lags along each axis, in the layout of ``hits``."""
        half = len(self.reach) - 2
        return [np.arange(0 if a == half else -n, n + 1, dtype=np.float64) for a, n in enumerate(self.reach)]

    def distance(self) -> Float:
        """Length of every lag in pixels, in the layout of ``hits``."""
        return np.sqrt(outer_sum([np.square(lags) for lags in self.lags()]))


@dataclass(frozen=True, eq=False)
class RadialCorrelation:
    """S2 averaged over all directions.

    Parameters
    ----------
    r
        Mean length of the lags of each ring, pixels; ring k holds lags of length k − ½ … k + ½.
    s2
        Pair-weighted mean of S2 over the ring.
    pairs
        Pairs of points in the ring (each pair once for either order).
    """

    r: Float
    s2: Float
    pairs: Float

    @property
    def covariance(self) -> Float:
        """S2 less the square of the porosity."""
        return np.asarray(self.s2 - self.s2[0] ** 2)


def two_point(pores: BoolArray, particle: BoolArray, *, max_lag: float) -> TwoPoint:
    """Exact two-point pair counts of the pores inside an outline.

    Parameters
    ----------
    pores, particle
        bool masks of one shape, 2-D or 3-D; pores lie inside the particle.
    max_lag
        Largest lag along each axis in pixels (cut to the size of the array).

    Returns
    -------
    TwoPoint

    Raises
    ------
    ValueError
        If the masks are not bool, differ in shape, are not 2-D or 3-D, the particle is empty, or pores lie outside it.

    Notes
    -----
    Transforms, forward e^{−2πi kx/M}: real along the last axis, then complex along the others in slabs of columns; the power
    spectrum is real, so its inverse needs only half a transform. Double precision keeps the error of a sum of N ones
    near 1e-15 N, far below the ½ that rounding allows; single precision would not for pictures above about 1000².
    """
    check_masks(pores, particle)
    if not max_lag >= 0:
        raise ValueError(f"max_lag must be a number of pixels of at least 0, not {max_lag!r}")
    pores, particle = _trim(pores, particle)
    reach = tuple(min(int(max_lag), n - 1) for n in particle.shape)
    size = tuple(
        scipy.fft.next_fast_len(n + lag, real=axis == particle.ndim - 1)
        for axis, (n, lag) in enumerate(zip(particle.shape, reach, strict=True))
    )
    hits = _autocorrelation(pores, reach=reach, size=size)
    pairs = _autocorrelation(particle, reach=reach, size=size)
    return TwoPoint(hits, pairs, reach)


def radial_average(counts: TwoPoint, *, max_lag: float | None = None) -> RadialCorrelation:
    """Average over directions: rings one pixel wide, hits and pairs added up before dividing.

    Rings are complete only up to the shortest reach; longer lags are left out unless an axis has no extent at all.
    """
    wide = [n for n in counts.reach if n > 0] or [0]
    top = min(wide) if max_lag is None else min(int(max_lag), min(wide))
    sums = np.zeros((3, top + 2))
    weight = np.broadcast_to(counts.multiplicity(), counts.pairs.shape)
    square = [np.square(lags) for lags in counts.lags()]
    for slab in slabs(counts.pairs.shape[0], counts.pairs[0].size):
        distance = np.sqrt(outer_sum([square[0][slab], *square[1:]]))
        ring = np.minimum(np.rint(distance).astype(np.intp), top + 1).ravel()
        pairs = (counts.pairs[slab] * weight[slab]).astype(np.float64)
        sums[0] += np.bincount(ring, pairs.ravel(), top + 2)
        sums[1] += np.bincount(ring, (counts.hits[slab] * weight[slab]).ravel(), top + 2)
        distance *= pairs
        sums[2] += np.bincount(ring, distance.ravel(), top + 2)
    pairs, hits, length = sums[:, :-1]
    return RadialCorrelation(_ratio(length, pairs), _ratio(hits, pairs), pairs)


def correlation_length(radial: RadialCorrelation) -> float:
    """Distance at which the covariance S2(r) − φ² has fallen to 1/e of its value at zero, pixels (linear between rings).

    For a Debye medium this is the length a of exp(−r/a). NaN where there are no pores or no walls, or the covariance
    does not fall that far within the lags measured.
    """
    c = radial.covariance
    if not c[0] > 0:
        return math.nan
    below = np.flatnonzero(~(c > c[0] / math.e))
    if below.size == 0 or not math.isfinite(c[below[0]]):
        return math.nan
    k = int(below[0])
    share = (c[k - 1] - c[0] / math.e) / (c[k - 1] - c[k])
    return float(radial.r[k - 1] + share * (radial.r[k] - radial.r[k - 1]))


def check_masks(pores: BoolArray, particle: BoolArray) -> None:
    """Raise ValueError unless both are bool masks of one 2-D or 3-D shape, the particle not empty, the pores inside it."""
    for name, mask in (("pores", pores), ("particle", particle)):
        if not isinstance(mask, np.ndarray) or mask.dtype != np.bool_:
            raise ValueError(f"{name} must be a bool array (use array.astype(bool)), not {_kind(mask)}")
    if pores.shape != particle.shape or particle.ndim not in (2, 3):
        raise ValueError(
            f"pores and particle must be 2-D or 3-D and of one shape, not {pores.shape} and {particle.shape}"
        )
    if not particle.any():
        raise ValueError("particle is empty: no pixel lies inside the outline")
    if bool((pores & ~particle).any()):
        raise ValueError("pores has pixels outside particle (use pores & particle)")


def _autocorrelation(mask: BoolArray, *, reach: tuple[int, ...], size: tuple[int, ...]) -> Counts:
    """Σ_x m(x) m(x+h) as whole numbers for the lags of ``reach``, in the layout of TwoPoint.

    Everything runs in slabs, and the lags overwrite the spectrum where they fit, so that the spectrum of the rows is the
    only large array.
    """
    last = mask.ndim - 1
    others = tuple(range(last))
    rows = np.empty((*mask.shape[:-1], size[-1] // 2 + 1), np.complex128)
    for slab in slabs(mask.shape[0], rows[0].size):
        rows[slab] = scipy.fft.rfft(mask[slab].astype(np.float64), n=size[-1], axis=last)
    lags = tuple(n + 1 if a == last - 1 else 2 * n + 1 for a, n in enumerate(reach[:-1]))
    fits = all(n <= m for n, m in zip(lags, mask.shape[:-1], strict=True))
    half = rows[tuple(slice(n) for n in lags)] if fits else np.empty((*lags, rows.shape[-1]), np.complex128)
    for start in range(0, rows.shape[-1], _CHUNK):
        chunk = slice(start, start + _CHUNK)
        spectrum = scipy.fft.fftn(np.ascontiguousarray(rows[..., chunk]), s=size[:-1], axes=others, overwrite_x=True)
        power = np.square(spectrum.real)
        power += np.square(spectrum.imag)
        # The inverse of a real spectrum is the conjugate of its forward real transform.
        half[..., chunk] = np.conjugate(_keep(scipy.fft.rfftn(power, axes=others), reach))
    n = reach[-1]
    out = np.empty((*lags, 2 * n + 1), np.int32 if mask.size < 2**30 else np.int64)
    for slab in slabs(lags[0], half[0].size):
        full = scipy.fft.irfft(half[slab], n=size[-1], axis=last)
        full /= math.prod(size[:-1])
        np.rint(full, out=full)
        out[slab][..., n:] = full[..., : n + 1]
        out[slab][..., :n] = full[..., full.shape[-1] - n :]
    return out


def slabs(length: int, each: int) -> Iterator[slice]:
    """Slices of the first axis with about a quarter of a million numbers each."""
    step = max(1, 2**18 // max(each, 1))
    return (slice(start, min(start + step, length)) for start in range(0, length, step))


def _keep(spectrum: npt.NDArray[np.complex128], reach: tuple[int, ...]) -> npt.NDArray[np.complex128]:
    """Lags 0…n of the half axis; in 3-D, −n…n of the first axis."""
    if len(reach) == 2:
        return spectrum[: reach[0] + 1]
    n, m = reach[0], reach[1]
    planes = spectrum.shape[0]
    return np.concatenate([spectrum[planes - n :, : m + 1], spectrum[: n + 1, : m + 1]])


def outer_sum(axes: list[Float]) -> Float:
    """Sum of one value per axis at every point of the grid."""
    out: Float = np.zeros((1,) * len(axes))
    for a, values in enumerate(axes):
        out = out + values.reshape([-1 if b == a else 1 for b in range(len(axes))])
    return out


def _trim(pores: BoolArray, particle: BoolArray) -> tuple[BoolArray, BoolArray]:
    """Cut both to the bounding box of the particle: pairs outside it count nothing."""
    box = []
    for axis in range(particle.ndim):
        used = np.flatnonzero(particle.any(axis=tuple(a for a in range(particle.ndim) if a != axis)))
        box.append(slice(int(used[0]), int(used[-1]) + 1))
    return pores[tuple(box)], particle[tuple(box)]


def _ratio(a: npt.NDArray[np.generic], b: npt.NDArray[np.generic]) -> Float:
    out = np.full(np.shape(b), math.nan)
    np.divide(a, b, out=out, where=np.asarray(b) > 0)
    return out


def _kind(value: object) -> str:
    return f"{value.dtype} array" if isinstance(value, np.ndarray) else type(value).__name__
