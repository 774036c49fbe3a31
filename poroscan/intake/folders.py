"""From a folder to its pictures: batches, image names, companions, and what cannot be taken.

Every sub-folder that holds pictures is a batch, named by its path below the folder (``drum 3/left``). Pictures that lie
directly in the folder form a batch with the folder's own name. Hidden files and folders are skipped, and so are run folders
(those that hold a ``run.json``).
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType

from poroscan.errors import InputError
from poroscan.intake.files import PICTURE_KINDS, PICTURE_SUFFIXES, bad_input, kind_of, shown
from poroscan.intake.sidecar import SIDECAR_NAMES, SidecarRow, read_sidecar

#: Endings of file names (before the extension) that mark a picture as belonging to another one.
COMPANION_ENDINGS = ("_pores", "_particles", "_strokes")
_COMPANION_SUFFIXES = (".png", ".tif", ".tiff")

#: Pictures that are not read, named so that nobody wonders why they are missing.
_UNREAD = frozenset({".gif", ".webp", ".jp2", ".j2k", ".heic", ".heif", ".svg", ".psd", ".raw", ".dng", ".eps"})

#: Files that may lie beside pictures and are no pictures by their extension; nothing is said of them.
_OTHER = frozenset(
    [
        ".txt",
        ".csv",
        ".tsv",
        ".md",
        ".rst",
        ".json",
        ".toml",
        ".yaml",
        ".yml",
        ".ini",
        ".cfg",
        ".log",
        ".xml",
        ".html",
        ".htm",
        ".pdf",
        ".doc",
        ".docx",
        ".xls",
        ".xlsx",
        ".ods",
        ".odt",
        ".ppt",
        ".pptx",
        ".py",
        ".ipynb",
        ".npy",
        ".npz",
        ".h5",
        ".hdf5",
        ".vti",
        ".vtk",
        ".parquet",
        ".zip",
        ".gz",
        ".7z",
        ".tar",
        ".db",
        ".hdr",
        ".lnk",
        ".sh",
        ".bat",
    ]
)


@dataclass(frozen=True)
class InputFile:
    """One picture of a folder.

    Parameters
    ----------
    batch
        Name of its batch.
    image
        Its name within the batch: the file name in printable characters. Names that differ only in case are told apart by
        ``~2``, ``~3``, … at the end.
    path
        Where it lies.
    """

    batch: str
    image: str
    path: Path


@dataclass(frozen=True)
class Problem:
    """Something in a folder that could not be taken: where, what is wrong, what to do."""

    path: Path
    reason: str
    remedy: str

    def __str__(self) -> str:
        return f"{shown(self.path)}: {self.reason}; {self.remedy}"


@dataclass(frozen=True)
class Companions:
    """Pictures that lie beside a picture and belong to it; None where there is none."""

    pores: Path | None = None
    particles: Path | None = None
    strokes: Path | None = None


@dataclass(frozen=True)
class FolderListing:
    """Pictures of a folder in the order they are measured.

    Parameters
    ----------
    items
        Pictures, sorted by batch and name.
    problems
        What could not be taken.
    sidecar
        Rows of the sidecar tables by (batch, image).
    notes
        What a reader should know although nothing failed (a sidecar row without its picture).
    """

    items: tuple[InputFile, ...]
    problems: tuple[Problem, ...] = ()
    sidecar: Mapping[tuple[str, str], SidecarRow] = field(default_factory=lambda: MappingProxyType({}))
    notes: tuple[str, ...] = ()

    def sidecar_of(self, item: InputFile) -> SidecarRow | None:
        """The sidecar row of a picture, or None."""
        return self.sidecar.get((item.batch, item.image))


def list_inputs(folder: str | os.PathLike[str], *, skip: Iterable[Path] = ()) -> FolderListing:
    """Pictures of a folder and its sub-folders.

    Parameters
    ----------
    folder
        Folder.
    skip
        Folders that are left out, for example the run folder.

    Raises
    ------
    InputError
        If the folder does not exist, is no folder, or may not be read.
    """
    top = Path(folder)
    if not top.is_dir():
        if not top.exists():
            raise bad_input(top, "does not exist", "check the name of the folder")
        raise bad_input(top, "is not a folder", "give the folder that holds the pictures")
    if (top / "run.json").is_file():
        raise bad_input(top, "is a run folder, written by a scan", "give the folder that holds the pictures")
    problems: list[Problem] = []
    tables: list[Path] = []
    found = _Walk(top, {p.resolve() for p in skip}, problems, tables).run()
    items = tuple(item for batch, paths in sorted(found.items()) for item in _named(batch, paths))
    if not items and not problems:
        problems.append(Problem(top, "holds no picture", "put TIFF, PNG, JPEG or BMP files into it"))
    sidecar, notes = _sidecar_rows(top, tables, items, problems)
    return FolderListing(items, tuple(problems), MappingProxyType(sidecar), tuple(notes))


def companions(path: Path) -> Companions:
    """Masks and strokes beside a picture: ``NAME_pores``, ``NAME_particles``, ``NAME_strokes`` as .png or .tif."""
    found: dict[str, Path | None] = {}
    for ending in COMPANION_ENDINGS:
        candidates = (path.with_name(path.stem + ending + suffix) for suffix in _COMPANION_SUFFIXES)
        found[ending[1:]] = next((c for c in candidates if c.is_file()), None)
    return Companions(**found)


class _Walk:
    """One walk through a folder; linked folders are followed once."""

    def __init__(self, top: Path, skip: set[Path], problems: list[Problem], tables: list[Path]) -> None:
        self.top, self.skip, self.problems, self.tables = top, skip, problems, tables
        self.seen: set[tuple[int, int]] = set()
        self.found: dict[str, list[Path]] = {}

    def run(self) -> dict[str, list[Path]]:
        self._folder(self.top, "", depth=0)
        own = self.found.pop("", None)
        if own:
            name = shown(self.top.resolve().name) or "pictures"
            self.found[f"{name} (top folder)" if name in self.found else name] = own
        return self.found

    def _folder(self, folder: Path, batch: str, *, depth: int) -> None:
        try:
            status = folder.stat()
            entries = sorted(os.scandir(folder), key=lambda e: e.name)
        except OSError as error:
            if depth == 0:
                raise bad_input(folder, f"cannot be listed ({error.strerror})", "change its access rights") from None
            self.problems.append(Problem(folder, f"cannot be listed ({error.strerror})", "change its access rights"))
            return
        if (status.st_dev, status.st_ino) in self.seen or depth > 32:
            return
        self.seen.add((status.st_dev, status.st_ino))
        names = {e.name for e in entries}
        if depth > 0 and ("run.json" in names or folder.resolve() in self.skip):
            return
        pictures = self._pictures(entries, batch, depth)
        if pictures:
            self.found[batch] = pictures

    def _pictures(self, entries: list[os.DirEntry[str]], batch: str, depth: int) -> list[Path]:
        pictures = []
        for entry in entries:
            if entry.name.startswith("."):
                continue
            path = Path(entry.path)
            if _is_folder(entry):
                inner = shown(entry.name) if not batch else f"{batch}/{shown(entry.name)}"
                self._folder(path, inner, depth=depth + 1)
            elif entry.name.lower() in SIDECAR_NAMES:
                self.tables.append(path)
            elif self._is_picture(path):
                pictures.append(path)
        return _without_companions(pictures)

    def _is_picture(self, path: Path) -> bool:
        suffix = path.suffix.lower()
        if suffix in PICTURE_SUFFIXES:
            return True
        if suffix in _UNREAD:
            self.problems.append(Problem(path, "is of a picture format that is not read", "save it as TIFF or PNG"))
            return False
        return suffix not in _OTHER and _looks_like_picture(path)


def _is_folder(entry: os.DirEntry[str]) -> bool:
    try:
        return entry.is_dir()
    except OSError:
        return False


def _looks_like_picture(path: Path) -> bool:
    """True where the first bytes of a file with an unknown extension are those of a picture."""
    try:
        if not path.is_file():
            return False
        with path.open("rb") as stream:
            return kind_of(stream.read(16)) in PICTURE_KINDS
    except OSError:
        return False


def _without_companions(paths: list[Path]) -> list[Path]:
    stems = {p.stem for p in paths}
    return [p for p in paths if not _is_companion(p, stems)]


def _is_companion(path: Path, stems: set[str]) -> bool:
    if path.suffix.lower() not in _COMPANION_SUFFIXES:
        return False
    return any(path.stem.endswith(e) and path.stem[: -len(e)] in stems for e in COMPANION_ENDINGS)


def _named(batch: str, paths: list[Path]) -> Iterator[InputFile]:
    """Pictures of a batch with names that also differ where case does not count."""
    taken: set[str] = set()
    for path in sorted(paths, key=lambda p: p.name):
        base = name = shown(path.name)
        number = 1
        while name.casefold() in taken:
            number += 1
            name = f"{base}~{number}"
        taken.add(name.casefold())
        yield InputFile(batch, name, path)


def _sidecar_rows(
    top: Path, tables: list[Path], items: tuple[InputFile, ...], problems: list[Problem]
) -> tuple[dict[tuple[str, str], SidecarRow], list[str]]:
    by_name: dict[str, list[InputFile]] = {}
    for item in items:
        relative = item.path.relative_to(top)
        for key in {str(relative), str(relative.with_suffix(""))}:
            by_name.setdefault(key.replace(os.sep, "/"), []).append(item)
    rows: dict[tuple[str, str], SidecarRow] = {}
    notes: list[str] = []
    for table in sorted(tables, key=lambda p: (len(p.parts), str(p))):  # a table nearer to the picture wins
        try:
            listed = read_sidecar(table)
        except InputError as error:
            reason = str(error).removeprefix(f"{shown(table)}: ")
            problems.append(Problem(table, *reason.split("; ", 1)))
            continue
        folder = table.parent.relative_to(top).as_posix()
        for row in listed:
            name = row.image if folder == "." else f"{folder}/{row.image}"
            pictures = by_name.get(name, [])
            if not pictures:
                notes.append(f"{shown(table)} line {row.line} names {row.image!r}, which is not in the folder")
            rows.update({(item.batch, item.image): row for item in pictures})
    return rows, notes
