"""How long a scan takes and how much memory it needs: tables of measured figures and ratios; the clock is asserted nowhere.

Run with ``python -m pytest tests/benchmarks/test_scan_speed.py -m benchmark -s``. Without a quiet machine the ratios of runs
with one and two workers mean little.
"""

from __future__ import annotations

import resource
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import imagecodecs
import numpy as np
import pytest

pytestmark = pytest.mark.benchmark


def three_megapixels(*, seed: int, particles: int = 8, shape: tuple[int, int] = (1536, 2048)) -> np.ndarray:
    """A three-megapixel picture with eight porous particles of about 500 pixels, each with some 200 pores."""
    rng = np.random.default_rng(seed)
    grey = np.full(shape, 45.0)
    for number in range(particles):
        row, column = 384 + 768 * (number // 4), 256 + 512 * (number % 4)
        _disc(grey, row, column, 225, 175.0)
        for _ in range(220):
            angle, distance = rng.uniform(0, 2 * np.pi), 205 * np.sqrt(rng.uniform(0, 1))
            _disc(grey, row + distance * np.sin(angle), column + distance * np.cos(angle), rng.uniform(3, 9), 70.0)
    return np.clip(grey + rng.normal(0, 7, shape), 0, 255).astype(np.uint8)


def _disc(grey: np.ndarray, row: float, column: float, radius: float, value: float) -> None:
    top, left = int(row - radius) - 1, int(column - radius) - 1
    window = grey[top : top + int(2 * radius) + 3, left : left + int(2 * radius) + 3]
    rows, columns = np.ogrid[: window.shape[0], : window.shape[1]]
    window[(rows + top - row) ** 2 + (columns + left - column) ** 2 < radius**2] = value


def _peak_mb() -> float:
    """Peak memory of this process; kilobytes on Linux, bytes on macOS."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / (1e6 if sys.platform == "darwin" else 1e3)


def _task(folder: Path, run: Path, name: str) -> Any:
    from poroscan.batch.image import ImageTask
    from poroscan.batch.recipe import make_recipe

    return ImageTask("b", name, folder / name, name, run, make_recipe({"intake": {"pixel_size_um": 0.5}}), fresh=True)


def measured(task: Any) -> tuple[int, float]:
    """One picture in a worker process: the process's peak memory before the next one."""
    from poroscan.batch.image import process_image

    outcome = process_image(task)
    assert outcome.outcome == "measured", outcome.reason
    return outcome.particles, _peak_mb()


def _seconds(function: Callable[[], object]) -> float:
    """Processor seconds: other work on the machine does not count."""
    start = time.process_time()
    function()
    return time.process_time() - start


def test_one_large_picture(tmp_path: Path) -> None:
    from poroscan.batch import image
    from poroscan.batch.image import process_image
    from poroscan.batch.recipe import make_recipe
    from poroscan.batch.scan import scan_folder
    from poroscan.intake.loading import load_picture
    from poroscan.measure import measure_section
    from poroscan.segment.picture import segment_picture

    folder = tmp_path / "pictures"
    folder.mkdir()
    (folder / "a.png").write_bytes(imagecodecs.png_encode(three_megapixels(seed=1)))
    task = _task(folder, tmp_path / "run", "a.png")
    process_image(task)  # compiled code is loaded and caches are warm
    picture = load_picture(folder / "a.png", task.recipe.intake)
    segmentation = segment_picture(picture, task.recipe.segment)
    assert len(segmentation.sections) == 8
    rows = [
        ("read", _seconds(lambda: load_picture(folder / "a.png", task.recipe.intake))),
        ("segment", _seconds(lambda: segment_picture(picture, task.recipe.segment))),
        ("measure 8 particles", _seconds(lambda: [measure_section(s, rng=0) for s in segmentation.sections])),
        ("one picture, written", _seconds(lambda: process_image(task))),
    ]
    found = image._Measured(picture, segmentation, tuple(measure_section(s, rng=0) for s in segmentation.sections))
    rows.insert(3, ("draw", _seconds(lambda: image._pictures(task, found))))
    recipe = make_recipe({"intake": {"pixel_size_um": 0.5}})
    rows.append(("whole scan with tables and report", _seconds(lambda: scan_folder(folder, tmp_path / "r2", recipe))))
    print("\n3 megapixels, 8 particles, processor seconds of one core, once started (goal: whole scan 2.5 s, 1500 MB)")
    for name, seconds in rows:
        print(f"  {name:36s} {seconds:7.2f} s   {seconds / rows[-1][1]:6.1%} of the scan")
    print(f"  peak memory of the process           {_peak_mb():7.0f} MB")


def test_workers_and_memory(tmp_path: Path) -> None:
    from poroscan.batch.workers import run_tasks

    folder, pictures = tmp_path / "pictures", 200
    folder.mkdir()
    for number in range(8):  # eight contents, taken in turn, are as good as two hundred
        content = three_megapixels(seed=number)[:768, :1024]
        (folder / f"{number}.png").write_bytes(imagecodecs.png_encode(content))
    seconds, peaks = {}, {}
    for workers in (1, 2):
        run = tmp_path / f"run{workers}"
        tasks = [_task(folder, run, f"{n % 8}.png") for n in range(pictures)]
        tasks = [type(t)(t.batch, t.image, t.path, f"p{n}", t.run, t.recipe, fresh=True) for n, t in enumerate(tasks)]
        start = time.perf_counter()
        results = [result for _, result in run_tasks(measured, tasks, workers=workers)]
        seconds[workers] = time.perf_counter() - start
        peaks[workers] = [peak for _, peak in results if peak]
    print("\n200 pictures (goal: 1.8 times as fast with two workers; the same peak memory at picture 20 and 200)")
    for workers in (1, 2):
        at_20, at_200 = max(peaks[workers][:20]), max(peaks[workers])
        print(
            f"  {workers} worker(s): {seconds[workers]:6.1f} s, {seconds[1] / seconds[workers]:4.2f} times; peak of a "
            f"process {at_20:5.0f} MB at picture 20, {at_200:5.0f} MB at picture 200"
        )


def test_report_of_400_particles(tmp_path: Path) -> None:
    """The run of one picture with seven particles, told sixty times over in ten batches."""
    import json

    import pyarrow as pa
    import pyarrow.parquet as pq

    from poroscan.batch.recipe import make_recipe
    from poroscan.batch.scan import scan_folder
    from poroscan.report.content import report_content
    from poroscan.report.page import write_page
    from poroscan.report.pdf import write_pdf
    from poroscan.report.source import read_run_data

    folder, run = tmp_path / "pictures" / "lot", tmp_path / "run"
    folder.mkdir(parents=True)
    content = three_megapixels(seed=3, particles=7)
    (folder / "a.png").write_bytes(imagecodecs.png_encode(content))
    scan_folder(folder.parent, run, make_recipe({"intake": {"pixel_size_um": 0.5}}))
    for name in ("particles", "curves", "batches"):
        table, parts = pq.read_table(run / f"{name}.parquet"), []
        for number in range(10 if name == "batches" else 60):
            named = {"batch": f"lot {number % 10 if name == 'batches' else number // 6}", "image": f"{number}.png"}
            columns = [
                pa.array([named[c]] * table.num_rows) if c in named else table[c].combine_chunks()
                for c in table.column_names
            ]
            parts.append(pa.table(columns, schema=table.schema))
        pq.write_table(pa.concat_tables(parts), run / f"{name}.parquet")
    about = json.loads((run / "run.json").read_text())
    line = about["inputs"][0]
    about["inputs"] = [line | {"batch": f"lot {n // 6}", "image": f"{n}.png"} for n in range(60)]
    (run / "run.json").write_text(json.dumps(about))
    content: dict[str, Any] = {}
    rows = [("content", _seconds(lambda: content.update(report_content(read_run_data(run)))), 0.0)]
    for name, write in (("report.html", write_page), ("report.pdf", write_pdf)):
        seconds = _seconds(lambda write=write, name=name: write(content, run, run / name))  # type: ignore[misc]
        rows.append((name, seconds, (run / name).stat().st_size / 1e6))
    shown = (run / "report.html").read_text(encoding="utf-8").count('class="particle"')
    print(
        f"\n10 batches, 60 pictures, {shown} particles (goal: 25 s together, HTML 15 MB; 400 particles are shown at most)"
    )
    for name, seconds, size in rows:
        print(f"  {name:12s} {seconds:6.2f} s" + (f" {size:6.1f} MB" if size else ""))
    print(f"  together     {sum(r[1] for r in rows):6.2f} s")
