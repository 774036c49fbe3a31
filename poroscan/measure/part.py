"""What each measuring module hands back."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

from poroscan.quantities import Curve, Estimate


@dataclass(frozen=True, eq=False)
class Part:
    """Estimates by base name, curves and flags of one measuring module, in pixels."""

    estimates: Mapping[str, Estimate] = field(default_factory=lambda: MappingProxyType({}))
    curves: tuple[Curve, ...] = ()
    flags: tuple[str, ...] = ()


def undefined(bases: Iterable[str], *flags: str) -> Part:
    """A part whose quantities are all undefined (NaN), with the flags that say why."""
    return Part({base: Estimate(math.nan) for base in bases}, flags=flags)
