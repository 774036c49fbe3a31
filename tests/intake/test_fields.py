"""Fields: what is written comes back, from every format; what is unclear is an error with a remedy."""

from __future__ import annotations

import base64
import struct
import zlib
from pathlib import Path

import h5py
import numpy as np
import pytest
import tifffile

from poroscan.errors import InputError
from poroscan.intake import read_field, section_of_array, section_of_field
from poroscan.intake.field_sections import midway
from poroscan.section import PixelSize

UM = PixelSize(0.5, "field")


@pytest.fixture(params=[(6, 7, 8), (9, 10)], ids=["3-D", "2-D"])
def values(request: pytest.FixtureRequest, rng: np.random.Generator) -> np.ndarray:
    return rng.random(request.param)


# VTK files as the public format description lays them out, written here independently of the reader ------------------------


def _vtk(values: np.ndarray, *, binary: bool, spacing: tuple[float, ...]) -> bytes:
    shape = values.shape if values.ndim == 3 else (1, *values.shape)
    head = (
        f"# vtk DataFile Version 3.0\na title\n{'BINARY' if binary else 'ASCII'}\nDATASET STRUCTURED_POINTS\n"
        f"DIMENSIONS {shape[2]} {shape[1]} {shape[0]}\nORIGIN 0 0 0\nSPACING {' '.join(map(str, spacing))}\n"
        f"POINT_DATA {values.size}\nSCALARS phi double 1\nLOOKUP_TABLE default\n"
    )
    data = values.astype(">f8").tobytes() if binary else " ".join(map(repr, values.ravel().tolist())).encode()
    return head.encode() + data + b"\n"


def _vti(values: np.ndarray, *, form: str, zipped: bool = False, order: str = "<", word: str = "I") -> bytes:
    shape = values.shape if values.ndim == 3 else (1, *values.shape)
    raw = values.astype(order + "f8").tobytes()
    if zipped:
        size = 128
        blocks = [zlib.compress(raw[i : i + size]) for i in range(0, len(raw), size)]
        last = len(raw) % size
        head = struct.pack(f"{order}{3 + len(blocks)}{word}", len(blocks), size, last, *map(len, blocks))
        body = b"".join(blocks)
    else:
        head, body = struct.pack(order + word, len(raw)), raw
    encode = base64.b64encode
    packed = encode(head) + encode(body) if zipped else encode(head + body)
    inline, offset, appended = "", "", b""
    if form == "ascii":
        inline = " ".join(map(repr, values.ravel().tolist()))
    elif form == "binary":
        inline = "\n " + packed.decode() + "\n"
    else:
        offset = ' offset="0"'
        block = head + body if form == "raw" else packed
        appended = (
            f'<AppendedData encoding="{"raw" if form == "raw" else "base64"}">_'.encode() + block + b"</AppendedData>"
        )
    extent = f"0 {shape[2] - 1} 0 {shape[1] - 1} 0 {shape[0] - 1}"
    kind = {"ascii": "ascii", "binary": "binary"}.get(form, "appended")
    xml = (
        f'<?xml version="1.0"?><VTKFile type="ImageData" version="1.0" byte_order="{"Little" if order == "<" else "Big"}Endian" '
        f'header_type="UInt{32 if word == "I" else 64}"{" compressor=" + chr(34) + "vtkZLibDataCompressor" + chr(34) if zipped else ""}>'
        f'<ImageData WholeExtent="{extent}" Origin="0 0 0" Spacing="0.25 0.25 0.25"><Piece Extent="{extent}"><PointData>'
        f'<DataArray type="Float64" Name="phi" format="{kind}"{offset}>{inline}</DataArray></PointData></Piece></ImageData>'
    )
    return xml.encode() + appended + b"</VTKFile>"


# Write -> read -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("suffix", [".npy", ".npz", ".h5", ".hdf5", ".tif"])
def test_arrays_come_back(tmp_path: Path, values: np.ndarray, suffix: str) -> None:
    path = tmp_path / f"a{suffix}"
    if suffix == ".npy":
        np.save(path, values)
    elif suffix == ".npz":
        np.savez_compressed(path, phi=values, spacing_um=0.25, other=np.arange(3))
    elif suffix == ".tif":
        tifffile.imwrite(path, values)
    else:
        with h5py.File(path, "w") as file:
            file.create_dataset("group/phi", data=values, compression="gzip").attrs["spacing_um"] = 0.25
    field = read_field(path)
    np.testing.assert_array_equal(field.values, values)
    assert field.pixel_size.um == (0.25 if suffix in (".npz", ".h5", ".hdf5") else None)
    assert read_field(path, spacing_um=0.125).pixel_size.um == 0.125


def test_ome_tiff_stack_brings_its_spacing(tmp_path: Path, rng: np.random.Generator) -> None:
    values = rng.random((6, 7, 8)).astype(np.float32)
    sizes = {f"PhysicalSize{a}": 40.0 for a in "XYZ"} | {f"PhysicalSize{a}Unit": "nm" for a in "XYZ"}
    tifffile.imwrite(tmp_path / "a.ome.tif", values, metadata={"axes": "ZYX", **sizes})
    field = read_field(tmp_path / "a.ome.tif")
    np.testing.assert_array_equal(field.values, values)
    assert field.pixel_size.um == pytest.approx(0.04)


@pytest.mark.parametrize("binary", [False, True])
def test_legacy_vtk(tmp_path: Path, values: np.ndarray, binary: bool) -> None:
    path = tmp_path / "a.vtk"
    path.write_bytes(_vtk(values, binary=binary, spacing=(0.25, 0.25, 0.25)))
    field = read_field(path)
    np.testing.assert_array_equal(field.values, values)
    assert (field.pixel_size.um, field.array) == (0.25, "phi")
    path.write_bytes(_vtk(values, binary=binary, spacing=(1, 1, 1)))
    assert read_field(path).pixel_size.um is None  # spacing 1 is what files without a scale carry


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("word", ["I", "Q"])
@pytest.mark.parametrize("zipped", [False, True])
@pytest.mark.parametrize("form", ["ascii", "binary", "raw", "base64"])
def test_vti(tmp_path: Path, values: np.ndarray, form: str, zipped: bool, word: str, order: str) -> None:
    if form == "ascii" and zipped:
        zipped = False
    path = tmp_path / "a.vti"
    path.write_bytes(_vti(values, form=form, zipped=zipped, order=order, word=word))
    field = read_field(path)
    np.testing.assert_array_equal(field.values, values)
    assert field.pixel_size.um == 0.25


def test_axes_are_named(tmp_path: Path, rng: np.random.Generator) -> None:
    values = rng.random((3, 20, 30))
    np.save(tmp_path / "a.npy", values)
    with pytest.raises(InputError, match=r"shape \(3, 20, 30\), whose axes are unclear; say axes"):
        read_field(tmp_path / "a.npy")
    np.testing.assert_array_equal(read_field(tmp_path / "a.npy", axes="cyx", component=2).values, values[2])
    np.testing.assert_array_equal(read_field(tmp_path / "a.npy", axes="zxy").values, values.transpose(0, 2, 1))
    with pytest.raises(ValueError, match="axes must name the 3 axes"):
        read_field(tmp_path / "a.npy", axes="yx")
    with pytest.raises(ValueError, match="component must be 0 to 2, not 3"):
        read_field(tmp_path / "a.npy", axes="cyx", component=3)


# Errors ------------------------------------------------------------------------------------------------------------------


def test_field_errors_name_the_file_and_the_remedy(tmp_path: Path, rng: np.random.Generator) -> None:
    def error(name: str, **options: object) -> str:
        with pytest.raises(InputError) as caught:
            read_field(tmp_path / name, **options)
        assert "\n" not in str(caught.value)
        return str(caught.value)

    np.save(tmp_path / "objects.npy", np.array([{"a": 1}], dtype=object), allow_pickle=True)
    assert "Python objects, which are never loaded" in error("objects.npy")
    np.savez(tmp_path / "two.npz", first=rng.random((9, 9)), second=rng.random((9, 9)))
    assert "holds several fields (first, second); name the one" in error("two.npz")
    assert read_field(tmp_path / "two.npz", array="second").array == "second"
    assert "holds no field 'third'" in error("two.npz", array="third")
    np.save(tmp_path / "nan.npy", np.full((9, 9), np.nan))
    assert "81 values that are NaN or infinite" in error("nan.npy")
    np.save(tmp_path / "big.npy", np.zeros((300, 300), np.uint8))
    assert "above the limit of 1000 values" in error("big.npy", max_voxels=1000)
    np.save(tmp_path / "line.npy", np.zeros(9))
    assert "two or three axes" in error("line.npy")
    assert "spacing of 0.5 × 0.25, and only squares and cubes are measured; resample it" in error(
        "big.npy", spacing_um=(0.5, 0.25)
    )
    (tmp_path / "cut.h5").write_bytes(b"\x89HDF\r\n\x1a\n" + bytes(30))
    assert "cannot be read as a field" in error("cut.h5")
    (tmp_path / "a.txt").write_text("1 2 3")
    assert "is no field format that is read" in error("a.txt")


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda d: d[:-400], "ends within its data"),
        (lambda d: d.replace(b"STRUCTURED_POINTS", b"POLYDATA"), "only STRUCTURED_POINTS are read"),
        (lambda d: d.replace(b"DIMENSIONS 10 9 1", b"DIMENSIONS 99999 99999 99999"), "above the limit"),
        (lambda d: d.replace(b"POINT_DATA 90", b"POINT_DATA 91"), "does not fit its dimensions"),
        (lambda d: d.replace(b"# vtk", b"# foo"), "first line"),
        (lambda d: d.replace(b"SPACING 0.25 0.25", b"SPACING 0.25 0.5"), "resample it to equal spacing"),
    ],
)
def test_damaged_vtk(tmp_path: Path, rng: np.random.Generator, change, words: str) -> None:
    (tmp_path / "a.vtk").write_bytes(change(_vtk(rng.random((9, 10)), binary=True, spacing=(0.25, 0.25, 0.25))))
    with pytest.raises(InputError, match=words):
        read_field(tmp_path / "a.vtk")


def test_damaged_vti_is_an_input_error_whatever_the_damage(tmp_path: Path, rng: np.random.Generator) -> None:
    values = rng.random((9, 10))
    for form, zipped in (("ascii", False), ("binary", False), ("binary", True), ("raw", True), ("base64", True)):
        data = _vti(values, form=form, zipped=zipped)
        for _ in range(30):
            broken = bytearray(data)
            broken[rng.integers(len(data))] = rng.integers(256)
            (tmp_path / "a.vti").write_bytes(broken if rng.random() < 0.5 else data[: rng.integers(1, len(data))])
            try:
                field = read_field(tmp_path / "a.vti")
            except InputError:
                continue
            assert np.isfinite(field.values).all()


def test_vti_with_entities_is_refused(tmp_path: Path) -> None:
    (tmp_path / "a.vti").write_bytes(b'<!DOCTYPE a [<!ENTITY b "c">]><VTKFile type="ImageData"/>')
    with pytest.raises(InputError, match="declares entities"):
        read_field(tmp_path / "a.vti")


# Field -> Section --------------------------------------------------------------------------------------------------------


def _ball(ndim: int, n: int = 61, radius: float = 22.0) -> tuple[np.ndarray, np.ndarray]:
    grid = np.indices((n,) * ndim) - n // 2
    distance = np.sqrt((grid**2).sum(axis=0))
    return distance, distance < radius


@pytest.mark.parametrize("ndim", [2, 3])
def test_closed_and_open_pores_lie_inside_the_outline(ndim: int) -> None:
    _, ball = _ball(ndim)
    grid = np.indices(ball.shape) - ball.shape[0] // 2
    closed = np.sqrt(grid[0] ** 2 + (grid[1] - 8) ** 2 + (0 if ndim == 2 else grid[2] ** 2)) < 5
    open_ = (np.abs(grid[0]) < 2) & (grid[1] < -12) & ball & (True if ndim == 2 else np.abs(grid[2]) < 2)
    field = np.where(ball & ~closed & ~open_, 0.6, 0.02)
    section = section_of_array(field, pixel_size=UM, threshold=0.3, closing_px=4)
    assert section.view == "whole"
    assert not section.touches_frame
    assert (section.pores & closed).sum() == closed.sum()
    assert (section.pores & open_).sum() > 0.7 * open_.sum()
    # the outline is that of the ball but for the rounding of the mouth
    assert np.count_nonzero(section.particle ^ ball) < 0.02 * ball.sum()
    assert section.grey is not None


def test_a_dense_particle_has_no_pores_and_its_own_outline() -> None:
    _, ball = _ball(2)
    section = section_of_array(np.where(ball, 0.4, 0.0), pixel_size=UM)
    np.testing.assert_array_equal(section.particle, ball)
    assert not section.pores.any()


def test_quarter_turns_commute(rng: np.random.Generator) -> None:
    from scipy import ndimage

    _, ball = _ball(2)
    field = np.where(ball, ndimage.gaussian_filter(rng.normal(size=ball.shape), 2) * 4 + 0.4, 0.0)
    a = section_of_array(field, pixel_size=UM, threshold=0.3)
    b = section_of_array(np.rot90(field), pixel_size=UM, threshold=0.3)
    np.testing.assert_array_equal(np.rot90(a.pores), b.pores)


def test_a_field_that_fills_its_box_is_an_interior_view(rng: np.random.Generator) -> None:
    from scipy import ndimage

    field = ndimage.gaussian_filter(rng.normal(size=(60, 60)), 2, mode="wrap")
    section = section_of_array(field, pixel_size=UM)
    assert section.view == "interior"
    np.testing.assert_array_equal(section.pores, field < midway(field))


def test_labelled_masks() -> None:
    _, ball = _ball(2)
    labels = ball.astype(int)
    labels[28:33, 28:33] = 2
    names = {"outside": 0, "polymer": 1, "pore": 2}
    section = section_of_array(labels, pixel_size=UM, labels=names)
    assert section.pores.sum() == 25
    np.testing.assert_array_equal(section.particle, ball)
    labels[0, 0] = 9
    with pytest.raises(ValueError, match=r"values hold the labels \[9\], which labels does not name"):
        section_of_array(labels, pixel_size=UM, labels=names)


def test_midway_of_two_values() -> None:
    assert midway(np.repeat([0.1, 0.7], [900, 100])) == pytest.approx(0.4)  # whatever their shares


def test_argument_errors() -> None:
    with pytest.raises(ValueError, match="no threshold separates polymer from solvent"):
        section_of_array(np.ones((9, 9)), pixel_size=UM)
    with pytest.raises(ValueError, match="no polymer at this threshold"):
        section_of_array(np.eye(9), pixel_size=UM, threshold=2.0)
    with pytest.raises(ValueError, match="2-D or 3-D array"):
        section_of_array(np.ones(9), pixel_size=UM)
    with pytest.raises(ValueError, match="closing_px must be at least 0"):
        section_of_array(np.eye(9), pixel_size=UM, closing_px=-1)


def test_field_and_array_agree(tmp_path: Path) -> None:
    _, ball = _ball(2)
    np.save(tmp_path / "a.npy", np.where(ball, 0.5, 0.0))
    field = read_field(tmp_path / "a.npy", spacing_um=0.5)
    section = section_of_field(field, threshold=0.25)
    assert (section.name, section.pixel_size.um, section.pixel_size.source) == ("a.npy", 0.5, "field")
    np.testing.assert_array_equal(section.particle, ball)
