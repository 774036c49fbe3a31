from __future__ import annotations

import os
import signal
from pathlib import Path

import pytest

from poroscan.batch.workers import run_tasks, usable_cores


def square(task: int) -> int:
    """Kills its process at 13, always; raises at 99."""
    if task == 13:
        os.kill(os.getpid(), signal.SIGKILL)
    if task == 99:
        raise KeyError("ninety-nine")
    return task * task


def dies_once(path: str) -> str:
    marker = Path(path)
    if not marker.exists():
        marker.write_text("seen")
        os.kill(os.getpid(), signal.SIGKILL)
    return marker.read_text()


def threads(_: int) -> tuple[str | None, str | None]:
    return os.environ.get("OMP_NUM_THREADS"), os.environ.get("NUMBA_NUM_THREADS")


def test_a_process_that_dies_costs_its_task_alone() -> None:
    results = dict(run_tasks(square, [1, 2, 13, 4, 5, 6, 7], workers=2))
    assert results == {1: 1, 2: 4, 13: None, 4: 16, 5: 25, 6: 36, 7: 49}


def test_a_task_whose_process_was_killed_from_outside_is_tried_again(tmp_path: Path) -> None:
    (tmp_path / "b").write_text("seen")
    tasks = [str(tmp_path / "a"), str(tmp_path / "b")]
    assert dict(run_tasks(dies_once, tasks, workers=1)) == dict.fromkeys(tasks, "seen")


def test_errors_of_the_function_end_the_run() -> None:
    with pytest.raises(KeyError, match="ninety-nine"):
        list(run_tasks(square, [1, 99, 2], workers=1))


def test_in_this_process() -> None:
    assert list(run_tasks(square, [3, 1], workers=0)) == [(3, 9), (1, 1)]


def test_workers_compute_with_one_thread_each() -> None:
    assert list(run_tasks(threads, [0], workers=1)) == [(0, ("1", "1"))]


def test_usable_cores() -> None:
    assert 1 <= usable_cores() <= (os.cpu_count() or 1)
