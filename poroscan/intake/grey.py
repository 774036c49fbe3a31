"""From stored samples to grey 0…1: colour to luminance, whole-number scales, pixels that are not numbers."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

#: Weights of red, green and blue in luminance (ITU-R BT.601-7, 2.5.1).
LUMINANCE = (0.299, 0.587, 0.114)

#: Largest share of pixels that may be NaN or infinite.
MAX_NOT_FINITE = 0.05


@dataclass(frozen=True, eq=False)
class Grey:
    """Grey values with what was done to get them.

    Parameters
    ----------
    values
        2-D float32 array, 0…1.
    notes, flags
        Words for people, and keys of ``quantities.FLAGS``.
    """

    values: npt.NDArray[np.float32]
    notes: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()


def to_luminance(samples: npt.NDArray, *, model: str) -> tuple[npt.NDArray, tuple[str, ...]]:
    """Samples (rows, columns, channels) as one channel, of the same type where the channels agree, else float64.

    Parameters
    ----------
    samples
        Whole-number or float samples.
    model
        ``grey`` (first channel, the rest is alpha or extra), ``rgb`` (a fourth channel is alpha) or ``cmyk``.

    Returns
    -------
    values, notes
        2-D array on the same scale as the samples, and what was done.
    """
    notes: list[str] = []
    colours = {"grey": 1, "rgb": 3, "cmyk": 4}[model]
    if samples.shape[2] > colours:
        notes.append("alpha or extra channels were dropped")
    if model == "grey":
        return samples[..., 0], tuple(notes)
    colour = samples[..., :colours]
    if model == "cmyk":
        top = _white(samples.dtype)
        rgb = (top - colour[..., :3].astype(np.float64)) * (top - colour[..., 3:].astype(np.float64)) / top
        notes.append("CMYK colour became luminance")
        return _same_type(rgb @ np.array(LUMINANCE), samples.dtype), tuple(notes)
    if bool((colour[..., 0] == colour[..., 1]).all() and (colour[..., 0] == colour[..., 2]).all()):
        notes.append("three equal colour channels became one grey channel")
        return colour[..., 0], tuple(notes)
    notes.append("colour became luminance")
    weighted = sum(w * colour[..., i].astype(np.float32) for i, w in enumerate(LUMINANCE))
    return _same_type(np.asarray(weighted), samples.dtype), tuple(notes)


def _same_type(values: npt.NDArray, dtype: np.dtype) -> npt.NDArray:
    return np.rint(values).astype(dtype) if dtype.kind in "ui" else values


def _white(dtype: np.dtype) -> float:
    return 1.0 if dtype.kind in "fb" else float(np.iinfo(dtype).max)


def to_grey(values: npt.NDArray) -> Grey:
    """Samples on 0…1.

    Unsigned whole numbers are divided by the largest number of their type; 32-bit and 64-bit ones that stay below 65536
    count as 16-bit. Signed and float samples are scaled by their own minimum and maximum. Pixels that are not
    finite take the median of the rest, noted and flagged.

    Raises
    ------
    ValueError
        If the samples are not real numbers, or more than 5 % of them are NaN or infinite.
    """
    if values.dtype == np.bool_:
        return Grey(values.astype(np.float32), ("two grey values only (1-bit)",))
    if values.dtype.kind == "u":
        return _from_whole_numbers(values)
    if values.dtype.kind in "if":
        return _from_own_range(values)
    raise ValueError(f"samples of type {values.dtype} are not grey values")


def _from_whole_numbers(values: npt.NDArray) -> Grey:
    low, high = int(values.min()), int(values.max())
    bits = 16 if values.dtype.itemsize > 2 and high <= 65535 else 8 * values.dtype.itemsize
    white = 2**bits - 1
    grey = np.divide(values, white, dtype=np.float32 if bits <= 16 else np.float64)
    notes = [] if bits == 8 else [f"{bits}-bit grey values"]
    if low < high and (high - low) * 16 <= white:
        notes.append(f"only the values {low} to {high} of 0 to {white} are used")
    return Grey(
        grey.astype(np.float32, copy=False),
        tuple(notes),
        ("constant_picture",) if low == high else (),
    )


def _from_own_range(values: npt.NDArray) -> Grey:
    grey = values.astype(np.float64)
    finite = np.isfinite(grey)
    notes, flags = [], []
    bad = grey.size - int(np.count_nonzero(finite))
    if bad > MAX_NOT_FINITE * grey.size:
        raise ValueError(f"{bad} of {grey.size} pixels are NaN or infinite")
    if bad:
        grey[~finite] = np.median(grey[finite])
        notes.append(f"{bad} pixels were NaN or infinite and took the median grey")
        flags.append("bad_pixels")
    low, high = float(grey.min()), float(grey.max())
    if low == high:
        return Grey(np.zeros(grey.shape, np.float32), tuple(notes), (*flags, "constant_picture"))
    notes.append(f"values from {low:g} to {high:g} were scaled to 0 to 1")
    scale = max(abs(low), abs(high))  # first divided by, so that high - low cannot overflow
    grey /= scale
    grey -= low / scale
    grey /= high / scale - low / scale
    return Grey(grey.astype(np.float32), tuple(notes), tuple(flags))
