"""Every image format, written by a writer of its own, comes out as the .npy does; hostile bytes are refused."""

import base64
import io
import struct
import zipfile
import zlib

import numpy as np
import pytest
import tifffile
from PIL import Image

from morph.core.errors import InputError
from morph.read.image import read_image

pytestmark = pytest.mark.quick

ROWS, COLUMNS = 24, 36
GREY = np.round(np.random.default_rng(7).random((ROWS, COLUMNS)) ** 2 * 65535) / 65535
"""Values that 16 bits hold exactly; rows and columns differ, nothing is symmetric."""


def refused(path, code):
    with pytest.raises(InputError) as caught:
        read_image(path, (36.0, 24.0))
    assert caught.value.code == code, caught.value.sentence()
    return caught.value


def test_npz_takes_the_only_flat_array_or_the_usual_name(tmp_path):
    np.savez(tmp_path / "one.npz", whatever=GREY, scale=np.array([1.0]))
    np.testing.assert_array_equal(read_image(tmp_path / "one.npz").value, GREY)
    np.savez_compressed(tmp_path / "two.npz", density=GREY, heat=GREY[::-1])
    image = read_image(tmp_path / "two.npz")
    np.testing.assert_array_equal(image.value, GREY)
    assert 'array "density"' in image.note and "36 x 24" in image.note


def test_npz_that_leaves_a_choice_or_hides_something_is_refused(tmp_path):
    np.savez(tmp_path / "a.npz", heat=GREY, flow=GREY)
    assert "flow, heat" in refused(tmp_path / "a.npz", "image-array-choice").found
    np.savez(tmp_path / "b.npz", heat=GREY.ravel())
    refused(tmp_path / "b.npz", "image-array-choice")
    np.savez(tmp_path / "c.npz", density=np.array([[object()] * 9] * 9))
    refused(tmp_path / "c.npz", "image-pickled")
    content = (tmp_path / "a.npz").read_bytes()
    (tmp_path / "d.npz").write_bytes(content[: len(content) // 2])
    refused(tmp_path / "d.npz", "image-damaged")
    refused_kind = tmp_path / "e.npz"
    refused_kind.write_bytes(b"\x93NUMPY")
    refused(refused_kind, "image-not-its-kind")


def test_a_zip_bomb_is_refused_before_it_unpacks(tmp_path, monkeypatch):
    monkeypatch.setattr("morph.read.image_npy.LARGEST_ARRAY_BYTES", 1_000_000)
    header = io.BytesIO()
    np.lib.format.write_array_header_1_0(header, {"descr": "<f8", "fortran_order": False, "shape": (60000, 60000)})
    with (
        zipfile.ZipFile(tmp_path / "a.npz", "w", zipfile.ZIP_DEFLATED) as archive,
        archive.open("density.npy", "w", force_zip64=True) as stream,
    ):
        stream.write(header.getvalue())
        for _ in range(20):
            stream.write(bytes(1_000_000))
    refused(tmp_path / "a.npz", "image-too-large")


@pytest.mark.parametrize("compression", [None, "zlib"])
@pytest.mark.parametrize("byteorder", ["<", ">"])
def test_tiff_of_16_bits_and_of_floating_point(tmp_path, compression, byteorder):
    whole = np.round(GREY * 65535).astype(np.uint16)
    tifffile.imwrite(tmp_path / "a.tif", whole, photometric="minisblack", compression=compression, byteorder=byteorder)
    image = read_image(tmp_path / "a.tif")
    np.testing.assert_array_equal(image.value, GREY)
    assert "16 bits" in image.note and image.rows == "top-down"
    tifffile.imwrite(tmp_path / "b.tiff", GREY.astype(np.float32), photometric="minisblack", compression=compression)
    np.testing.assert_allclose(read_image(tmp_path / "b.tiff").value, GREY, atol=6e-8)


@pytest.mark.parametrize("byteorder", ["<", ">"])
def test_tiff_of_64_bits_floating_point(tmp_path, byteorder):
    tifffile.imwrite(tmp_path / "a.tif", GREY, photometric="minisblack", byteorder=byteorder, rowsperstrip=5)
    image = read_image(tmp_path / "a.tif")
    np.testing.assert_array_equal(image.value, GREY)
    assert "64-bit" in image.note
    content = (tmp_path / "a.tif").read_bytes()
    (tmp_path / "b.tif").write_bytes(content[:-200])
    refused(tmp_path / "b.tif", "image-damaged")


def test_tiff_in_tiles_and_of_8_bits(tmp_path):
    eight = np.round(GREY * 255).astype(np.uint8)
    tifffile.imwrite(tmp_path / "a.tif", eight, photometric="minisblack", tile=(16, 16))
    np.testing.assert_allclose(read_image(tmp_path / "a.tif").value, eight / 255)
    Image.fromarray(eight).convert("RGB").save(tmp_path / "b.tif", compression="tiff_lzw")
    np.testing.assert_allclose(read_image(tmp_path / "b.tif").value, eight / 255)


def test_tiff_that_is_no_plain_grey_page_is_refused(tmp_path):
    eight = np.round(GREY * 255).astype(np.uint8)
    tifffile.imwrite(tmp_path / "a.tif", np.stack([eight, eight, eight]), photometric="minisblack")
    refused(tmp_path / "a.tif", "image-tiff-kind")
    Image.fromarray(eight).convert("P").save(tmp_path / "b.tif")
    refused(tmp_path / "b.tif", "image-tiff-kind")
    tifffile.imwrite(tmp_path / "c.tif", eight, photometric="minisblack", extratags=[(274, "H", 1, 6, True)])
    refused(tmp_path / "c.tif", "image-tiff-kind")
    tifffile.imwrite(tmp_path / "d.tif", (GREY * 1000).astype(np.int32), photometric="minisblack")
    refused(tmp_path / "d.tif", "image-tiff-kind")
    red = np.stack([eight, eight, 255 - eight], axis=-1)
    tifffile.imwrite(tmp_path / "e.tif", red, photometric="rgb")
    refused(tmp_path / "e.tif", "image-coloured")


def test_a_tiff_of_terabytes_is_refused_by_its_header(tmp_path):
    def entry(tag, kind, value):
        return struct.pack("<HHII", tag, kind, 1, value)

    tags = [entry(256, 4, 2_000_000_000), entry(257, 4, 2_000_000_000), entry(258, 3, 16), entry(259, 3, 1)]
    tags += [entry(262, 3, 1), entry(273, 4, 8), entry(278, 4, 2_000_000_000), entry(279, 4, 16)]
    body = struct.pack("<H", len(tags)) + b"".join(tags) + struct.pack("<I", 0)
    (tmp_path / "a.tif").write_bytes(b"II*\0" + struct.pack("<I", 8) + body)
    refused(tmp_path / "a.tif", "image-too-large")


@pytest.mark.parametrize("kind", ["tif", "npz", "vti"])
def test_cut_and_altered_files_never_fall_over(tmp_path, kind):
    """Each is refused with a code of its own or, where the harm is in a value, still read whole."""
    path = tmp_path / f"a.{kind}"
    if kind == "tif":
        tifffile.imwrite(path, GREY.astype(np.float32), photometric="minisblack", compression="zlib")
    elif kind == "npz":
        np.savez_compressed(path, density=GREY)
    else:
        path.write_bytes(vti(appended=True))
    whole = path.read_bytes()
    rng = np.random.default_rng(3)
    for number in range(150):
        harm = bytearray(whole)
        if number % 3 == 0:
            harm = harm[: int(rng.integers(1, len(whole)))]
        else:
            for at in rng.integers(0, len(harm), int(rng.integers(1, 6))):
                harm[at] = int(rng.integers(256))
        path.write_bytes(bytes(harm))
        try:
            assert read_image(path).value.shape == (ROWS, COLUMNS) or number % 3
        except InputError as error:
            assert error.code.startswith("image-")


@pytest.mark.parametrize("separator", [",", ";", "\t", " "])
def test_tables_by_another_writer(tmp_path, separator):
    np.savetxt(tmp_path / "a.csv", GREY, delimiter=separator, fmt="%.17g", header="density, 0..1")
    image = read_image(tmp_path / "a.csv")
    np.testing.assert_array_equal(image.value, GREY)
    assert image.note.endswith({",": "commas", ";": "semicolons", "\t": "tabs", " ": "blanks"}[separator])


def test_tables_with_decimal_commas_and_a_byte_order_mark(tmp_path):
    text = "\r\n".join(";".join(f"{value:.6f}".replace(".", ",") for value in row) for row in GREY)
    (tmp_path / "a.csv").write_bytes(b"\xef\xbb\xbf" + text.encode())
    np.testing.assert_allclose(read_image(tmp_path / "a.csv").value, GREY, atol=1e-6)


@pytest.mark.parametrize(
    ("change", "where"),
    [
        (lambda rows: ["x,y,density", *rows], "line 1"),
        (lambda rows: [*rows[:5], rows[5] + ",0.5", *rows[6:]], "line 6"),
        (lambda rows: [*rows[:5], rows[5].replace(",", ",abc", 1), *rows[6:]], "line 6"),
        (lambda rows: [*rows[:5], "1_0" + rows[5], *rows[6:]], "line 6"),
        (lambda rows: ["# nothing"], "a.csv"),
        (lambda rows: ["\0\xff"], "a.csv"),
    ],
)
def test_tables_that_are_none_are_refused_by_line(tmp_path, change, where):
    rows = [",".join(f"{value:.4f}" for value in row) for row in GREY]
    (tmp_path / "a.csv").write_bytes("\n".join(change(rows)).encode("latin-1"))
    assert refused(tmp_path / "a.csv", "image-table").where.endswith(where)


def test_tables_out_of_bounds_are_refused(tmp_path):
    (tmp_path / "a.csv").write_text("\n".join(["0.5,0.2"] * 9000))
    refused(tmp_path / "a.csv", "image-too-large")
    (tmp_path / "b.csv").write_text("\n".join(["0.5,0.2"] * 20))
    refused(tmp_path / "b.csv", "image-too-small")
    (tmp_path / "c.csv").write_text("\n".join([",".join(["nan"] * 20)] * 20))
    refused(tmp_path / "c.csv", "image-not-finite")


def test_png_of_16_bits_with_opaque_alpha(tmp_path):
    """Written by hand from ISO/IEC 15948 (PNG): colour type 4, pixels of grey and alpha, both high byte first."""
    whole = np.round(GREY * 65535).astype(">u2")
    body = b"".join(
        b"\0" + np.column_stack([row, np.full(COLUMNS, 65535, ">u2")]).astype(">u2").tobytes() for row in whole
    )
    chunk = lambda kind, data: struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))  # noqa: E731
    header = struct.pack(">IIBBBBB", COLUMNS, ROWS, 16, 4, 0, 0, 0)
    content = b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header)
    end = chunk(b"IEND", b"")
    (tmp_path / "a.png").write_bytes(content + chunk(b"IDAT", zlib.compress(body)) + end)
    np.testing.assert_array_equal(read_image(tmp_path / "a.png").value, GREY)
    clear = bytearray(body)
    clear[3:5] = b"\x12\x34"
    (tmp_path / "b.png").write_bytes(content + chunk(b"IDAT", zlib.compress(bytes(clear))) + end)
    refused(tmp_path / "b.png", "image-transparent")


def vti(extent=None, data=None, appended=False, root="", image="", more="", name="density"):
    """A .vti written by hand from the published description of the format: cells, Float64, little endian."""
    extent = extent or f"0 {COLUMNS} 0 {ROWS} 0 0"
    value = GREY[::-1].astype("<f8").tobytes()
    block = struct.pack("<I", len(value)) + value
    how = 'format="appended" offset="0"' if appended else 'format="binary"'
    inner = data if data is not None else "" if appended else base64.b64encode(block).decode()
    tail = b'<AppendedData encoding="raw">_' + block + b"</AppendedData>" if appended else b""
    head = (
        f'<?xml version="1.0"?>{more}<VTKFile type="ImageData" version="0.1" byte_order="LittleEndian" {root}>'
        f'<ImageData WholeExtent="{extent}" Origin="0 0 0" Spacing="0.5 0.5 1" {image}><Piece Extent="{extent}">'
        f'<CellData><DataArray type="Float64" Name="{name}" {how}>{inner}</DataArray></CellData></Piece></ImageData>'
    )
    return head.encode() + tail + b"</VTKFile>"


@pytest.mark.parametrize("appended", [False, True])
def test_vti_by_hand_has_its_first_row_at_the_bottom(tmp_path, appended):
    (tmp_path / "a.vti").write_bytes(vti(appended=appended))
    image = read_image(tmp_path / "a.vti")
    np.testing.assert_array_equal(image.value[::-1], GREY)
    assert (image.rows, image.samples, image.states) == ("bottom-up", "cells", True)
    assert image.size_units == (18.0, 12.0) and "own unit" in image.note


@pytest.mark.parametrize("vtk_format", ["ascii", "binary", "append"])
@pytest.mark.parametrize("compression", [False, True])
@pytest.mark.parametrize("samples", ["cells", "nodes"])
@pytest.mark.parametrize("byte_order", ["LittleEndian", "BigEndian"])
def test_vti_by_an_independent_writer(tmp_path, vtk_format, compression, samples, byte_order):
    """Writer: uvw. Its axes are (x, y); the array lies transposed so that the first index is x."""
    import uvw

    more = 1 if samples == "cells" else 0
    points = [COLUMNS + more, ROWS + more]
    ranges = [(0.0, 18.0), (0.0, 12.0)]
    flat = GREY[::-1].T.astype("<f8" if byte_order == "LittleEndian" else ">f8")
    with uvw.ImageData(str(tmp_path / "a.vti"), ranges, points, compression=compression, byte_order=byte_order) as file:
        array = uvw.DataArray(flat, [0, 1], "rho")
        (file.addCellData if samples == "cells" else file.addPointData)(array, vtk_format)
    image = read_image(tmp_path / "a.vti")
    np.testing.assert_allclose(image.value[::-1], GREY, atol=1e-15)
    assert image.samples == samples and image.size_units == pytest.approx((18.0, 12.0))


def test_vti_of_appended_raw_bytes_by_another_independent_writer(tmp_path):
    """Writer: pyevtk; its arrays are (x, y, z), appended raw with 64-bit sizes."""
    from pyevtk.hl import imageToVTK

    flat = np.ascontiguousarray(GREY[::-1].T[:, :, None])
    imageToVTK(str(tmp_path / "a"), spacing=(0.5, 0.5, 1.0), cellData={"density": flat, "heat": 1.0 - flat})
    image = read_image(tmp_path / "a.vti")
    np.testing.assert_array_equal(image.value[::-1], GREY)
    assert image.size_units == (18.0, 12.0)


BOMB = '<!DOCTYPE v [<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;&a;&a;"><!ENTITY c "&b;&b;&b;&b;&b;&b;">]>'


@pytest.mark.parametrize(
    ("content", "code"),
    [
        (vti(more=BOMB, data="&c;"), "image-xml-unsafe"),
        (vti(more='<!DOCTYPE v SYSTEM "file:///etc/hostname">'), "image-xml-unsafe"),
        (b"<VTKFile type='ImageData'>" + b"<a>" * 5000, "image-xml-unsafe"),
        (vti(extent="0 2000000000 0 2000000000 0 0"), "image-too-large"),
        (vti(extent="0 99999999999999999999 0 24 0 0"), "image-damaged"),
        (vti(extent="0 36 0 24 0"), "image-damaged"),
        (vti(extent="0 36 0 -5 0 0"), "image-damaged"),
        (vti(extent="0 nan 0 24 0 0"), "image-damaged"),
        (vti(extent="0 36 0 24 0 2"), "image-not-flat"),
        (vti(extent="0 36 0 25 0 0"), "image-damaged"),
        (vti()[:-400], "image-damaged"),
        (vti(appended=True)[:-400], "image-damaged"),
        (vti(data="AAAA"), "image-damaged"),
        (vti(data="!!!!" * 3000), "image-damaged"),
        (vti(root='compressor="vtkZLibDataCompressor"'), "image-damaged"),
        (vti(root='compressor="vtkLZ4DataCompressor"'), "image-vti-kind"),
        (vti(root='header_type="UInt16"'), "image-vti-kind"),
        (vti(image='Direction="0 1 0 -1 0 0 0 0 1"'), "image-vti-kind"),
        (vti().replace(b'Spacing="0.5', b'Spacing="-0.5'), "image-vti-kind"),
        (vti().replace(b'"ImageData" version', b'"PolyData" version'), "image-vti-kind"),
        (vti().replace(b"Float64", b"String"), "image-vti-kind"),
        (vti().replace(b"Piece Extent=\"0 36", b"Piece Extent=\"0 18"), "image-vti-kind"),
        (vti().replace(b"<CellData>", b"<CellData><DataArray type=\"Float64\" Name=\"heat\"/>").replace(b'"density"', b'"flow"'), "image-array-choice"),
        (b"<html></html>", "image-not-its-kind"),
        (b"\x00\x01\x02", "image-damaged"),
    ],
)  # fmt: skip
def test_vti_that_is_hostile_or_of_another_kind_is_refused(tmp_path, content, code):
    (tmp_path / "a.vti").write_bytes(content)
    refused(tmp_path / "a.vti", code)


def test_a_packed_part_larger_than_it_says_is_refused(tmp_path):
    packed = zlib.compress(bytes(50_000_000))
    n = COLUMNS * ROWS * 8
    head = struct.pack("<4I", 1, n, 0, len(packed))
    data = (base64.b64encode(head) + base64.b64encode(packed)).decode()
    (tmp_path / "a.vti").write_bytes(vti(root='compressor="vtkZLibDataCompressor"', data=data))
    refused(tmp_path / "a.vti", "image-damaged")
