"""From rows of particles to the mean of a batch: which particles count, with what weight, nested in their pictures."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from poroscan.measure.nested import nested_mean
from poroscan.qc.comparison import BatchMean

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Sample:
    """Values of one quantity in one batch.

    Parameters
    ----------
    values
        One finite value per particle that counts.
    weights
        Frame weight of each.
    images
        Name of the picture of each.
    mean
        Nested, frame-weighted mean.
    """

    values: FloatArray
    weights: FloatArray
    images: npt.NDArray[np.str_]
    mean: BatchMean

    def by_image(self) -> list[FloatArray]:
        """Values picture by picture."""
        return [self.values[self.images == name] for name in dict.fromkeys(self.images.tolist())]


def counted(particles: pd.DataFrame) -> pd.DataFrame:
    """The particles that count: those that were measured, without those that the frame cuts.

    Edge and interior views are cut by the frame by their nature and count for what they can give.
    """
    there = particles["particle"].notna()
    partial = particles["view"].isin(["edge", "interior"])
    return particles[there & (partial | ~particles["touches_frame"].isin([True]))]


def sample(particles: pd.DataFrame, key: str) -> Sample:
    """Values of one column over the particles that count.

    Parameters
    ----------
    particles
        Rows of particles.csv of one batch.
    key
        Column.

    Raises
    ------
    KeyError
        If the table has no such column.
    """
    rows = counted(particles)
    values = pd.to_numeric(rows[key]).to_numpy(dtype=np.float64, na_value=np.nan)
    weights = pd.to_numeric(rows["frame_weight"]).to_numpy(dtype=np.float64, na_value=np.nan)
    known = np.isfinite(values)
    values, weights = values[known], weights[known]
    weights = np.where(np.isfinite(weights) & (weights > 0), weights, 1.0)
    images = rows["image"].astype(str).to_numpy(dtype=np.str_)[known]
    return Sample(values, weights, images, weighted_mean(values, weights, images))


def weighted_mean(values: FloatArray, weights: FloatArray, images: npt.NDArray[np.generic]) -> BatchMean:
    """Frame-weighted mean with a standard error that respects particles within pictures.

    The weighted mean m = Σwy/Σw is a ratio; each particle enters with its linearised value m + w(y − m)/mean(w), which is y
    itself where the weights are equal (Särndal, Swensson and Wretman, *Model Assisted Survey Sampling*, 1992, section 5.5).
    """
    n = values.size
    if n == 0:
        return BatchMean(math.nan, math.nan, 0.0, math.nan)
    mean = float(np.average(values, weights=weights))
    nested = nested_mean(mean + weights * (values - mean) / weights.mean(), images)
    sd = math.sqrt(float(np.average((values - mean) ** 2, weights=weights)) * n / (n - 1)) if n > 1 else math.nan
    return BatchMean(nested.mean, nested.sd, nested.df, sd)
