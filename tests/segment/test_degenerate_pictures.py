"""Pictures without an answer give a status, never an error; wrong arguments give an error that helps."""

from __future__ import annotations

import numpy as np
import pytest

from poroscan.quantities import FLAGS
from poroscan.section import UNKNOWN_PIXEL_SIZE, Picture
from poroscan.segment import SegmentSettings, segment_picture

GENERATOR = np.random.default_rng(7)
PICTURES = {
    "one pixel": np.zeros((1, 1)),
    "one row": GENERATOR.random((1, 50)),
    "one column": GENERATOR.random((50, 1)),
    "two by two": np.array([[0.0, 1.0], [1.0, 0.0]]),
    "tiny": GENERATOR.random((5, 7)),
    "constant": np.full((64, 64), 0.4),
    "saturated": np.ones((64, 64)),
    "noise": GENERATOR.random((120, 100)),
    "half white": np.repeat([[0.0, 1.0]], 64, axis=0).repeat(32, axis=1),
    "one white pixel": np.pad(np.ones((1, 1)), 40),
    "ramp": np.linspace(0, 1, 90)[None, :].repeat(80, axis=0),
    "checkerboard": np.indices((64, 64)).sum(axis=0) % 2,
}


@pytest.mark.parametrize("view", ["auto", "whole", "edge", "interior"])
@pytest.mark.parametrize("name", PICTURES)
def test_no_crash(name: str, view: str) -> None:
    grey = PICTURES[name].astype(np.float32)
    found = segment_picture(Picture(grey, UNKNOWN_PIXEL_SIZE), SegmentSettings(view=view))  # type: ignore[arg-type]
    assert found.labels.shape == grey.shape
    assert found.pores.shape == grey.shape
    assert set(found.flags) | {f for s in found.sections for f in s.flags} <= set(FLAGS)
    assert found.sections or "no_particle" in found.flags


def test_constant_picture_says_so() -> None:
    found = segment_picture(Picture(np.full((32, 32), 0.5, np.float32), UNKNOWN_PIXEL_SIZE))
    assert found.flags == ("constant_picture", "no_particle")
    assert found.threshold is None


def test_arguments_are_checked() -> None:
    picture = Picture(np.zeros((8, 8), np.float32), UNKNOWN_PIXEL_SIZE)
    with pytest.raises(ValueError, match=r"given_pores must have the picture's shape \(8, 8\), not \(4, 4\)"):
        segment_picture(picture, given_pores=np.zeros((4, 4), bool))
    with pytest.raises(ValueError, match="needs strokes"):
        segment_picture(picture, SegmentSettings(pores="trained"))


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("view", "round"),
        ("outline", "grey"),
        ("pores", "otsu"),
        ("split_neck", 2.0),
        ("threshold", -0.1),
        ("min_pore_px", 0),
    ],
)
def test_settings_are_checked(name: str, value: object) -> None:
    with pytest.raises(ValueError, match=f"SegmentSettings.{name} must"):
        SegmentSettings(**{name: value})  # type: ignore[arg-type]
