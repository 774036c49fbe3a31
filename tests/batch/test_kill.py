"""A run killed at any moment continues where it stopped and ends in the same bytes."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import psutil
import pytest
from drawn_particles import draw_particle, write_png

TABLES = (
    "particles.csv",
    "particles.parquet",
    "pores.parquet",
    "curves.parquet",
    "batches.csv",
    "run.json",
    "report.html",
)


def _start(folder: Path, run: Path, *, workers: int) -> subprocess.Popen[bytes]:
    command = [sys.executable, "-m", "poroscan", "scan", str(folder), "--out", str(run), "--workers", str(workers)]
    return subprocess.Popen([*command, "--pixel-size", "0.5", "--quiet"], stderr=subprocess.PIPE)


def _finish(folder: Path, run: Path, *, workers: int) -> dict[str, bytes]:
    with _start(folder, run, workers=workers) as process:
        _, errors = process.communicate(timeout=300)
    assert process.returncode == 0, errors.decode()
    return {name: (run / name).read_bytes() for name in TABLES}


def _committed(run: Path) -> int:
    return len([p for p in (run / "images").glob("*") if not p.name.startswith(".")])


def _kill_and_resume(tmp_path: Path, rng: np.random.Generator, *, kills: int, pictures: int, workers: int) -> None:
    folder, run = tmp_path / "pictures", tmp_path / "run"
    for number in range(pictures):
        write_png(folder / f"batch_{number % 2}" / f"{number}.png", draw_particle(seed=number))
    truth = _finish(folder, tmp_path / "undisturbed", workers=0)
    in_the_middle = 0
    for number in range(kills):
        with _start(folder, run, workers=workers) as process:
            # at a random moment: some time after another picture was committed, or any time at all
            goal = _committed(run) + int(rng.integers(0, 2))
            while process.poll() is None and _committed(run) < goal:
                time.sleep(0.005)
            time.sleep(float(rng.uniform(0.0, 1.5 if number % 4 == 0 else 0.1)))
            children = psutil.Process(process.pid).children() if process.poll() is None else []
            in_the_middle += process.poll() is None
            process.kill()  # SIGKILL
            process.wait()
        _, alive = psutil.wait_procs(children, timeout=10)
        assert not alive, "a worker outlived its parent"
    assert in_the_middle >= kills // 2
    assert _finish(folder, run, workers=workers) == truth
    assert not [p for p in run.rglob(".*") if p.name != ".lock"]


def test_killed_twice(tmp_path: Path, rng: np.random.Generator) -> None:
    _kill_and_resume(tmp_path, rng, kills=2, pictures=4, workers=1)


@pytest.mark.slow
def test_killed_twenty_times(tmp_path: Path, rng: np.random.Generator) -> None:
    _kill_and_resume(tmp_path, rng, kills=20, pictures=30, workers=1)


def test_second_run_into_the_same_folder_is_refused(tmp_path: Path) -> None:
    for number in range(3):
        write_png(tmp_path / "pictures" / f"{number}.png", draw_particle(seed=number))
    with _start(tmp_path / "pictures", tmp_path / "run", workers=1) as first:
        while first.poll() is None and not (tmp_path / "run" / "run.json").exists():
            time.sleep(0.01)
        with _start(tmp_path / "pictures", tmp_path / "run", workers=1) as second:
            _, errors = second.communicate(timeout=60)
        assert first.poll() is None, "the first run ended before the second was tried"
        assert second.returncode == 2
        assert b"another run is writing into this folder" in errors
        first.wait(timeout=60)
    assert first.returncode == 0


def test_killed_worker_costs_nothing_but_time(tmp_path: Path) -> None:
    for number in range(3):
        write_png(tmp_path / "pictures" / f"{number}.png", draw_particle(seed=number))
    with _start(tmp_path / "pictures", tmp_path / "run", workers=1) as process:
        while process.poll() is None and _committed(tmp_path / "run") < 1:
            time.sleep(0.005)
        for child in psutil.Process(process.pid).children():
            if "resource_tracker" not in " ".join(child.cmdline()):
                child.kill()
        process.wait(timeout=60)
    assert process.returncode == 0
    assert _committed(tmp_path / "run") == 3
