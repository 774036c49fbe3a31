"""What can be set about a rendered picture: the instrument, the specimen's light, and its faults."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from types import MappingProxyType
from typing import ClassVar, Literal


@dataclass(frozen=True)
class RenderSettings:
    """How a section is pictured. Grey levels are fractions of the white of the picture (1.0 saturates).

    Parameters
    ----------
    pixel_size_um
        Length of one pixel, µm.
    polymer, ground
        Grey of the cut face and of the surroundings.
    pores
        ``deep`` (empty, seen into), ``resin`` (filled flat with the grey ``resin``) or ``bright`` (pore walls and floors
        charge and shine brighter than the cut face by ``pore_glow``).
    pore_light
        Share of the cut face's signal that a fully open pore floor returns, 0…1; 0 gives black pores.
    resin
        Grey of resin in pores (and around the particle where ``ground_kind`` is ``resin``).
    pore_glow
        Extra grey of bright pores.
    struts
        Share of the pore floor covered by struts of the material below.
    edge, edge_width
        Brightening of edges (grey) and its decay length into the polymer, px.
    relief
        Lighting of sloping pore walls from the side of the detector (grey).
    detector_deg
        Side from which the detector sees, degrees counter-clockwise from the +column direction.
    face_texture, face_grain
        Roughness of the cut face: standard deviation (grey) and grain, px.
    knife
        Strength of knife marks on the cut face (grey).
    ground_kind
        ``tape`` (rough adhesive with a shadow under the particle) or ``resin`` (flat).
    ground_texture, ground_grain
        Roughness of the ground: standard deviation (grey) and grain, px.
    shadow
        Darkening of the ground beside a particle (fraction).
    blur
        Standard deviation of the probe, px.
    tilt, tilt_deg
        Relative fall of brightness from one side of the picture to the other, and the direction towards its bright side.
    unevenness
        Relative amplitude of smooth uneven illumination on top of the tilt.
    dose
        Mean number of detected electrons in a pixel of white; sets the shot noise. 0 switches it off.
    detector_noise
        Standard deviation of the detector's own noise (grey).
    streaks
        Standard deviation of line-to-line brightness jumps along the scan (grey).
    curtains
        Standard deviation of streaks across the scan, as an ion-polished face shows (grey).
    charging
        Brightness of charging bands (grey); ``charging_bands`` of them.
    charging_bands
        Number of charging bands.
    drag
        Dark or bright tails of edges along the scan line by charging (grey, negative is dark).
    gain, offset
        Contrast and brightness of the amplifier: value·gain + offset, before saturation.
    bar
        ``none``, ``burnt`` (scale bar burnt into the picture) or ``banner`` (data banner under it).
    banner_text
        Words of the banner.

    Raises
    ------
    ValueError
        If a value is out of its range.
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    pixel_size_um: float = 1.0
    polymer: float = 0.56
    ground: float = 0.16
    pores: Literal["deep", "resin", "bright"] = "deep"
    pore_light: float = 0.55
    resin: float = 0.25
    pore_glow: float = 0.18
    struts: float = 0.2
    edge: float = 0.22
    edge_width: float = 1.8
    relief: float = 0.10
    detector_deg: float = 60.0
    face_texture: float = 0.018
    face_grain: float = 3.0
    knife: float = 0.012
    ground_kind: Literal["tape", "resin"] = "tape"
    ground_texture: float = 0.025
    ground_grain: float = 4.0
    shadow: float = 0.35
    blur: float = 0.8
    tilt: float = 0.06
    tilt_deg: float = 30.0
    unevenness: float = 0.04
    dose: float = 350.0
    detector_noise: float = 0.012
    streaks: float = 0.004
    curtains: float = 0.0
    charging: float = 0.0
    charging_bands: int = 3
    drag: float = 0.0
    gain: float = 1.0
    offset: float = 0.02
    bar: Literal["none", "burnt", "banner"] = "none"
    banner_text: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for name in ("pixel_size_um", "edge_width", "face_grain", "ground_grain", "gain"):
            _check(name, getattr(self, name), low=0.0, open_low=True)
        for name in ("polymer", "ground", "pore_light", "resin", "struts", "shadow"):
            _check(name, getattr(self, name), low=0.0, high=1.0)
        for name in _NOT_NEGATIVE:
            _check(name, getattr(self, name), low=0.0)
        for name in ("tilt", "unevenness"):
            _check(name, getattr(self, name), low=0.0, high=0.9)
        for name, known in _CHOICES.items():
            if getattr(self, name) not in known:
                raise ValueError(
                    f"RenderSettings.{name} must be one of {', '.join(known)}, not {getattr(self, name)!r}"
                )


_NOT_NEGATIVE = (
    "pore_glow",
    "edge",
    "relief",
    "face_texture",
    "knife",
    "ground_texture",
    "blur",
    "dose",
    "detector_noise",
    "streaks",
    "curtains",
    "charging",
    "charging_bands",
)
_CHOICES: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {"pores": ("deep", "resin", "bright"), "ground_kind": ("tape", "resin"), "bar": ("none", "burnt", "banner")}
)


def _check(name: str, value: float, *, low: float, high: float = float("inf"), open_low: bool = False) -> None:
    if not (low < value if open_low else low <= value) or not value <= high:
        range_words = f"greater than {low:g}" if open_low else f"at least {low:g}"
        range_words += "" if high == float("inf") else f" and at most {high:g}"
        raise ValueError(f"RenderSettings.{name} must be {range_words}, not {value!r}")


#: Named looks: the values that differ from the defaults.
LOOKS: Mapping[str, Mapping[str, object]] = MappingProxyType(
    {
        "secondary": MappingProxyType({}),
        "backscatter": MappingProxyType(
            {"edge": 0.03, "relief": 0.02, "pore_light": 0.12, "struts": 0.1, "shadow": 0.0, "ground_texture": 0.012}
        ),
        "resin": MappingProxyType(
            {
                "pores": "resin",
                "ground_kind": "resin",
                "edge": 0.015,
                "relief": 0.0,
                "knife": 0.02,
                "ground_texture": 0.012,
                "shadow": 0.0,
            }
        ),
        "bright_pores": MappingProxyType({"pores": "bright", "polymer": 0.42, "edge": 0.12}),
        "charging": MappingProxyType({"charging": 0.22, "drag": -0.06, "streaks": 0.012}),
        "textured": MappingProxyType(
            {"ground": 0.34, "ground_texture": 0.06, "ground_grain": 6.0, "face_texture": 0.035}
        ),
        "ion_polished": MappingProxyType({"curtains": 0.02, "knife": 0.0, "face_texture": 0.008, "edge": 0.12}),
    }
)


def look(name: str, **changes: object) -> RenderSettings:
    """Settings of a named look with changes.

    Parameters
    ----------
    name
        A key of ``LOOKS``.
    **changes
        Fields of ``RenderSettings`` that differ.

    Raises
    ------
    ValueError
        If the look or a field is unknown; the message lists the known ones.
    """
    if name not in LOOKS:
        raise ValueError(f"unknown look {name!r}; known: {', '.join(LOOKS)}")
    known = {f.name for f in fields(RenderSettings)}
    unknown = set(changes) - known
    if unknown:
        raise ValueError(f"unknown render settings {sorted(unknown)}; known: {', '.join(sorted(known))}")
    return replace(RenderSettings(), **{**LOOKS[name], **changes})  # type: ignore[arg-type]
