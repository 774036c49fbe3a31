"""Outlines of invented particles: circle, ellipse and slightly irregular harmonic outline, as masks with known size."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.section import BoolArray

FloatImage = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Outline:
    """Star-shaped outline ρ(θ) around a centre, in pixels.

    ρ(θ) is the ellipse of equal area to a circle of ``radius`` (semi-axes radius·√aspect and radius/√aspect, long axis
    at ``angle_deg``) times 1 + Σ a_k cos(k θ + φ_k), k = 2, 3, …

    Parameters
    ----------
    row, column
        Centre in pixel coordinates (pixel centres at whole numbers).
    radius
        Radius of the circle before the harmonics, px.
    aspect
        Long over short semi-axis, at least 1.
    angle_deg
        Direction of the long axis, degrees counter-clockwise from the +column direction.
    amplitudes, phases
        Relative amplitudes a_k and phases φ_k (radians) of the harmonics k = 2, 3, …

    Raises
    ------
    ValueError
        If the radius is not positive, the aspect below 1, or the harmonics add up to more than half the radius.
    """

    row: float
    column: float
    radius: float
    aspect: float = 1.0
    angle_deg: float = 0.0
    amplitudes: tuple[float, ...] = ()
    phases: tuple[float, ...] = ()

    def __post_init__(self) -> None:
        if not self.radius > 0:
            raise ValueError(f"Outline.radius must be positive (pixels), not {self.radius!r}")
        if not self.aspect >= 1:
            raise ValueError(f"Outline.aspect must be at least 1 (long over short axis), not {self.aspect!r}")
        if len(self.amplitudes) != len(self.phases):
            raise ValueError(
                f"Outline.phases must have one entry per amplitude ({len(self.amplitudes)}), not {len(self.phases)}"
            )
        if sum(abs(a) for a in self.amplitudes) > 0.5:
            raise ValueError("Outline.amplitudes must add up to at most 0.5, or the outline may cross itself")

    def reach(self, theta: FloatImage) -> FloatImage:
        """Distance from the centre to the outline in direction ``theta`` (radians, any shape), px."""
        along, across = self.radius * np.sqrt(self.aspect), self.radius / np.sqrt(self.aspect)
        turned = theta - np.deg2rad(self.angle_deg)
        ellipse = along * across / np.hypot(across * np.cos(turned), along * np.sin(turned))
        wave = np.ones_like(turned)
        for order, (amplitude, phase) in enumerate(zip(self.amplitudes, self.phases, strict=True), start=2):
            wave += amplitude * np.cos(order * turned + phase)
        return ellipse * wave

    def mask(self, shape: Sequence[int]) -> BoolArray:
        """Pixels whose centre lies inside, bool array of ``shape`` (rows, columns)."""
        distance, theta = self.polar(shape)
        return distance <= self.reach(theta)

    def polar(self, shape: Sequence[int]) -> tuple[FloatImage, FloatImage]:
        """Distance (px) and direction (radians, counter-clockwise on the screen) of every pixel from the centre."""
        rows, columns = np.ogrid[: shape[0], : shape[1]]
        up, right = self.row - rows, columns - self.column
        return np.hypot(up, right), np.arctan2(up, right)

    @property
    def area(self) -> float:
        """Exact area inside, px²: ½∮ρ² dθ by the trapezoidal rule, which is spectrally exact for a periodic ρ."""
        theta = np.linspace(0, 2 * np.pi, 4096, endpoint=False)
        return float(0.5 * np.mean(self.reach(theta) ** 2) * 2 * np.pi)


def irregular(
    row: float,
    column: float,
    *,
    radius: float,
    rng: np.random.Generator | int | None,
    aspect: float = 1.0,
    roughness: float = 0.02,
    harmonics: int = 9,
) -> Outline:
    """A slightly irregular outline of given mean radius.

    Parameters
    ----------
    row, column
        Centre, px.
    radius
        Radius of the equal-area ellipse before the harmonics, px.
    rng
        Generator or seed.
    aspect
        Long over short semi-axis; the direction of the long axis is drawn.
    roughness
        Relative root-mean-square deviation of ρ(θ) from the ellipse.
    harmonics
        Number of harmonics from k = 2; their amplitudes fall as 1/k.

    Returns
    -------
    Outline
    """
    rng = np.random.default_rng(rng)
    orders = np.arange(2, 2 + harmonics)
    amplitudes = rng.normal(size=harmonics) / orders
    if harmonics:
        amplitudes *= roughness * np.sqrt(2) / np.sqrt(np.sum(amplitudes**2))
    return Outline(
        row,
        column,
        radius,
        aspect=aspect,
        angle_deg=float(rng.uniform(0, 180)),
        amplitudes=tuple(float(a) for a in amplitudes),
        phases=tuple(float(p) for p in rng.uniform(0, 2 * np.pi, harmonics)),
    )
