"""From descriptors to the numbers that a model sees: which ones a view gives, in which scale, and how far to trust them.

Two groups are used as far as the view gives them: a whole particle has both, an interior or edge view only the texture. Left out are
all lengths of pores over the particle's diameter: a simulation has few pores per radius, a real particle may have
hundreds, so that this ratio must not decide. The shape of the outline and the polar asymmetry are left out as well: they tell how
a particle was made round, not how it demixed.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from poroscan.measure.descriptors import DESCRIPTORS

FloatArray = npt.NDArray[np.float64]
Scope = Literal["whole", "texture"]

#: Particle-scale descriptors that carry no pore-to-particle ratio.
_PARTICLE = (
    "particle_core_porosity", "particle_shell_porosity", "particle_open_porosity", "particle_radial_asymmetry",
    "particle_radial_slope", "particle_pore_size_asymmetry", "particle_radial_elongation",
    "particle_profile_20", "particle_profile_40", "particle_profile_55", "particle_profile_70", "particle_profile_80",
    "particle_profile_90",
)  # fmt: skip
#: Texture descriptors that a cut of finite size does not bias; the Euler number per volume exists for volumes only.
_TEXTURE = tuple(d.name for d in DESCRIPTORS if d.group == "pore" and d.name != "texture_euler_3d")
#: Ratios that span decades.
_LOGARITHMIC = ("_d10", "_d50", "_d90", "_span", "_length", "_spacing", "_ratio", "_peak_height", "_peak_width")
#: Porosity at which texture begins to be more than a few stray pixels.
_TEXTURE_FROM = 0.02
#: Standardised values are bent over beyond this many standard deviations, so that no single odd number decides.
_BEND = 4.0

#: Names of the features by scope.
FEATURES: Mapping[Scope, tuple[str, ...]] = {"whole": (*_TEXTURE, *_PARTICLE), "texture": _TEXTURE}


def scope_of(view: str) -> Scope:
    """Scope of a view: everything for a whole particle, the texture alone where the outline is not seen.

    Raises
    ------
    ValueError
        If the view is unknown.
    """
    if view not in ("whole", "edge", "interior"):
        raise ValueError(f"view must be whole, edge or interior, not {view!r}")
    return "whole" if view == "whole" else "texture"


@dataclass(frozen=True, eq=False)
class Scaling:
    """Centre and spread of every feature over the atlas.

    Parameters
    ----------
    scope
        Which features.
    centre, spread
        Median and standard deviation (after the logarithm where one is taken), shape (features,).
    """

    scope: Scope
    centre: FloatArray
    spread: FloatArray

    @classmethod
    def of(cls, raw: FloatArray, scope: Scope) -> Scaling:
        """Scaling of a table, shape (rows, features), NaN where undefined."""
        values = _straightened(raw, scope)
        known = np.isfinite(values)
        filled = np.where(known, values, np.nan)
        filled[:, ~known.any(axis=0)] = 0.0
        centre = np.nanmedian(filled, axis=0)
        spread = np.sqrt(np.nanmean((filled - centre) ** 2, axis=0))
        return cls(scope, centre, np.where(spread > 1e-9, spread, 1.0))

    def __call__(self, raw: FloatArray) -> FloatArray:
        """Features of rows, shape (rows, 2·features + 1): values, what is undefined, and the porosity on a logarithmic scale."""
        raw = np.atleast_2d(raw)
        values = _straightened(raw, self.scope)
        missing = ~np.isfinite(values)
        scaled = np.where(missing, 0.0, (values - self.centre) / self.spread)
        scaled = _BEND * np.tanh(scaled / _BEND)
        porosity = np.nan_to_num(raw[:, FEATURES[self.scope].index("texture_porosity")])
        trust = (porosity / (porosity + _TEXTURE_FROM))[:, None]
        level = np.log10(porosity + 1e-3)[:, None] + 1.0
        return np.concatenate([trust * scaled, 0.3 * trust * missing, level], axis=1)


def raw_rows(rows: Sequence[Mapping[str, float | None]], scope: Scope) -> FloatArray:
    """Descriptors of several views as a table, shape (rows, features); NaN where undefined.

    Raises
    ------
    ValueError
        If a row lacks a descriptor; the message names the first one.
    """
    names = FEATURES[scope]
    for row in rows:
        lacking = next((n for n in names if n not in row), None)
        if lacking is not None:
            raise ValueError(f"values lack the descriptor {lacking!r}; take them from measure.descriptors.descriptors")
    table = [[np.nan if row[n] is None else float(row[n]) for n in names] for row in rows]  # type: ignore[arg-type]
    return np.array(table, dtype=np.float64).reshape(len(rows), len(names))


def _straightened(raw: FloatArray, scope: Scope) -> FloatArray:
    out = np.array(raw, dtype=np.float64, ndmin=2)
    for j, name in enumerate(FEATURES[scope]):
        if name.endswith(_LOGARITHMIC):
            column = out[:, j]
            out[:, j] = np.log(np.where(column > 0, column, np.nan))
    return out
