"""Reading density images: what is accepted comes out exactly, everything else is refused with its own code."""

import struct
import zlib

import numpy as np
import pytest
from PIL import Image

from morph.core.errors import InputError
from morph.read.image import read_image

pytestmark = pytest.mark.quick

ROWS, COLUMNS = 9, 12
RAMP = np.linspace(0.0, 1.0, ROWS * COLUMNS).reshape(ROWS, COLUMNS)


def chunk(kind, data):
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


def png(columns, rows, bits, colour, body, *extra):
    """Returns the bytes of a PNG written by hand from ISO/IEC 15948 (PNG), clause 11."""
    header = chunk(b"IHDR", struct.pack(">IIBBBBB", columns, rows, bits, colour, 0, 0, 0))
    return b"\x89PNG\r\n\x1a\n" + header + b"".join(extra) + chunk(b"IDAT", zlib.compress(body)) + chunk(b"IEND", b"")


def refused(path, code):
    with pytest.raises(InputError) as caught:
        read_image(path)
    assert caught.value.code == code
    assert path.name in caught.value.sentence()
    assert str(path.parent) not in caught.value.sentence()
    return caught.value


@pytest.mark.parametrize("dtype", ["<f8", ">f8", "<f4", "<f2", "longdouble"])
def test_npy_of_any_real_type_comes_out_as_it_lies(tmp_path, dtype):
    np.save(tmp_path / "a.npy", RAMP.astype(dtype))
    image = read_image(tmp_path / "a.npy")
    assert image.value.dtype == np.float64 and not image.value.flags.writeable
    np.testing.assert_array_equal(image.value, RAMP.astype(dtype).astype(np.float64))
    assert image.source == "a.npy" and len(image.content) == 16


def test_npy_in_column_order_and_bool(tmp_path):
    np.save(tmp_path / "f.npy", np.asfortranarray(RAMP))
    np.testing.assert_array_equal(read_image(tmp_path / "f.npy").value, RAMP)
    np.save(tmp_path / "b.npy", RAMP > 0.4)
    np.testing.assert_array_equal(read_image(tmp_path / "b.npy").value, (RAMP > 0.4).astype(float))


def test_values_within_the_slack_are_clipped(tmp_path):
    np.save(tmp_path / "a.npy", RAMP * (1 + 1e-6) - 4e-7)
    value = read_image(tmp_path / "a.npy").value
    assert value.min() == 0.0 and value.max() == 1.0


def test_png_grey_8_and_16_bit_by_another_writer(tmp_path):
    grey8 = np.round(RAMP * 255).astype(np.uint8)
    Image.fromarray(grey8).save(tmp_path / "a.png")
    np.testing.assert_allclose(read_image(tmp_path / "a.png").value, grey8 / 255, atol=1e-15)
    grey16 = np.round(RAMP * 65535).astype(np.uint16)
    Image.fromarray(grey16).save(tmp_path / "b.png")
    np.testing.assert_allclose(read_image(tmp_path / "b.png").value, grey16 / 65535, atol=1e-15)


def test_png_written_by_hand_has_its_first_row_first(tmp_path):
    values = np.arange(64, dtype=np.uint16).reshape(8, 8) * 1000
    body = b"".join(b"\0" + row.astype(">u2").tobytes() for row in values)
    (tmp_path / "a.png").write_bytes(png(8, 8, 16, 0, body))
    np.testing.assert_allclose(read_image(tmp_path / "a.png").value, values / 65535, atol=1e-15)


def test_png_ignores_a_gamma_note(tmp_path):
    body = b"".join(b"\0" + bytes(range(r, r + 8)) for r in range(8))
    (tmp_path / "a.png").write_bytes(png(8, 8, 8, 0, body, chunk(b"gAMA", struct.pack(">I", 45455))))
    assert read_image(tmp_path / "a.png").value[0, 1] == 1 / 255


@pytest.mark.parametrize("mode", ["RGB", "RGBA", "LA"])
def test_png_with_equal_channels_and_full_alpha_is_grey(tmp_path, mode):
    grey = np.round(RAMP * 255).astype(np.uint8)
    Image.fromarray(grey).convert(mode).save(tmp_path / "a.png")
    np.testing.assert_allclose(read_image(tmp_path / "a.png").value, grey / 255, atol=1e-15)


@pytest.mark.parametrize(
    ("change", "code"),
    [
        (lambda a: a.astype(object), "image-pickled"),
        (lambda a: a.astype(complex), "image-not-numbers"),
        (lambda a: a.astype("U8"), "image-not-numbers"),
        (lambda a: np.zeros(a.shape, dtype=[("rho", float), ("t", float)]), "image-not-numbers"),
        (lambda a: a.astype("M8[s]"), "image-not-numbers"),
        (lambda a: (a * 255).astype(np.uint8), "image-integers"),
        (lambda a: (a * 65535).astype(np.int32), "image-integers"),
        (lambda a: a.ravel(), "image-not-flat"),
        (lambda a: a[None], "image-not-flat"),
        (lambda a: a[:7], "image-too-small"),
        (lambda a: np.empty((0, 12)), "image-too-small"),
        (lambda a: np.zeros((8, 8193), dtype=bool), "image-too-large"),
        (lambda a: np.where(a > 0.9, np.nan, a), "image-not-finite"),
        (lambda a: np.where(a > 0.9, np.inf, a), "image-not-finite"),
        (lambda a: a * 255, "image-out-of-range"),
        (lambda a: a - 0.01, "image-out-of-range"),
        (lambda a: a * (1 + 3e-6), "image-out-of-range"),
        (lambda a: np.full(a.shape, 0.7), "image-constant"),
    ],
)
def test_npy_that_is_no_density_is_refused(tmp_path, change, code):
    np.save(tmp_path / "a.npy", change(RAMP), allow_pickle=True)
    refused(tmp_path / "a.npy", code)


def test_integers_are_refused_with_advice(tmp_path):
    np.save(tmp_path / "a.npy", (RAMP * 255).astype(np.uint8))
    assert "255" in refused(tmp_path / "a.npy", "image-integers").do


def test_a_header_that_claims_terabytes_is_refused_before_memory_is_taken(tmp_path):
    text = "{'descr': '<f8', 'fortran_order': False, 'shape': (4000000, 4000000), }"
    text = text.ljust(117) + "\n"
    (tmp_path / "a.npy").write_bytes(b"\x93NUMPY\x01\x00" + struct.pack("<H", len(text)) + text.encode() + b"\0" * 64)
    refused(tmp_path / "a.npy", "image-too-large")
    text = text.replace("4000000", "8000   ")
    (tmp_path / "b.npy").write_bytes(b"\x93NUMPY\x01\x00" + struct.pack("<H", len(text)) + text.encode() + b"\0" * 64)
    refused(tmp_path / "b.npy", "image-damaged")


@pytest.mark.parametrize("cut", [5, 9, 40, -8])
def test_a_truncated_npy_is_refused(tmp_path, cut):
    np.save(tmp_path / "a.npy", RAMP)
    content = (tmp_path / "a.npy").read_bytes()
    (tmp_path / "a.npy").write_bytes(content[:cut])
    refused(tmp_path / "a.npy", "image-not-its-kind" if cut == 5 else "image-damaged")


def test_bytes_after_the_values_are_refused(tmp_path):
    np.save(tmp_path / "a.npy", RAMP)
    with (tmp_path / "a.npy").open("ab") as stream:
        stream.write(b"x")
    refused(tmp_path / "a.npy", "image-damaged")


def test_a_header_that_is_code_is_not_run(tmp_path):
    text = "{'descr': __import__('os').abort(), 'fortran_order': False, 'shape': (9, 9), }".ljust(117) + "\n"
    (tmp_path / "a.npy").write_bytes(b"\x93NUMPY\x01\x00" + struct.pack("<H", len(text)) + text.encode())
    refused(tmp_path / "a.npy", "image-damaged")


def test_png_bomb_is_refused_from_its_header(tmp_path):
    (tmp_path / "a.png").write_bytes(png(60000, 60000, 8, 0, b"\0" * 1000))
    refused(tmp_path / "a.png", "image-too-large")


@pytest.mark.parametrize("cut", [20, 60, -30])
def test_a_truncated_png_is_refused(tmp_path, cut):
    Image.fromarray(np.round(RAMP * 255).astype(np.uint8)).save(tmp_path / "a.png")
    content = (tmp_path / "a.png").read_bytes()
    (tmp_path / "a.png").write_bytes(content[:cut])
    refused(tmp_path / "a.png", "image-damaged")


def test_a_png_with_a_broken_checksum_is_refused(tmp_path):
    Image.fromarray(np.round(RAMP * 255).astype(np.uint8)).save(tmp_path / "a.png")
    content = bytearray((tmp_path / "a.png").read_bytes())
    content[29] ^= 0xFF  # the header's checksum
    (tmp_path / "a.png").write_bytes(bytes(content))
    refused(tmp_path / "a.png", "image-damaged")


def test_png_of_a_kind_that_loses_something_is_refused(tmp_path):
    Image.fromarray(np.round(RAMP * 255).astype(np.uint8)).convert("P").save(tmp_path / "p.png")
    refused(tmp_path / "p.png", "image-png-kind")
    Image.fromarray(RAMP > 0.5).save(tmp_path / "1.png")
    refused(tmp_path / "1.png", "image-png-kind")
    body = b"".join(b"\0" + bytes(8 * 6) for _ in range(8))
    (tmp_path / "rgb16.png").write_bytes(png(8, 8, 16, 2, body))
    refused(tmp_path / "rgb16.png", "image-png-kind")
    (tmp_path / "odd.png").write_bytes(png(8, 8, 8, 5, body))
    refused(tmp_path / "odd.png", "image-damaged")


def test_coloured_and_transparent_png_are_refused(tmp_path):
    grey = np.round(RAMP * 255).astype(np.uint8)
    colour = np.stack([grey, grey, np.roll(grey, 1)], axis=-1)
    Image.fromarray(colour).save(tmp_path / "c.png")
    refused(tmp_path / "c.png", "image-coloured")
    clear = np.stack([grey, grey, grey, np.where(grey > 200, 0, 255).astype(np.uint8)], axis=-1)
    Image.fromarray(clear).save(tmp_path / "t.png")
    refused(tmp_path / "t.png", "image-transparent")
    Image.fromarray(grey).save(tmp_path / "k.png", transparency=0)
    refused(tmp_path / "k.png", "image-transparent")


@pytest.mark.parametrize("name", ["a.npz", "a.tif", "a.tiff", "a.vti", "A.TIF", "a.dxf", "a.svg"])
def test_other_bytes_than_the_name_says_are_refused_in_every_format(tmp_path, name):
    (tmp_path / name).write_bytes(b"anything")
    with pytest.raises(InputError) as caught:
        read_image(tmp_path / name, (10.0, 10.0))
    assert caught.value.code in {"image-not-its-kind", "image-damaged"}


@pytest.mark.parametrize("name", ["a.jpg", "a.bmp", "a", "a.npy.gz"])
def test_unknown_formats_are_refused(tmp_path, name):
    (tmp_path / name).write_bytes(b"anything")
    refused(tmp_path / name, "image-format-unknown")


def test_files_that_cannot_be_read_are_refused(tmp_path):
    refused(tmp_path / "none.npy", "image-missing")
    (tmp_path / "folder.npy").mkdir()
    refused(tmp_path / "folder.npy", "image-is-folder")
    (tmp_path / "empty.png").touch()
    refused(tmp_path / "empty.png", "image-empty")
    import os

    os.mkfifo(tmp_path / "pipe.npy")
    refused(tmp_path / "pipe.npy", "image-unreadable")


def test_content_that_is_not_what_the_name_says_is_refused(tmp_path):
    (tmp_path / "a.npy").write_bytes(b"PK\x03\x04 a zip")
    refused(tmp_path / "a.npy", "image-not-its-kind")
    (tmp_path / "a.png").write_bytes(b"\xff\xd8\xff a jpeg")
    refused(tmp_path / "a.png", "image-not-its-kind")


def test_an_oversized_file_is_refused_by_its_size(tmp_path, monkeypatch):
    monkeypatch.setattr("morph.read.image.LARGEST_FILE_BYTES", 200)
    np.save(tmp_path / "a.npy", RAMP)
    refused(tmp_path / "a.npy", "image-too-large")


def test_a_file_the_system_refuses_is_told(tmp_path, monkeypatch):
    np.save(tmp_path / "a.npy", RAMP)

    def deny(self):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("pathlib.Path.read_bytes", deny)
    refused(tmp_path / "a.npy", "image-unreadable")
