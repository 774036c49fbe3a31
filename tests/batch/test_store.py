from __future__ import annotations

import errno
import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from poroscan.batch.store import FORMAT, RunFolder, read_run
from poroscan.errors import StoreError


def _files(outcome: str, text: str = "x") -> dict[str, bytes]:
    return {"image.json": json.dumps({"format": FORMAT, "outcome": outcome}).encode(), "overlay.png": text.encode()}


@pytest.fixture
def run(tmp_path: Path) -> RunFolder:
    folder = RunFolder(tmp_path / "run")
    folder.images.mkdir(parents=True)
    return folder


def test_commit_replaces_as_a_whole(run: RunFolder) -> None:
    run.commit("a", _files("measured") | {"particle-2.webp": b"y"})
    run.commit("a", _files("measured", "new"))
    assert sorted(p.name for p in (run.images / "a").iterdir()) == ["image.json", "overlay.png"]
    assert (run.images / "a" / "overlay.png").read_text() == "new"
    assert sorted(p.name for p in run.images.iterdir()) == ["a"]


def test_measured_results_survive_a_picture_that_can_no_longer_be_read(run: RunFolder) -> None:
    run.commit("a", _files("measured", "good"))
    run.commit("a", _files("unreadable"))
    assert (run.path / "earlier" / "a" / "overlay.png").read_text() == "good"


def test_full_disk_leaves_the_old_file_whole(run: RunFolder, monkeypatch: pytest.MonkeyPatch) -> None:
    run.write("report.html", "old")
    run.commit("a", _files("measured", "old"))

    def full(_: int) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(StoreError, match="No space left on device; what was there is unharmed"):
        run.write("report.html", "new")
    with pytest.raises(StoreError, match="No space left"):
        run.commit("a", _files("measured", "new"))
    assert (run.path / "report.html").read_text() == "old"
    assert (run.images / "a" / "overlay.png").read_text() == "old"


def test_sweep_takes_only_what_was_left_half_written(run: RunFolder) -> None:
    run.commit("a", _files("measured"))
    (run.images / ".new-b-99").mkdir()
    (run.path / ".new-report.html").write_text("half")
    (run.path / "notes.txt").write_text("the user's own")
    run.sweep()
    assert run.names() == ["a"]
    assert sorted(p.name for p in run.path.iterdir()) == ["images", "notes.txt"]


HOLD = """
import sys, time
from pathlib import Path
from poroscan.batch.store import RunFolder
with RunFolder(Path(sys.argv[1])).locked():
    print("held", flush=True)
    time.sleep(60)
"""


def test_lock_refuses_a_second_process_and_dies_with_the_first(run: RunFolder) -> None:
    with subprocess.Popen([sys.executable, "-c", HOLD, str(run.path)], stdout=subprocess.PIPE, text=True) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        with pytest.raises(StoreError, match="another run is writing into this folder"), run.locked():
            pass
        holder.send_signal(signal.SIGKILL)
        holder.wait()
    with run.locked():
        pass


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("{", "is damaged"),
        ("[]", "no format number"),
        ('{"format": "1"}', "no format number"),
        ('{"format": 99}', r"newer version \(format 99\); update"),
    ],
)
def test_damaged_or_newer_run_is_refused(run: RunFolder, content: str, message: str) -> None:
    (run.path / "run.json").write_text(content)
    with pytest.raises(StoreError, match=message):
        read_run(run.path)


def test_folder_that_is_no_run(tmp_path: Path) -> None:
    with pytest.raises(StoreError, match=r"has no run\.json"):
        read_run(tmp_path)
