"""Particles of five kinds, drawn in a moment: stand-ins for simulated ones where only the machinery of the atlas is tested."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from poroscan.atlas.run_file import AtlasRun
from poroscan.atlas.space import AXES, NAMES
from poroscan.demix.regime import REGIMES

SIDE = 112


def disc(radius: float = 46.0) -> np.ndarray:
    rows, columns = np.indices((SIDE, SIDE)) - (SIDE - 1) / 2
    return np.hypot(rows, columns) < radius


def depth(radius: float = 46.0) -> np.ndarray:
    rows, columns = np.indices((SIDE, SIDE)) - (SIDE - 1) / 2
    return radius - np.hypot(rows, columns)


def blobs(rng: np.random.Generator, *, share: float, size: float = 3.0) -> np.ndarray:
    """Level cut of smoothed noise that covers ``share``."""
    field = ndimage.gaussian_filter(rng.standard_normal((SIDE, SIDE)), size, mode="wrap")
    return field < np.quantile(field, share)


def particle(regime: str, rng: np.random.Generator) -> np.ndarray:
    """Polymer fraction of a particle that looks a little like those of a regime."""
    inside = disc()
    pores = np.zeros_like(inside)
    if regime == "delayed":
        pores = blobs(rng, share=rng.uniform(0.08, 0.13)) & (depth() > 12)
    elif regime == "lean_nucleation":
        pores = blobs(rng, share=rng.uniform(0.28, 0.36)) & (depth() > 3)
    elif regime == "spinodal":
        pores = blobs(rng, share=rng.uniform(0.49, 0.52))
    elif regime == "rich_nucleation":
        pores = blobs(rng, share=rng.uniform(0.70, 0.75))
    field = np.where(inside & ~pores, 0.8, 0.05)
    return ndimage.gaussian_filter(field, 0.7)


def made_run(name: str, regime: str, rng: np.random.Generator) -> AtlasRun:
    shares = rng.random(len(AXES))
    shares[NAMES.index("polymer")] = 1 - 0.2 * (REGIMES.index(regime) + 0.5 * rng.random())
    values = {a.name: a.value(float(s)) for a, s in zip(AXES, shares, strict=True)}
    nothing = np.zeros((0, 0), dtype=np.float32)
    field = particle(regime, rng).astype(np.float32)
    return AtlasRun(name, values, regime, {}, field, (), nothing, (), nothing, {}, 0, "0", "user")
