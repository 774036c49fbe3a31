from __future__ import annotations

from pathlib import Path

import pytest
from drawn_particles import draw_particle, write_png


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Two batches, three pictures."""
    for number, name in enumerate(("one/a.png", "one/b.png", "two/c.png")):
        write_png(tmp_path / "pictures" / name, draw_particle(seed=number))
    return tmp_path / "pictures"
