"""What a run folder holds, and how it is written so that no moment of a crash leaves it half done.

Every file is written under a temporary name in the folder it belongs to and then moved into place with ``os.replace``; a
picture's results are one folder that appears in ``images/`` as a whole. ``.lock`` is held by the operating system for as
long as the writing process lives.
"""

from __future__ import annotations

import contextlib
import json
import os
import shutil
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

from poroscan.errors import StoreError

#: Format number of run.json and image.json; a reader refuses a larger one.
FORMAT = 1

_NEW = ".new-"
_OLD = ".old-"


@dataclass(frozen=True)
class RunFolder:
    """A run folder on disk.

    Parameters
    ----------
    path
        The folder.
    """

    path: Path

    @property
    def images(self) -> Path:
        """Folder that holds one folder per picture."""
        return self.path / "images"

    def run_file(self) -> dict[str, Any] | None:
        """Content of run.json, or None where there is none.

        Raises
        ------
        StoreError
            If it is damaged or was written by a newer version.
        """
        return _read_json(self.path / "run.json")

    def entry(self, name: str) -> dict[str, Any] | None:
        """Content of ``images/NAME/image.json``, or None where the picture was not committed (or is damaged).

        Parameters
        ----------
        name
            Folder of the picture.
        """
        try:
            return _read_json(self.images / name / "image.json")
        except StoreError:
            return None

    def names(self) -> list[str]:
        """Folders of all committed pictures, sorted."""
        if not self.images.is_dir():
            return []
        return sorted(p.name for p in self.images.iterdir() if not p.name.startswith(".") and p.is_dir())

    def commit(self, name: str, files: Mapping[str, bytes]) -> None:
        """Write the results of one picture; they appear in one step and replace earlier ones.

        Results of a picture that was measured before and no longer can be are kept in ``earlier/NAME``.

        Parameters
        ----------
        name
            Folder of the picture.
        files
            File name -> content; ``image.json`` among them.

        Raises
        ------
        StoreError
            If the folder cannot be written.
        """
        new, target = self.images / f"{_NEW}{name}-{os.getpid()}", self.images / name
        with _writing(self.path):
            shutil.rmtree(new, ignore_errors=True)
            new.mkdir(parents=True)
            for file_name, content in files.items():
                _write_synced(new / file_name, content)
            if target.exists():
                self._move_away(name, json.loads(files["image.json"]))
            os.replace(new, target)

    def _move_away(self, name: str, successor: Mapping[str, Any]) -> None:
        target, entry = self.images / name, self.entry(name)
        if entry and entry.get("outcome") == "measured" and successor.get("outcome") != "measured":
            earlier = self.path / "earlier" / name
            earlier.parent.mkdir(exist_ok=True)
            shutil.rmtree(earlier, ignore_errors=True)
            os.replace(target, earlier)
            return
        old = self.images / f"{_OLD}{name}-{os.getpid()}"
        os.replace(target, old)
        shutil.rmtree(old, ignore_errors=True)

    def sweep(self) -> None:
        """Remove what an interrupted run left half written; results are never touched."""
        for folder in (self.images, self.path):
            if folder.is_dir():
                for left in [p for p in folder.iterdir() if p.name.startswith((_NEW, _OLD))]:
                    shutil.rmtree(left, ignore_errors=True) if left.is_dir() else left.unlink(missing_ok=True)

    def write(self, name: str, content: bytes | str) -> None:
        """Write one file of the run folder in one step.

        Parameters
        ----------
        name
            File name.
        content
            Bytes, or text to be written as UTF-8.

        Raises
        ------
        StoreError
            If it cannot be written; the earlier file is whole.
        """
        with self.replacing(name) as path:
            path.write_bytes(content.encode() if isinstance(content, str) else content)

    @contextlib.contextmanager
    def replacing(self, name: str) -> Iterator[Path]:
        """Give a temporary path to write to; it takes the place of ``name`` when the block ends without error.

        Parameters
        ----------
        name
            File name in the run folder.

        Raises
        ------
        StoreError
            If it cannot be written; the earlier file is whole.
        """
        new = self.path / f"{_NEW}{name}"
        with _writing(self.path):
            try:
                yield new
                _sync(new)
                os.replace(new, self.path / name)
            finally:
                new.unlink(missing_ok=True)

    @contextlib.contextmanager
    def locked(self) -> Iterator[RunFolder]:
        """Create the folder and hold its lock; the lock ends with the process, however that ends.

        Raises
        ------
        StoreError
            If another run is writing into the folder, or it cannot be written.
        """
        with _writing(self.path):
            self.images.mkdir(parents=True, exist_ok=True)
            handle = open(self.path / ".lock", "a+b")  # noqa: SIM115 (held open for as long as the run lasts)
        with handle:
            if not _take(handle):
                raise StoreError(
                    f"{self.path}: another run is writing into this folder; wait for it, or give another --out"
                )
            yield self


def read_run(path: str | Path) -> dict[str, Any]:
    """Content of a finished or unfinished run's run.json.

    Parameters
    ----------
    path
        Run folder.

    Raises
    ------
    StoreError
        If the folder is no run folder, or is damaged, or of a newer format.
    """
    content = RunFolder(Path(path)).run_file()
    if content is None:
        raise StoreError(f"{path} is not a run folder (it has no run.json); give the folder that scan wrote with --out")
    return content


def _read_json(path: Path) -> dict[str, Any] | None:
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except (FileNotFoundError, NotADirectoryError):
        return None
    except (ValueError, OSError) as error:
        raise StoreError(f"{path} is damaged ({error}); restore it, or give another --out") from None
    if not isinstance(content, dict) or not isinstance(content.get("format"), int):
        raise StoreError(f"{path} is damaged (no format number); restore it, or give another --out")
    if content["format"] > FORMAT:
        raise StoreError(f"{path} was written by a newer version (format {content['format']}); update the program")
    return content


def _write_synced(path: Path, content: bytes) -> None:
    with path.open("wb") as handle:
        handle.write(content)
        handle.flush()
        os.fsync(handle.fileno())


def _sync(path: Path) -> None:
    with path.open("rb+") as handle:
        os.fsync(handle.fileno())


@contextlib.contextmanager
def _writing(folder: Path) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        reason = error.strerror or str(error)
        raise StoreError(
            f"cannot write to {folder}: {reason}; what was there is unharmed, make room or give another --out"
        ) from error


def _take(handle: IO[bytes]) -> bool:
    """Take the lock without waiting; False where another process holds it."""
    try:
        if os.name == "nt":
            import msvcrt

            handle.seek(0)
            msvcrt.locking(handle.fileno(), msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]
        else:
            import fcntl

            fcntl.flock(handle.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True
