"""Published interaction parameters for common triplets, each with its source, convention, status and caution."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.resources import files
from types import MappingProxyType

_FILE = "published_parameters.toml"

#: What the parameters count per, and what must come with them.
CONVENTION = (
    "molar convention: g12 and χ13 per mole of non-solvent (1), χ23 per mole of solvent (2); u2 is the solvent's share of "
    "the liquid; needs the molar volumes"
)


@dataclass(frozen=True, kw_only=True)
class PublishedSystem:
    """One polymer / solvent / non-solvent triplet of the literature.

    Parameters
    ----------
    key
        Short name.
    polymer, solvent, nonsolvent
        The components in words.
    chi_13, chi_23, g_12
        Parameters as they are published, in the molar convention; empty where no number could be verified.
    source
        Where they come from.
    status
        How far the numbers have been checked against the source.
    caution
        What to mind when using them.
    """

    key: str
    polymer: str
    solvent: str
    nonsolvent: str
    chi_13: str
    chi_23: str
    g_12: str
    source: str
    status: str
    caution: str


def published_systems() -> tuple[PublishedSystem, ...]:
    """The table of published interaction parameters."""
    return tuple(PublishedSystem(**entry) for entry in _table()["systems"])


def liquid_molar_volumes() -> Mapping[str, float]:
    """Molar volumes of common liquids at 25 °C, cm³/mol (molar mass over density, rounded)."""
    return MappingProxyType(dict(_table()["liquids"]))


def _table() -> dict:
    return tomllib.loads((files("poroscan.demix") / "data" / _FILE).read_text(encoding="utf-8"))
