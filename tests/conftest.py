from __future__ import annotations

import os
import zlib

import numpy as np
import pytest

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("MPLBACKEND", "Agg")


@pytest.fixture
def rng(request: pytest.FixtureRequest) -> np.random.Generator:
    """Seeded by the test's own name: every test has its own stream, the same in every run."""
    return np.random.default_rng(zlib.crc32(request.node.name.encode()))
