"""Opening files: what is wrong with a path, said in one line, and what kind of file its first bytes show."""

from __future__ import annotations

import os
import stat
from pathlib import Path

from poroscan.errors import InputError

#: First bytes -> kind. WEBP and other RIFF files are told apart in ``kind_of``.
_MAGIC: tuple[tuple[bytes, str], ...] = (
    (b"II*\x00", "tiff"),
    (b"MM\x00*", "tiff"),
    (b"II+\x00", "tiff"),
    (b"MM\x00+", "tiff"),
    (b"\x89PNG\r\n\x1a\n", "png"),
    (b"\xff\xd8\xff", "jpeg"),
    (b"BM", "bmp"),
    (b"GIF8", "gif"),
    (b"\x00\x00\x00\x0cjP  ", "jpeg2000"),
    (b"\xffO\xffQ", "jpeg2000"),
    (b"%PDF", "pdf"),
    (b"PK\x03\x04", "zip"),
    (b"\x93NUMPY", "npy"),
    (b"\x89HDF\r\n\x1a\n", "hdf5"),
)

#: Kinds that are read as pictures, with the file extensions that belong to them.
PICTURE_KINDS: dict[str, tuple[str, ...]] = {
    "tiff": (".tif", ".tiff", ".btf", ".tf2", ".tf8"),
    "png": (".png",),
    "jpeg": (".jpg", ".jpeg", ".jpe", ".jfif"),
    "bmp": (".bmp", ".dib"),
}
PICTURE_SUFFIXES = frozenset(suffix for suffixes in PICTURE_KINDS.values() for suffix in suffixes)

_KIND_WORDS = {"gif": "GIF", "webp": "WebP", "jpeg2000": "JPEG 2000", "pdf": "PDF", "zip": "zip archive"}


def shown(name: str | os.PathLike[str]) -> str:
    """A file name in one printable line: undecodable bytes and control characters become escapes."""
    text = os.fsencode(name).decode("utf-8", "backslashreplace")
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


def bad_input(path: Path, wrong: str, remedy: str) -> InputError:
    """The one line that a user sees: file, what is wrong, what to do."""
    return InputError(f"{shown(path)}: {wrong}; {remedy}")


def checked_head(path: Path, *, count: int = 64) -> bytes:
    """First bytes of a file that can be read.

    Raises
    ------
    InputError
        If the path is missing, a dangling link, a folder, a device, empty, or may not be read.
    """
    try:
        status = path.stat()
    except (OSError, ValueError) as error:
        raise _unreachable(path, error) from None
    if stat.S_ISDIR(status.st_mode):
        raise bad_input(path, "is a folder, not a file", "give one picture")
    if not stat.S_ISREG(status.st_mode):
        raise bad_input(path, "is a device or pipe, not a file", "copy the picture into an ordinary file")
    if status.st_size == 0:
        raise bad_input(path, "is empty (zero bytes)", "copy it again from the microscope")
    try:
        with path.open("rb") as stream:
            return stream.read(count)
    except OSError as error:
        raise _unreachable(path, error) from None


def _unreachable(path: Path, error: Exception) -> InputError:
    if path.is_symlink() and not path.exists():
        return bad_input(path, "is a link to a file that does not exist", "mend or remove the link")
    if isinstance(error, FileNotFoundError):
        return bad_input(path, "does not exist", "check the name")
    if isinstance(error, PermissionError):
        return bad_input(path, "may not be read", "change its access rights")
    reason = getattr(error, "strerror", None) or str(error)
    return bad_input(path, f"cannot be opened ({reason})", "check the disk and the name")


def kind_of(head: bytes) -> str | None:
    """Kind of file by its first bytes (``tiff``, ``png``, ``jpeg``, ``bmp``, ``npy``, …), or None where they are unknown."""
    if head[:4] == b"RIFF" and head[8:12] == b"WEBP":
        return "webp"
    for magic, kind in _MAGIC:
        if head.startswith(magic):
            return kind
    return None


def not_a_picture(path: Path, head: bytes) -> InputError:
    """Why a file is not read as a picture, from its first bytes."""
    kind = kind_of(head)
    formats = "save it as TIFF, PNG, JPEG or BMP"
    if kind in _KIND_WORDS:
        return bad_input(path, f"is a {_KIND_WORDS[kind]} file, which is not read", formats)
    if kind in ("npy", "hdf5"):
        return bad_input(path, "is a field, not a picture", "give it to a command that takes simulated fields")
    if head.strip(b"\x00") == b"":
        return bad_input(path, "holds only zero bytes", "copy it again from the microscope")
    if all(32 <= b < 127 or b in b"\t\r\n" for b in head):
        return bad_input(path, "is a text file, not a picture", "remove it, or give the picture itself")
    return bad_input(path, "has no picture header (corrupt or of an unknown format)", formats)
