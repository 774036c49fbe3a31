"""What a batch is held against: limits, regime wanted, and how much must have been counted. Light: standard library only."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

On = Literal["mean", "percentile", "share_outside"]
Extra = Literal["tolerance_interval", "capability", "acceptance_by_variables"]


@dataclass(frozen=True)
class Limit:
    """One limit on one quantity.

    Parameters
    ----------
    quantity
        Column of ``particles.csv`` with its unit, for example ``pore_d50_um`` or ``porosity``.
    low, high
        Limits in the unit of the column; at least one.
    on
        ``mean``: the batch mean must lie inside. ``percentile``: the named percentile of the particles must lie inside.
        ``share_outside``: at most ``max_share`` of the particles may lie outside.
    percentile
        Percentile for ``on = "percentile"`` (between 0 and 100).
    max_share
        Largest share of particles outside for ``on = "share_outside"``.
    also
        Standardised statements printed beside the verdict: ``tolerance_interval`` (ISO 16269-6), ``capability``
        (ISO 22514-2), ``acceptance_by_variables`` (ISO 3951 form; needs ``plan_n`` and ``plan_k``).
    plan_n, plan_k
        Sample size and constant of the acceptance plan.
    target
        Target value for the capability index Cpm.

    Raises
    ------
    ValueError
        If no limit is given, limits contradict each other, or a part that the choice needs is missing.
    """

    quantity: str
    low: float | None = None
    high: float | None = None
    on: On = "mean"
    percentile: float = 50.0
    max_share: float = 0.05
    also: tuple[Extra, ...] = ()
    plan_n: int | None = None
    plan_k: float | None = None
    target: float | None = None

    __pydantic_config__ = {"extra": "forbid"}  # noqa: RUF012 - read by pydantic as it stands

    def __post_init__(self) -> None:
        name = f"limit on {self.quantity!r}"
        if self.low is None and self.high is None:
            raise ValueError(f"{name}: give low, high, or both")
        for side, value in (("low", self.low), ("high", self.high)):
            if value is not None and not math.isfinite(value):
                raise ValueError(f"{name}: {side} must be a finite number, not {value!r}")
        if self.low is not None and self.high is not None and not self.low < self.high:
            raise ValueError(f"{name}: low = {self.low} must lie below high = {self.high}")
        if not 0 < self.percentile < 100:
            raise ValueError(f"{name}: percentile must lie between 0 and 100, not {self.percentile!r}")
        if not 0 < self.max_share < 1:
            raise ValueError(f"{name}: max_share is a fraction between 0 and 1, not {self.max_share!r}")
        if "acceptance_by_variables" in self.also and (self.plan_n is None or self.plan_k is None):
            raise ValueError(f"{name}: acceptance_by_variables needs plan_n and plan_k from your sampling plan")
        if self.plan_n is not None and self.plan_n < 2:
            raise ValueError(f"{name}: plan_n must be at least 2, not {self.plan_n}")


@dataclass(frozen=True)
class QcSettings:
    """Limits of a batch and what is done with them.

    Parameters
    ----------
    limits
        Limits, each with its own verdict; the batch is within limits where all are.
    regime
        Regime wanted; None asks for none.
    min_particles, min_images
        Fewer whole particles or pictures make every verdict "not decided".
    level
        Confidence level of the intervals that decide.
    runs_rules
        Rules of the individuals chart, by their names in ``qc.charts.RULES``.
    """

    limits: tuple[Limit, ...] = ()
    regime: str | None = None
    min_particles: int = 3
    min_images: int = 1
    level: float = 0.95
    runs_rules: tuple[str, ...] = ("beyond_limits", "two_of_three", "four_of_five", "eight_on_one_side")

    __pydantic_config__ = {"extra": "forbid"}  # noqa: RUF012 - read by pydantic as it stands

    def __post_init__(self) -> None:
        if self.min_particles < 1 or self.min_images < 1:
            raise ValueError("qc: min_particles and min_images must be at least 1")
        if not 0.5 <= self.level < 1:
            raise ValueError(f"qc: level must lie between 0.5 and 1, not {self.level!r}")


def settings_of(plain: Mapping[str, Any]) -> QcSettings:
    """Settings from plain values as run.json holds them.

    Parameters
    ----------
    plain
        Table ``[qc]`` of a recipe that was checked before; empty gives the defaults.
    """
    limits = tuple(Limit(**(dict(entry) | {"also": tuple(entry.get("also", ()))})) for entry in plain.get("limits", ()))
    rest: dict[str, Any] = {key: tuple(v) if isinstance(v, list) else v for key, v in plain.items() if key != "limits"}
    return QcSettings(limits=limits, **rest)
