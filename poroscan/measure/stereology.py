"""From circles in a section to spheres in the particle: Wicksell's problem, Saltykov's classes, moments, off-centre cuts.

A plane cuts large spheres more often than small ones, and hardly any through the middle. For spheres with the mean diameter E[D],

    N_A = N_V E[D],    E[d²]/E[d] = (8/3π) E[D³]/E[D²]   so that   D[3,2] = (3π/8) Σd²/Σd,

d the section diameters. The whole distribution follows by classes: spheres of class j fill section classes i ≤ j with known
probabilities, a triangular system that is solved from the largest class down. Classes are geometric (Saltykov) or
linear (Scheil, Schwartz and Saltykov). Coefficients are computed, never copied: published lists carry rounding in their tails.

All this assumes separate, nearly spherical pores, randomly placed with respect to the plane, and every section seen. Sampled
classes may come out slightly negative; they are kept, because setting them to zero would bias every moment.

References
----------
Wicksell, Biometrika 17 (1925) 84; Fullman, Trans. AIME 197 (1953) 447 (harmonic mean); Saltykov, Stereometric
Metallography (1958); Underwood, Quantitative Stereology (1970), chapter 5; Miles and Davy, J. Microsc. 107 (1976) 211.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import integrate

Float = npt.NDArray[np.float64]

#: Ratio of neighbouring class limits of Saltykov's classes.
SALTYKOV_RATIO = 10**0.1


@dataclass(frozen=True, eq=False)
class Unfolded:
    """Sphere diameters by class.

    Parameters
    ----------
    edges
        Class limits, growing, classes + 1 values.
    diameter
        Diameter that stands for the spheres of each class: its upper limit (Saltykov's convention), or that times one common
        factor near 1 (``saltykov``, ``linear_classes``).
    density
        Spheres per volume in each class, N_V; slightly negative values are scatter.
    """

    edges: Float
    diameter: Float
    density: Float

    def moment(self, power: float) -> float:
        """Σ N_V D^power over the classes."""
        return float(np.sum(self.density * self.diameter**power))

    def mean(self, p: float, q: float) -> float:
        """Moment mean D[p,q] = (Σ N D^p / Σ N D^q)^(1/(p−q)) (ISO 9276-2); NaN where the moments are not positive."""
        a, b = self.moment(p), self.moment(q)
        return (a / b) ** (1 / (p - q)) if a > 0 and b > 0 else math.nan

    def quantile(self, share: float, *, power: float = 3.0) -> float:
        """Diameter below which lies the share of Σ N D^power (3: volume-weighted), linear within classes; NaN if undefined."""
        weight = self.density * self.diameter**power
        total = float(weight.sum())
        if not total > 0:
            return math.nan
        # Negative classes may make the sum dip; the running maximum keeps the quantile single-valued.
        middle = np.maximum.accumulate(np.cumsum(weight) - weight / 2)
        return float(np.interp(share * total, middle, self.diameter))


def section_probability(edges: npt.ArrayLike, diameter: float) -> Float:
    """Probability that a random plane that cuts a sphere shows a circle of each class.

    P(d > x) = sqrt(1 − (x/D)²) for a sphere of diameter D (Wicksell 1925).
    """
    x = np.minimum(np.asarray(edges, dtype=np.float64) / diameter, 1.0)
    return np.asarray(-np.diff(np.sqrt(1 - x**2)))


def kernel(edges: npt.ArrayLike) -> Float:
    """Sections per area of class i from one sphere per volume of class j, D_j times the probability of class i.

    Parameters
    ----------
    edges
        Class limits, growing and positive (the first may be 0). Spheres of class j have the diameter of its upper limit.

    Returns
    -------
    Upper triangular array: N_A = kernel @ N_V.

    Raises
    ------
    ValueError
        If the limits do not grow or are negative.
    """
    e = np.asarray(edges, dtype=np.float64)
    if e.ndim != 1 or e.size < 2 or not np.all(np.diff(e) > 0) or e[0] < 0:
        raise ValueError("edges must be at least two growing class limits, none negative")
    return np.stack([d * section_probability(e, d) for d in e[1:]], axis=1)


def saltykov_coefficients(number: int) -> Float:
    """Inverse coefficients for geometric classes: N_V(j) = Σ_k a_k N_A(j − k) / D_j, j counted from the largest class.

    The first are 1.6461, −0.4561, −0.1162; the published table (Saltykov 1958; Underwood 1970) rounds its tail.
    """
    edges = SALTYKOV_RATIO ** -np.arange(number, -1.0, -1.0)
    # Bottom row up: what the class a step of k below the largest needs of each larger class, in units of its own diameter.
    inverse = np.linalg.inv(kernel(edges))
    return np.asarray(inverse[0, :] * edges[1])


def unfold(density: npt.ArrayLike, edges: npt.ArrayLike) -> Unfolded:
    """Solve N_A = kernel @ N_V for the spheres, from the largest class down.

    Parameters
    ----------
    density
        Sections per area in each class, N_A.
    edges
        Class limits, one more than classes.

    Raises
    ------
    ValueError
        If the lengths do not fit or a density is not finite.
    """
    n_a, e = np.asarray(density, dtype=np.float64), np.asarray(edges, dtype=np.float64)
    k = kernel(e)
    if n_a.shape != (e.size - 1,):
        raise ValueError(f"density must have one value per class ({e.size - 1}), not shape {n_a.shape}")
    if not np.isfinite(n_a).all():
        raise ValueError("density must be finite (count the sections of every class; an empty class is 0)")
    n_v = np.zeros_like(n_a)
    for j in range(n_a.size - 1, -1, -1):
        n_v[j] = (n_a[j] - k[j, j + 1 :] @ n_v[j + 1 :]) / k[j, j]
    return Unfolded(e, e[1:].copy(), n_v)


def saltykov(
    diameters: npt.ArrayLike, *, area: float, classes: int = 15, weights: npt.ArrayLike | None = None
) -> Unfolded:
    """Unfold section diameters in geometric classes of ratio 10^0.1 below the largest diameter.

    Parameters
    ----------
    diameters
        Section diameters, positive.
    area
        Area in which they were counted, same length unit squared.
    classes
        Number of classes; smaller sections enter the last one.
    weights
        Frame weights of the sections; None counts each once.

    Returns
    -------
    Unfolded, with the diameter of each class placed so that D[3,2] of the classes equals (3π/8) Σd²/Σd of the very sections:
    the spheres of a class are spread over it, not heaped at its upper limit.

    Raises
    ------
    ValueError
        If there are no diameters, one is not positive, or the area is not.
    """
    d, w = _checked(diameters, weights)
    if not area > 0:
        raise ValueError(f"area must be positive, not {area!r}")
    edges = float(d.max()) * SALTYKOV_RATIO ** -np.arange(classes, -1.0, -1.0)
    edges[-1] = np.nextafter(edges[-1], np.inf)
    edges[0] = 0.0  # the last class takes all smaller sections, so that none is lost and N_A = N_V E[D] holds
    counts, _ = np.histogram(d, bins=edges, weights=w)
    return _centred(unfold(counts / area, edges), sauter_diameter(d, weights=w))


def linear_classes(
    diameters: npt.ArrayLike, *, area: float, classes: int = 15, weights: npt.ArrayLike | None = None
) -> Unfolded:
    """Unfold section diameters in equal classes from 0 to the largest (Scheil 1931, Schwartz 1934, Saltykov 1958).

    Parameters and result as in ``saltykov``.
    """
    d, w = _checked(diameters, weights)
    if not area > 0:
        raise ValueError(f"area must be positive, not {area!r}")
    edges = np.linspace(0, np.nextafter(float(d.max()), np.inf), classes + 1)
    counts, _ = np.histogram(d, bins=edges, weights=w)
    return _centred(unfold(counts / area, edges), sauter_diameter(d, weights=w))


def sauter_diameter(diameters: npt.ArrayLike, *, weights: npt.ArrayLike | None = None) -> float:
    """Sauter mean diameter D[3,2] of the spheres, (3π/8) Σd²/Σd of their sections; exact for any size distribution."""
    d, w = _checked(diameters, weights)
    return 3 * math.pi / 8 * float(np.sum(w * d**2) / np.sum(w * d))


def volume_mean_diameter(diameters: npt.ArrayLike, *, weights: npt.ArrayLike | None = None) -> float:
    """Volume-weighted mean diameter D[4,3] of the spheres, (32/9π) Σd³/Σd² of their sections; exact for any distribution.

    For one sphere size E[d³]/E[d²] = (3π/16)/(2/3) D = (9π/32) D, and E[d^k] is proportional to E[D^(k+1)] in general.
    """
    d, w = _checked(diameters, weights)
    return 32 / (9 * math.pi) * float(np.sum(w * d**3) / np.sum(w * d**2))


def harmonic_mean_diameter(diameters: npt.ArrayLike, *, weights: npt.ArrayLike | None = None) -> float:
    """Number mean sphere diameter E[D] = (π/2) / E[1/d] (Fullman 1953).

    With caution: 1/d has no variance, so a few tiny sections, or the ones that the resolution hides, decide the result.
    """
    d, w = _checked(diameters, weights)
    return math.pi / 2 * float(np.sum(w) / np.sum(w / d))


def section_offset(section_diameter: float, particle_diameter: float) -> float:
    """Distance of the cutting plane from the centre over the radius, sqrt(1 − (d/D)²); NaN where the section is the larger.

    Raises
    ------
    ValueError
        If a diameter is not positive.
    """
    if not (section_diameter > 0 and particle_diameter > 0):
        raise ValueError(
            f"section_diameter and particle_diameter must be positive, not {section_diameter!r}, {particle_diameter!r}"
        )
    ratio = section_diameter / particle_diameter
    return math.sqrt(1 - ratio**2) if ratio <= 1 else math.nan


def true_shell(apparent: float, section_radius: float, offset: float) -> float:
    """Thickness of a spherical shell from its apparent thickness in a section at a known offset.

    Parameters
    ----------
    apparent
        Shell thickness seen in the section.
    section_radius
        Radius of the section, same unit.
    offset
        Distance of the plane from the centre over the radius of the sphere (``section_offset``), 0 ≤ offset < 1.

    Raises
    ------
    ValueError
        If the offset lies outside 0…1 or the apparent shell exceeds the section's radius.
    """
    if not 0 <= offset < 1:
        raise ValueError(f"offset must be at least 0 and below 1, not {offset!r}")
    if not 0 <= apparent <= section_radius:
        raise ValueError(f"apparent must lie between 0 and section_radius ({section_radius!r}), not {apparent!r}")
    radius = section_radius / math.sqrt(1 - offset**2)
    return radius - math.hypot(section_radius - apparent, radius * offset)


def shell_bias(share: float, *, least_section: float = 0.0) -> float:
    """Mean of apparent over true shell thickness over random planes that cut the core.

    Parameters
    ----------
    share
        True shell thickness over the radius of the sphere, between 0 and 1.
    least_section
        Only sections with at least this radius over the sphere's are counted.

    Raises
    ------
    ValueError
        If the share lies outside 0…1, or no section is left.
    """
    if not 0 < share < 1:
        raise ValueError(f"share must lie between 0 and 1, not {share!r}")
    top = min(1 - share, math.sqrt(max(1 - least_section**2, 0.0)))
    if not top > 0:
        raise ValueError(f"least_section must be below 1, not {least_section!r}")
    core = 1 - share

    def apparent(h: float) -> float:
        return math.sqrt(1 - h * h) - math.sqrt(max(core * core - h * h, 0.0))

    return float(integrate.quad(apparent, 0, top, limit=200)[0]) / (top * share)


def _checked(diameters: npt.ArrayLike, weights: npt.ArrayLike | None) -> tuple[Float, Float]:
    d = np.asarray(diameters, dtype=np.float64)
    w = np.ones_like(d) if weights is None else np.asarray(weights, dtype=np.float64)
    if d.ndim != 1 or d.size == 0 or w.shape != d.shape:
        raise ValueError(
            f"diameters (and weights) must be 1-D, of one length and not empty, not {d.shape} and {w.shape}"
        )
    if not (np.isfinite(d).all() and (d > 0).all()):
        raise ValueError("diameters must be positive and finite (leave out features without a diameter)")
    if not (np.isfinite(w).all() and (w >= 0).all() and w.sum() > 0):
        raise ValueError("weights must be finite and not negative, and not all 0")
    return d, w


def _centred(result: Unfolded, sauter: float) -> Unfolded:
    """Move the class diameters by one common factor so that D[3,2] is the exact one of the sections.

    Spheres treated as if all stood at the upper limit of their class come out too large by a few per cent; N_V D, which is
    what the sections count, stays as it is.
    """
    classes = result.mean(3, 2)
    factor = sauter / classes if math.isfinite(classes) else 1.0
    return Unfolded(result.edges, result.diameter * factor, result.density / factor)
