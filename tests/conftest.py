from __future__ import annotations

import os
import shutil
import tempfile
import zlib
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager
from pathlib import Path

import numpy as np
import pytest

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("MPLBACKEND", "Agg")


@pytest.fixture
def rng(request: pytest.FixtureRequest) -> np.random.Generator:
    """Seeded by the test's own name: every test has its own stream, the same in every run."""
    return np.random.default_rng(zlib.crc32(request.node.name.encode()))


@pytest.fixture
def open_folder() -> Iterator[Path]:
    """A folder that every user of the machine may enter and write; that of ``tmp_path`` belongs to its user alone."""
    folder = Path(tempfile.mkdtemp(prefix="poroscan-"))
    folder.chmod(0o777)
    yield folder
    shutil.rmtree(folder)


@pytest.fixture
def plain_user() -> Callable[[], AbstractContextManager[None]]:
    """Lays down the superuser's privileges for a while, who may read everything; anybody else has none to lay down."""

    @contextmanager
    def without_privileges() -> Iterator[None]:
        if os.geteuid() != 0:
            yield
            return
        os.seteuid(65534)
        try:
            yield
        finally:
            os.seteuid(0)

    return without_privileges
