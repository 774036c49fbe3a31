"""Batch estimates: particles nested in images nested in batches.

Particles of one image share its preparation, focus and threshold, so ten particles of one image say less about the batch than ten
particles of ten images. The model has two random levels,

    y_ij = μ + a_i + e_ij,     a_i ~ (0, σ_b²) between images,  e_ij ~ (0, σ_w²) between particles of one image,

the mean of the batch is estimated with weights that fit the two variances, and its interval uses Student's factor with the
degrees of freedom of the images, not of the particles.

References
----------
Searle, Casella and McCulloch, Variance Components (1992), chapter 3 (moment estimators for unequal numbers);
Satterthwaite, Biometrics Bull. 2 (1946) 110; JCGM 100:2008, H.5 (analysis of variance); Davison and Hinkley, Bootstrap Methods and
their Application (1997), section 3.8 (nested resampling).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from poroscan.measure.uncertainty import t_quantile

Float = npt.NDArray[np.float64]


@dataclass(frozen=True)
class NestedMean:
    """Mean of a batch with its uncertainty.

    Parameters
    ----------
    mean
        Estimate of the batch mean; NaN without values.
    sd
        Standard uncertainty of the mean; NaN with one value.
    low, high
        Ends of the interval; NaN where ``sd`` is.
    df
        Effective degrees of freedom.
    between_sd, within_sd
        Standard deviation between images and between particles of one image; ``between_sd`` is 0 where the scatter between
        images is explained by that within them, ``within_sd`` NaN where every image holds one particle (the two cannot
        be told apart, and ``between_sd`` then holds both).
    n_images, n_particles
        Images and particles with a value.
    """

    mean: float
    sd: float
    low: float
    high: float
    df: float
    between_sd: float
    within_sd: float
    n_images: int
    n_particles: int

    @property
    def half_width(self) -> float:
        """Half of the interval."""
        return (self.high - self.low) / 2


def nested_mean(values: npt.ArrayLike, images: npt.ArrayLike, *, level: float = 0.95) -> NestedMean:
    """Mean of a batch with particles nested in images.

    Parameters
    ----------
    values
        One number per particle; NaN (undefined) is left out.
    images
        Name or number of the image of each particle.
    level
        Level of the interval.

    Returns
    -------
    NestedMean. With a single image the scatter between images is unknown and the interval covers the particles of that image only:
    ``n_images`` is 1, which a reader must be told.

    Raises
    ------
    ValueError
        If lengths differ or a value is infinite.

    Notes
    -----
    Weights are n_i/(σ_w² + n_i σ_b²) (best linear unbiased). The variance of the mean is that of the weighted image means
    about it (with leverage correction), so it stays valid where the variance components are off; its degrees of freedom
    are Kish's effective number of images less one, raised towards those of the particles by Satterthwaite's formula as
    far as the scatter within images explains that between them.
    """
    y, group = _clean(values, images)
    if y.size == 0:
        return NestedMean(math.nan, math.nan, math.nan, math.nan, 0.0, math.nan, math.nan, 0, 0)
    n, means = _groups(y, group)
    if n.size == 1:
        return _one_image(y, level)
    between, within = variance_components(y, group)
    if math.isnan(within):
        weights = np.ones_like(n)
        variance, df = float(np.var(means, ddof=1)) / n.size, float(n.size - 1)
    else:
        weights = n / (within + n * between) if within + between > 0 else n
        variance, df = _variance(n, means, weights, between, within, y.size)
    mean = float(np.average(means, weights=weights))
    sd = math.sqrt(variance)
    half = t_quantile(df, level=level) * sd
    return NestedMean(
        mean, sd, mean - half, mean + half, df, math.sqrt(between), math.sqrt(within), int(n.size), int(y.size)
    )


def variance_components(values: npt.ArrayLike, images: npt.ArrayLike) -> tuple[float, float]:
    """Variance between images and within them, by the analysis of variance for unequal numbers.

    σ_w² = MS_within, σ_b² = (MS_between − MS_within)/n₀ with n₀ = (N − Σn_i²/N)/(k − 1), and 0 where that is negative (the
    estimate is not below zero by definition of a variance; ``nested_mean`` states the consequence in its df).

    Returns
    -------
    between, within
        ``within`` is NaN where every image holds one particle; ``between`` then holds both. With one image ``between`` is NaN.
    """
    y, group = _clean(values, images)
    n, means = _groups(y, group)
    k, total = n.size, y.size
    if k < 2:
        return math.nan, float(np.var(y, ddof=1)) if total > 1 else math.nan
    if total == k:
        return float(np.var(means, ddof=1)), math.nan
    index = np.unique(group, return_inverse=True)[1]
    ms_within = float(np.sum((y - means[index]) ** 2)) / (total - k)
    grand = float(y.mean())
    ms_between = float(np.sum(n * (means - grand) ** 2)) / (k - 1)
    n0 = (total - float(np.sum(n**2)) / total) / (k - 1)
    return max((ms_between - ms_within) / n0, 0.0), ms_within


def variance_of_mean(*, between: float, within: float, images: float, per_image: float) -> float:
    """Variance of a batch mean, σ_b²/k + σ_w²/(k m), for k images of m particles each.

    Raises
    ------
    ValueError
        If a count is not positive or a variance negative.
    """
    if not (images > 0 and per_image > 0):
        raise ValueError(f"images and per_image must be positive, not {images!r} and {per_image!r}")
    if not (between >= 0 and within >= 0):
        raise ValueError(f"between and within must be variances of at least 0, not {between!r} and {within!r}")
    return between / images + within / (images * per_image)


@dataclass(frozen=True)
class FurtherSampling:
    """What it takes to reach a wanted half-width.

    Parameters
    ----------
    images
        Further images of ``per_image`` particles each; 0 where the half-width is reached already.
    particles
        Further particles, images times particles per image.
    per_image
        Particles per image assumed: the mean so far, rounded up.
    """

    images: int
    particles: int
    per_image: int


def further_sampling(
    result: NestedMean, half_width: float, *, level: float = 0.95, most: int = 100_000
) -> FurtherSampling | None:
    """Further images (and particles) needed so that the interval of the batch mean is ± ``half_width``.

    The variances found so far are taken as they are; the degrees of freedom grow with the images. More particles in the
    images at hand would not help where the images differ, so new images are asked for.

    Returns
    -------
    FurtherSampling, or None where the scatter is unknown (fewer than two values) or ``most`` images would not do.

    Raises
    ------
    ValueError
        If the half-width is not positive.
    """
    if not half_width > 0:
        raise ValueError(f"half_width must be positive, not {half_width!r}")
    if not math.isfinite(result.sd):
        return None
    per_image = max(1, math.ceil(result.n_particles / max(result.n_images, 1) - 1e-9))
    if result.half_width <= half_width:
        return FurtherSampling(0, 0, per_image)
    within = 0.0 if math.isnan(result.within_sd) else result.within_sd**2
    between = 0.0 if math.isnan(result.between_sd) else result.between_sd**2

    def enough(images: int) -> bool:
        variance = variance_of_mean(between=between, within=within, images=images, per_image=per_image)
        df = images - 1 if between > 0 or per_image == 1 else images * per_image - 1
        return t_quantile(max(df, 1), level=level) * math.sqrt(variance) <= half_width

    low, high = result.n_images, result.n_images + 1
    while not enough(high):
        low, high = high, 2 * high
        if low > most:
            return None
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if enough(middle) else (middle, high)
    images = high - result.n_images
    return FurtherSampling(images, images * per_image, per_image)


def nested_bootstrap(
    values: npt.ArrayLike,
    images: npt.ArrayLike,
    *,
    statistic: Callable[[Float], float] = lambda y: float(np.median(y)),
    replicates: int = 1000,
    level: float = 0.95,
    rng: np.random.Generator | int | None = None,
) -> tuple[float, float, float]:
    """Statistic of a batch with a percentile interval from resampling images, all particles of a drawn image kept.

    Resampling only the highest level reproduces both variances best (Davison and Hinkley 1997, section 3.8).

    Parameters
    ----------
    values, images
        As in ``nested_mean``.
    statistic
        Function of the pooled values; the median by default.

    Returns
    -------
    value, low, high
        low and high are NaN with fewer than five images, for which a resampled interval would be far too short.
    """
    y, group = _clean(values, images)
    if y.size == 0:
        return math.nan, math.nan, math.nan
    parts = [y[group == g] for g in np.unique(group)]
    value = float(statistic(y))
    if len(parts) < 5:
        return value, math.nan, math.nan
    generator = np.random.default_rng(rng)
    draws = generator.integers(0, len(parts), size=(replicates, len(parts)))
    drawn = [float(statistic(np.concatenate([parts[i] for i in row]))) for row in draws]
    # Few images: the percentile interval is short by sqrt((k − 1)/k) and by Student's factor; both are given back.
    k = len(parts)
    widen = math.sqrt(k / (k - 1)) * t_quantile(k - 1, level=level) / float(special.ndtri(0.5 + level / 2))
    low, high = np.quantile(drawn, ((1 - level) / 2, (1 + level) / 2))
    return value, value + widen * min(float(low) - value, 0.0), value + widen * max(float(high) - value, 0.0)


def _variance(n: Float, means: Float, weights: Float, between: float, within: float, total: int) -> tuple[float, float]:
    """Variance of the weighted mean of image means, and its degrees of freedom."""
    share = weights / weights.sum()
    df_images = 1 / float(np.sum(share**2)) - 1
    model = float(np.sum(share**2 * (between + within / n)))
    if between == 0:
        # Images do not differ beyond their particles: the pooled scatter of all particles is the better estimate.
        pooled = float(np.sum(n * (means - np.average(means, weights=n)) ** 2)) + within * (total - n.size)
        return pooled / (total - 1) / total, float(total - 1)
    robust = float(np.sum(share**2 * (means - share @ means) ** 2 / (1 - share)))
    return max(robust, model) if model > 0 else robust, df_images


def _one_image(y: Float, level: float) -> NestedMean:
    mean = float(y.mean())
    if y.size == 1:
        return NestedMean(mean, math.nan, math.nan, math.nan, 0.0, math.nan, math.nan, 1, 1)
    spread = float(np.std(y, ddof=1))
    sd = spread / math.sqrt(y.size)
    half = t_quantile(y.size - 1, level=level) * sd
    return NestedMean(mean, sd, mean - half, mean + half, float(y.size - 1), math.nan, spread, 1, int(y.size))


def _clean(values: npt.ArrayLike, images: npt.ArrayLike) -> tuple[Float, npt.NDArray[np.generic]]:
    y, group = np.asarray(values, dtype=np.float64), np.asarray(images)
    if y.ndim != 1 or group.shape != y.shape:
        raise ValueError(f"values and images must be 1-D and of one length, not {y.shape} and {group.shape}")
    if np.isinf(y).any():
        raise ValueError("values must not be infinite (NaN marks an undefined one and is left out)")
    keep = ~np.isnan(y)
    return y[keep], group[keep]


def _groups(y: Float, group: npt.NDArray[np.generic]) -> tuple[Float, Float]:
    """Number of values and mean of each image (two-pass, so that a large common offset costs no digits)."""
    index = np.unique(group, return_inverse=True)[1]
    n = np.bincount(index).astype(np.float64)
    centre = float(y.mean()) if y.size else 0.0
    return n, np.bincount(index, y - centre) / n + centre
