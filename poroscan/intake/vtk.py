"""A small reader of VTK image data: legacy ``.vtk`` structured points and XML ``.vti``, as their public format description says.

Returns every array by name with the spacing; nothing is executed, no entity is expanded, sizes are checked before they are
allocated.
"""

from __future__ import annotations

import base64
import binascii
import math
import re
import zlib
from dataclasses import dataclass
from xml.etree import ElementTree

import numpy as np
import numpy.typing as npt

_TYPES = {
    "bit": "", "unsigned_char": "u1", "char": "i1", "unsigned_short": "u2", "short": "i2", "unsigned_int": "u4", "int": "i4",
    "unsigned_long": "u8", "long": "i8", "vtktypeint64": "i8", "float": "f4", "double": "f8",
    "uint8": "u1", "int8": "i1", "uint16": "u2", "int16": "i2", "uint32": "u4", "int32": "i4", "uint64": "u8", "int64": "i8",
    "float32": "f4", "float64": "f8",
}  # fmt: skip


@dataclass(frozen=True, eq=False)
class ImageData:
    """Arrays on a regular grid.

    Parameters
    ----------
    arrays
        By name; axes (plane, row, column) = (z, y, x), single planes as (row, column). Arrays with several components are left
        out.
    spacing
        Along (z, y, x), or (y, x) for a single plane, in the file's own unit.
    """

    arrays: dict[str, npt.NDArray]
    spacing: tuple[float, ...]


def parse_vtk(data: bytes, *, max_voxels: int) -> ImageData:
    """Read legacy structured points.

    Parameters
    ----------
    data
        The file.
    max_voxels
        More than this are refused.

    Raises
    ------
    ValueError
        If the text is no such file, is cut off, or is too large.
    """
    lines = _Lines(data)
    if not lines.next().lower().startswith("# vtk datafile"):
        raise ValueError("its first line is not '# vtk DataFile Version …'")
    lines.next()
    form = lines.next().strip().upper()
    if form not in ("ASCII", "BINARY"):
        raise ValueError(f"its third line is {form[:20]!r}, not ASCII or BINARY")
    kind = lines.words()
    if [w.upper() for w in kind] != ["DATASET", "STRUCTURED_POINTS"]:
        raise ValueError(f"it holds {' '.join(kind)[:40]!r}, and only STRUCTURED_POINTS are read")
    return _structured_points(lines, binary=form == "BINARY", max_voxels=max_voxels)


class _Lines:
    """Bytes read line by line, with binary blocks in between."""

    def __init__(self, data: bytes) -> None:
        self.data, self.at = data, 0

    def more(self) -> bool:
        while self.at < len(self.data) and self.data[self.at : self.at + 1].isspace():
            self.at += 1
        return self.at < len(self.data)

    def next(self) -> str:
        if self.at >= len(self.data):
            raise ValueError("it ends too early")
        end = self.data.find(b"\n", self.at)
        end = len(self.data) if end < 0 else end
        line = self.data[self.at : end].decode("latin-1").rstrip("\r")
        self.at = end + 1
        return line

    def words(self) -> list[str]:
        if not self.more():
            raise ValueError("it ends too early")
        return self.next().split()

    def block(self, count: int, code: str) -> npt.NDArray:
        size = count * np.dtype(code).itemsize
        if self.at + size > len(self.data):
            raise ValueError("it ends within its data")
        values = np.frombuffer(self.data, f">{code}", count, self.at)
        self.at += size
        return values

    def numbers(self, count: int) -> npt.NDArray[np.float64]:
        pattern = re.compile(rb"\s*(\S+)")
        values = np.empty(count)
        for index in range(count):
            match = pattern.match(self.data, self.at)
            if match is None:
                raise ValueError("it ends within its data")
            values[index] = float(match[1])
            self.at = match.end()
        return values


def _structured_points(lines: _Lines, *, binary: bool, max_voxels: int) -> ImageData:
    shape: tuple[int, ...] = ()
    spacing: tuple[float, ...] = (1.0, 1.0, 1.0)
    arrays: dict[str, npt.NDArray] = {}
    grid: tuple[int, ...] = ()
    while lines.more():
        words = lines.words()
        key = words[0].upper()
        if key == "DIMENSIONS":
            shape = tuple(int(w) for w in reversed(words[1:4]))
            if len(shape) != 3 or min(shape) < 1 or math.prod(shape) > max_voxels:
                raise ValueError(
                    f"its dimensions {' '.join(words[1:4])} are empty or above the limit of {max_voxels} voxels"
                )
        elif key in ("SPACING", "ASPECT_RATIO"):
            spacing = tuple(float(w) for w in reversed(words[1:4]))
        elif key in ("POINT_DATA", "CELL_DATA"):
            grid = shape if key == "POINT_DATA" else tuple(max(1, n - 1) for n in shape)
            if not grid or int(words[1]) != math.prod(grid):
                raise ValueError(f"{key} {words[1]} does not fit its dimensions")
        elif key == "SCALARS" and grid:
            components = int(words[3]) if len(words) > 3 else 1
            lines.words()  # LOOKUP_TABLE
            _store(arrays, words[1], _values(lines, math.prod(grid) * components, words[2], binary), grid, components)
        elif key == "FIELD" and grid:
            for _ in range(int(words[2])):
                name, components_, tuples, type_ = lines.words()[:4]
                values = _values(lines, int(components_) * int(tuples), type_, binary, limit=16 * max_voxels)
                if int(tuples) == math.prod(grid):
                    _store(arrays, name, values, grid, int(components_))
        elif key not in ("ORIGIN", "METADATA", "INFORMATION", "NAME", "DATA"):
            raise ValueError(f"the keyword {words[0][:30]!r} is not read")
    return _image_data(arrays, spacing)


def _values(lines: _Lines, count: int, type_: str, binary: bool, *, limit: int | None = None) -> npt.NDArray:
    code = _TYPES.get(type_.lower(), "")
    if not code:
        raise ValueError(f"values of type {type_!r} are not read")
    if count < 0 or (limit is not None and count > limit) or count > 2 * len(lines.data):
        raise ValueError("it ends within its data")
    return lines.block(count, code) if binary else _typed(lines.numbers(count), code)


def _typed(numbers: npt.NDArray[np.float64], code: str) -> npt.NDArray:
    """Numbers written as text in the type that the file states."""
    with np.errstate(all="ignore"):
        values = numbers.astype(code)
    if code[0] in "ui" and not np.array_equal(values, numbers):
        raise ValueError("it holds numbers that do not fit their own type")
    return values


def _store(
    arrays: dict[str, npt.NDArray], name: str, values: npt.NDArray, grid: tuple[int, ...], components: int
) -> None:
    if components == 1:
        arrays[name] = values.reshape(grid)


def _image_data(arrays: dict[str, npt.NDArray], spacing: tuple[float, ...]) -> ImageData:
    if len(spacing) != 3 or not all(math.isfinite(s) and s > 0 for s in spacing):
        raise ValueError(f"its spacing {spacing} is not three positive numbers")
    flat = bool(arrays) and all(a.shape[0] == 1 for a in arrays.values())
    if flat:
        return ImageData({name: a[0] for name, a in arrays.items()}, spacing[1:])
    return ImageData(arrays, spacing)


def parse_vti(data: bytes, *, max_voxels: int) -> ImageData:
    """Read XML image data: ascii, base64 (plain or zlib) and appended (raw or base64) arrays of one piece.

    Parameters
    ----------
    data
        The file.
    max_voxels
        More than this are refused.

    Raises
    ------
    ValueError
        If the file is damaged, cut off, of several pieces, too large, or packed in a way that is not read.
    """
    xml, appended, encoding = _split_appended(data)
    root = _root(xml)
    image = root.find("ImageData")
    pieces = image.findall("Piece") if image is not None else []
    if image is None or len(pieces) != 1:
        raise ValueError(f"it holds {len(pieces)} pieces of image data, and one is read")
    extent = [int(w) for w in (pieces[0].get("Extent") or image.get("WholeExtent") or "").split()]
    if len(extent) != 6:
        raise ValueError("its extent is not six numbers")
    points = tuple(extent[2 * a + 1] - extent[2 * a] + 1 for a in (2, 1, 0))
    if min(points) < 1 or math.prod(points) > max_voxels:
        raise ValueError(f"its extent is empty or above the limit of {max_voxels} voxels")
    spacing = tuple(float(w) for w in reversed((image.get("Spacing") or "1 1 1").split()))
    packed = _Packed(root, appended, encoding)
    arrays: dict[str, npt.NDArray] = {}
    for place, grid in (("PointData", points), ("CellData", tuple(max(1, n - 1) for n in points))):
        for element in pieces[0].findall(f"{place}/DataArray"):
            components = int(element.get("NumberOfComponents") or 1)
            values = packed.values(element, math.prod(grid) * components)
            _store(arrays, element.get("Name") or f"array {len(arrays) + 1}", values, grid, components)
    return _image_data(arrays, spacing)


def _split_appended(data: bytes) -> tuple[bytes, bytes, str]:
    """XML without its appended block, that block after its underscore, and its encoding."""
    start = data.find(b"<AppendedData")
    if start < 0:
        return data, b"", ""
    head_end = data.find(b">", start)
    mark = data.find(b"_", head_end)
    end = data.rfind(b"</AppendedData>")
    if head_end < 0 or mark < 0 or end < mark:
        raise ValueError("its appended data are cut off")
    encoding = "base64" if b"base64" in data[start:head_end] else "raw"
    return data[:start] + b"</VTKFile>", data[mark + 1 : end], encoding


def _root(xml: bytes) -> ElementTree.Element:
    if b"<!DOCTYPE" in xml or b"<!ENTITY" in xml:
        raise ValueError("it declares entities, which image data never need")
    try:
        root = ElementTree.fromstring(xml)
    except (ElementTree.ParseError, ValueError) as error:
        raise ValueError(f"its XML is damaged ({error})") from None
    if root.tag != "VTKFile" or root.get("type") != "ImageData":
        raise ValueError(f"it is {root.get('type') or root.tag!r}, and only ImageData is read")
    return root


class _Packed:
    """How the arrays of one file are packed."""

    def __init__(self, root: ElementTree.Element, appended: bytes, encoding: str) -> None:
        self.order = "<" if root.get("byte_order", "LittleEndian") == "LittleEndian" else ">"
        self.word = np.dtype(self.order + ("u8" if root.get("header_type") == "UInt64" else "u4"))
        compressor = root.get("compressor", "")
        if compressor not in ("", "vtkZLibDataCompressor"):
            raise ValueError(f"the packing {compressor} is not read; save it with zlib or none")
        self.zipped = bool(compressor)
        self.appended, self.encoding = appended, encoding

    def values(self, element: ElementTree.Element, count: int) -> npt.NDArray:
        code = _TYPES.get((element.get("type") or "").lower(), "")
        if not code:
            raise ValueError(f"values of type {element.get('type')!r} are not read")
        form = element.get("format", "ascii")
        if form == "ascii":
            words = (element.text or "").split()
            if len(words) != count:
                raise ValueError(f"an array has {len(words)} of {count} values")
            return _typed(np.array([float(w) for w in words]), code)
        dtype = np.dtype(self.order + code)
        raw = self._raw(element, form, count * dtype.itemsize)
        if len(raw) != count * dtype.itemsize:
            raise ValueError(f"an array has {len(raw)} of {count * dtype.itemsize} bytes")
        return np.frombuffer(raw, dtype)

    def _raw(self, element: ElementTree.Element, form: str, size: int) -> bytes:
        if form == "binary":
            text = "".join((element.text or "").split()).encode("ascii", "replace")
            return self._from_base64(text, size)
        if form != "appended":
            raise ValueError(f"the format {form!r} is not read")
        block = self.appended[int(element.get("offset") or 0) :]
        if self.encoding == "base64":
            return self._from_base64(b"".join(block.split()), size)
        return self._unpacked(block, size)

    def _from_base64(self, text: bytes, size: int) -> bytes:
        if not self.zipped:
            wanted = self.word.itemsize + size
            return _decoded(text[: -(-wanted // 3) * 4])[self.word.itemsize : wanted]
        count = int(np.frombuffer(_decoded(text[: -(-self.word.itemsize // 3) * 4]), self.word, 1)[0])
        if count > 2**24:
            raise ValueError("its packed blocks are damaged")
        head = -(-(3 + count) * self.word.itemsize // 3) * 4
        header = _decoded(text[:head])
        sizes = np.frombuffer(header, self.word, 3 + count)[3:]
        body = _decoded(text[head : head + -(-int(sizes.sum()) // 3) * 4])
        return self._unpacked(header[: (3 + count) * self.word.itemsize] + body, size)

    def _unpacked(self, block: bytes, size: int) -> bytes:
        if not self.zipped:
            return block[self.word.itemsize : self.word.itemsize + size]
        count = int(np.frombuffer(block, self.word, 1)[0])
        if count > 2**24 or len(block) < (3 + count) * self.word.itemsize:
            raise ValueError("its packed blocks are damaged")
        sizes = np.frombuffer(block, self.word, 3 + count)[3:]
        at, parts, total = (3 + count) * self.word.itemsize, [], 0
        for length in sizes.tolist():
            unpacker = zlib.decompressobj()
            try:
                parts.append(unpacker.decompress(block[at : at + length], size - total + 1))
            except zlib.error as error:
                raise ValueError(f"its packed blocks are damaged ({error})") from None
            total += len(parts[-1])
            at += length
            if total > size:
                raise ValueError("its packed blocks hold more than they should")
        return b"".join(parts)


def _decoded(text: bytes) -> bytes:
    try:
        return base64.b64decode(text)
    except (binascii.Error, ValueError) as error:
        raise ValueError(f"its base64 text is damaged ({error})") from None
