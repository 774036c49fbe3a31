"""What a burnt-in scale bar covers is left out of the measurement."""

from __future__ import annotations

import numpy as np
import pytest
from drawn_pictures import burnt_in, texture

from poroscan.intake.banner import stretched
from poroscan.intake.overprint import covered
from poroscan.intake.scale_bar import find_scale_bars


@pytest.mark.parametrize("box", [0, None])
def test_every_drawn_pixel_is_covered(rng: np.random.Generator, box: int | None) -> None:
    """Truth: the pixels in which the picture with the bar differs from the one without, near the stroke."""
    under = texture(400, 600, rng, kind="porous")
    drawn = burnt_in(under.copy(), length=150, label="20 µm", um=20, ink=255, box=box)
    bar = find_scale_bars(drawn.grey, banner_rows=0)[0]
    mask = np.zeros(drawn.grey.shape, bool)
    for top, left, bottom, right in covered(stretched(drawn.grey), bar.box, None):
        mask[top:bottom, left:right] = True
    changed = np.abs(drawn.grey.astype(float) - under) > 2 * np.finfo(np.float32).eps
    stroke = changed.copy()
    stroke[: bar.box.top - 1] = stroke[bar.box.bottom + 1 :] = False
    assert mask[changed if box is not None else stroke].all()
    assert mask.mean() < 0.2
