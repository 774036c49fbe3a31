"""Image quality against pictures of known noise, blur, drift and bands."""

from __future__ import annotations

import numpy as np
import pytest
from drawn_pictures import texture
from scipy import ndimage

from poroscan.intake.image_quality import (
    background_drift,
    band_rows,
    image_quality,
    judge,
    noise_sd,
    spectral_resolution,
)


def _scene(
    rng: np.random.Generator, *, kind: str = "porous", noise: float = 0.02, shape: tuple[int, int] = (480, 640)
) -> np.ndarray:
    clean = texture(*shape, rng, kind=kind, noise=0.0) / 255.0
    return (0.1 + 0.8 * clean + rng.normal(0, noise, shape)).astype(np.float32)


@pytest.mark.parametrize("sd", [0.005, 0.02, 0.1])
def test_noise_of_known_size(rng: np.random.Generator, sd: float) -> None:
    y, x = np.mgrid[:400, :400] / 400
    smooth = 0.5 + 0.3 * np.sin(4 * x) * np.cos(3 * y)
    assert noise_sd((smooth + rng.normal(0, sd, x.shape)).astype(np.float32)) == pytest.approx(sd, rel=0.03)
    assert noise_sd(smooth.astype(np.float32)) < 1e-4


def test_resolution_follows_the_blur(rng: np.random.Generator) -> None:
    # A Gaussian blur of sd s damps the power by exp(-4 pi² s² f²); it meets the noise floor at a frequency that falls as 1/s.
    sharp = rng.random((512, 512))
    found = []
    for s in (2.0, 4.0, 8.0):
        blurred = ndimage.gaussian_filter(sharp, s)
        blurred = blurred / blurred.std() + rng.normal(0, 0.01, sharp.shape)
        found.append(spectral_resolution(blurred.astype(np.float32)))
    ratios = np.array(found[1:]) / np.array(found[:-1])
    np.testing.assert_allclose(ratios, 2.0, rtol=0.2)
    assert "blurred" in judge(image_quality(ndimage.gaussian_filter(_scene(rng, noise=0.0), 5)))
    assert "blurred" not in judge(image_quality(_scene(rng)))


@pytest.mark.parametrize("kind", ["porous", "disc", "flat"])
def test_drift_of_known_size_whatever_the_picture(rng: np.random.Generator, kind: str) -> None:
    scene = _scene(rng, kind=kind)
    x = np.linspace(0, 1, scene.shape[1], dtype=np.float32)
    assert background_drift(scene) < 0.03
    for slope in (0.1, 0.25):
        # 5th to 95th percentile of block centres of a linear ramp: 0.9 of its range over 15/16 of the width
        assert background_drift(scene + slope * x) == pytest.approx(0.9 * slope, rel=0.12)
    assert "uneven_illumination" in judge(image_quality(scene + 0.4 * x))
    assert "uneven_illumination" not in judge(image_quality(scene))


def test_bands_are_found_where_they_are(rng: np.random.Generator) -> None:
    scene = _scene(rng)
    assert band_rows(scene, least=0.05).size == 0
    scene[100:105] += 0.2
    scene[300:302] += 0.15
    assert set(band_rows(scene, least=0.05)) == {100, 101, 102, 103, 104, 300, 301}
    assert "charging" in judge(image_quality(scene))


def test_a_bright_bead_is_no_band(rng: np.random.Generator) -> None:
    scene = _scene(rng, kind="flat")
    scene[200:206, 100:400] += 0.4
    assert band_rows(scene, least=0.05).size == 0


def test_clipping(rng: np.random.Generator) -> None:
    scene = _scene(rng)
    assert "clipped" not in judge(image_quality(scene))
    white = np.minimum(scene, np.quantile(scene, 0.97)).astype(np.float32)
    quality = image_quality(white)
    assert quality.white == pytest.approx(0.03, abs=0.002)
    assert "clipped" in judge(quality)


def test_gain_and_offset_do_not_matter(rng: np.random.Generator) -> None:
    scene = _scene(rng) + 0.3 * np.linspace(0, 1, 640, dtype=np.float32)
    a, b = image_quality(scene), image_quality((scene * 0.02 + 0.3).astype(np.float32))
    assert b.noise == pytest.approx(a.noise, rel=1e-2)
    assert b.drift == pytest.approx(a.drift, rel=1e-2)
    assert judge(a) == judge(b)


@pytest.mark.parametrize("shape", [(1, 1), (1, 50), (50, 1), (7, 9), (70, 70)])
def test_small_and_constant_pictures_have_a_status(shape: tuple[int, int], rng: np.random.Generator) -> None:
    assert judge(image_quality(np.full(shape, 0.4, np.float32))) == ("constant_picture",)
    quality = image_quality(rng.random(shape, dtype=np.float32))
    assert quality.noise >= 0
