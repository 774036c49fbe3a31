from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1] / "batch"))  # drawn_particles: the pictures the tests are made of
