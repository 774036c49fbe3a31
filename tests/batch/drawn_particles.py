from __future__ import annotations

from pathlib import Path

import imagecodecs
import numpy as np


def draw_particle(
    *,
    seed: int = 0,
    shape: tuple[int, int] = (120, 130),
    radius: float = 48.0,
    centre: tuple[float, float] | None = None,
) -> np.ndarray:
    """A pale disc with dark round pores on dark ground: enough of a particle for the way through the house."""
    rng = np.random.default_rng(seed)
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    row, column = centre or (shape[0] / 2, shape[1] / 2)
    grey = np.where((rows - row) ** 2 + (columns - column) ** 2 < radius**2, 180.0, 40.0)
    for _ in range(14):
        angle, distance = rng.uniform(0, 2 * np.pi), rng.uniform(0, radius * 0.75)
        r, c, size = row + distance * np.sin(angle), column + distance * np.cos(angle), rng.uniform(3, 6)
        grey[(rows - r) ** 2 + (columns - c) ** 2 < size**2] = 60.0
    return np.clip(grey + rng.normal(0, 6, shape), 0, 255).astype(np.uint8)


def write_png(path: Path, grey: np.ndarray) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(imagecodecs.png_encode(grey))
    return path
