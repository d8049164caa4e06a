"""Mesh files that are wrong are refused, each with its own code, quickly, and without a path in the sentence."""

import os
import struct

import numpy as np
import pytest

from morph.core.errors import MorphError
from morph.read import mesh_fault
from morph.read.mesh_file import LengthUnit, read_mesh
from tests.read import bodies

pytestmark = pytest.mark.quick


def refused(tmp_path, name, content, code, unit=None):
    (tmp_path / name).write_bytes(content)
    with pytest.raises(MorphError) as caught:
        read_mesh(tmp_path / name, unit)
    assert caught.value.code == code, caught.value.sentence()
    assert name in caught.value.sentence() and str(tmp_path) not in caught.value.sentence()
    return caught.value


def model(resources=None, **more):
    return bodies.package(bodies.model_xml(resources or f'<object id="1">{bodies.mesh_xml()}</object>', **more))


BOX = bodies.stl_bytes()
PLY = bodies.ply_bytes()
NAN_BOX = np.where(bodies.BOX_POINTS == 40.0, np.nan, bodies.BOX_POINTS)
PLY_OF_WORDS = b"ply\nformat ascii 1.0\nelement face 1\nproperty list uchar int vertex_index\nend_header\nx\n"
HUGE_HEAD = b" " * 80 + struct.pack("<I", 2**32 - 1)
PENTAGRAM = np.array([[np.cos(k * 4 * np.pi / 5), np.sin(k * 4 * np.pi / 5), 0.0] for k in range(5)]) * 30.0
CASES = {
    "exe.exe": (BOX, "mesh-format-unknown"),
    "empty.stl": (b"", "mesh-file-empty"),
    "short.stl": (BOX[:60], "mesh-truncated"),
    "cut.stl": (BOX[:-7], "mesh-truncated"),
    "announces.stl": (HUGE_HEAD + bytes(500), "mesh-truncated"),
    "longer.stl": (BOX + b"12345", "mesh-not-its-format"),
    "picture.stl": (b"\x89PNG\r\n\x1a\n" + bytes(200), "mesh-not-its-format"),
    "none.stl": (bodies.stl_bytes(triangles=np.empty((0, 3), int)), "mesh-no-triangles"),
    "point.stl": (bodies.stl_bytes(triangles=np.zeros((4, 3), int)), "mesh-unit-doubtful"),
    "points.stl": (bodies.stl_bytes(triangles=[[0, 0, 7], [7, 7, 0]]), "mesh-no-triangles"),
    "nan.stl": (bodies.stl_bytes(NAN_BOX), "mesh-not-finite"),
    "inf.stl": (bodies.ascii_stl().replace(b" 40\n", b" 1e999\n"), "mesh-not-finite"),
    "cut-ascii.stl": (bodies.ascii_stl()[:-40], "mesh-truncated"),
    "word.stl": (bodies.ascii_stl().replace(b" 40\n", b" forty\n", 1), "mesh-damaged"),
    "four.stl": (bodies.ascii_stl().replace(b" endloop", b"  vertex 0 0 0\n endloop", 1), "mesh-damaged"),
    "inch.stl": (bodies.stl_bytes(bodies.BOX_POINTS / 25.4), "mesh-unit-doubtful"),
    "metre.obj": (bodies.obj_text(points=bodies.BOX_POINTS / 1000.0), "mesh-unit-doubtful"),
    "large.ply": (bodies.ply_bytes(points=bodies.BOX_POINTS * 1000.0), "mesh-too-large"),
    "word.obj": (b"v 0 0 zero\n", "mesh-damaged"),
    "short.obj": (b"v 0 0\n", "mesh-damaged"),
    "index.obj": (bodies.obj_text([[0, 1, 8]]), "mesh-damaged"),
    "zero.obj": (bodies.obj_text() + b"f 0 1 2\n", "mesh-damaged"),
    "two.obj": (bodies.obj_text() + b"f 1 2\n", "mesh-damaged"),
    "huge-index.obj": (bodies.obj_text() + b"f 1 2 " + b"9" * 40 + b"\n", "mesh-damaged"),
    "curve.obj": (b"cstype bezier\n", "mesh-not-its-format"),
    "text.obj": (b"Dear customer\n", "mesh-not-its-format"),
    "star.obj": (bodies.obj_text([[0, 1, 2, 3, 4]], PENTAGRAM), "mesh-polygon"),
    "far.obj": (bodies.obj_text(points=bodies.BOX_POINTS * 1e200), "mesh-too-large"),
    "signal.stl": (BOX[:96] + b"\x01\x00\xa0\x7f" + BOX[100:], "mesh-not-finite"),
    "none.obj": (b"v 0 0 0\n", "mesh-no-triangles"),
    "text.ply": (b"ply of cards", "mesh-not-its-format"),
    "cut.ply": (PLY[:-3], "mesh-truncated"),
    "many.ply": (PLY.replace(b"vertex 8", b"vertex 4000000000"), "mesh-truncated"),
    "faces.ply": (PLY.replace(b"face 6", b"face 60"), "mesh-truncated"),
    "line.ply": (PLY.replace(b"comment by hand", b"comments by hand"), "mesh-damaged"),
    "type.ply": (PLY.replace(b"property uchar red", b"property colour r"), "mesh-damaged"),
    "flat.ply": (PLY.replace(b"double z", b"double w"), "mesh-damaged"),
    "pair.ply": (bodies.ply_bytes(polygons=[[0, 1]]), "mesh-damaged"),
    "empty-rows.ply": (b"ply\nformat ascii 1.0\nelement vertex 999999999\nend_header\n", "mesh-damaged"),
    "words.ply": (PLY_OF_WORDS, "mesh-damaged"),
    "text.3mf": (b"PK but no archive", "mesh-not-its-format"),
    "cut.3mf": (bodies.package()[:-30], "mesh-not-its-format"),
    "other.3mf": (bodies.package("<a/>"), "mesh-not-its-format"),
    "none.3mf": (model("", build=""), "mesh-no-triangles"),
    "object.3mf": (model(build='<item objectid="9"/>'), "mesh-damaged"),
    "unit.3mf": (model(unit="ell"), "mesh-damaged"),
    "xml.3mf": (bodies.package("<model"), "mesh-damaged"),
    "number.3mf": (bodies.package(bodies.model_xml('<object id="1"><mesh><vertices><vertex x="a"/>')), "mesh-damaged"),
    "move.3mf": (model(build='<item objectid="1" transform="1 0 0"/>'), "mesh-damaged"),
    "loop.3mf": (model('<object id="1"><components><component objectid="1"/></components></object>'), "mesh-damaged"),
    "needs.3mf": (model(more='requiredextensions="p"'), "mesh-3mf-extension"),
    "part.3mf": (
        model(
            '<object id="1"><components><component objectid="1" p:path="/a.model"/></components></object>',
            more='xmlns:p="urn:p"',
        ),
        "mesh-3mf-extension",
    ),
    "text.step": (b"solid", "mesh-not-its-format"),
    "cut.step": (b"ISO-10303-21;\nHEADER;", "mesh-truncated"),
}


@pytest.mark.parametrize("name", CASES)
def test_each_fault_has_its_code(tmp_path, name):
    refused(tmp_path, name, *CASES[name])


def test_entity_bombs_and_outside_entities_are_refused(tmp_path):
    bomb = '<!DOCTYPE a [<!ENTITY b "' + "x" * 1000 + '"><!ENTITY c "' + "&b;" * 1000 + '">]>'
    outside = '<!DOCTYPE a SYSTEM "file:///etc/hostname">'
    for head in (bomb, outside):
        content = bodies.package(bodies.model_xml("&c;" if "ENTITY" in head else "", head=head))
        refused(tmp_path, "bomb.3mf", content, "mesh-xml-refused")


def test_zip_bombs_are_refused_by_what_they_would_unpack_to(tmp_path, monkeypatch):
    monkeypatch.setattr("morph.read.mesh_3mf.LARGEST_MODEL_BYTES", 1 << 20)
    content = bodies.package(bodies.model_xml(" " * (8 << 20)))
    assert len(content) < 20_000
    refused(tmp_path, "bomb.3mf", content, "mesh-unpacks-too-large")


def test_an_archive_that_points_before_its_start(tmp_path):
    content = bytearray(bodies.package())
    end = content.rfind(b"PK\x05\x06")
    struct.pack_into("<I", content, end + 16, struct.unpack_from("<I", content, end + 16)[0] + 5000)
    refused(tmp_path, "a.3mf", bytes(content), "mesh-damaged")
    for place in (6, 8):  # flags of the first entry: encrypted, and a method of packing nobody knows
        content = bytearray(bodies.package())
        centre = content.find(b"PK\x01\x02")
        content[centre + place + 2] |= 1
        content[place] |= 1
        refused(tmp_path, "a.3mf", bytes(content), "mesh-damaged")


def test_components_that_double_are_counted_before_they_are_made(tmp_path):
    rows = [f'<object id="1">{bodies.mesh_xml(triangles=[])}</object>']
    for k in range(2, 50):
        rows.append(
            f'<object id="{k}"><components>' + f'<component objectid="{k - 1}"/>' * 2 + "</components></object>"
        )
    content = model("".join(rows), build='<item objectid="49"/>')
    refused(tmp_path, "double.3mf", content, "mesh-unpacks-too-large")
    rows[0] = f'<object id="1">{bodies.mesh_xml()}</object>'
    content = model("".join(rows), build='<item objectid="49"/>')
    refused(tmp_path, "double.3mf", content, "mesh-too-many-triangles")


def test_the_number_of_triangles_is_refused_before_they_are_read(tmp_path, monkeypatch):
    monkeypatch.setattr(mesh_fault, "MOST_TRIANGLES", 11)
    for name, content in {
        "a.stl": BOX,
        "b.stl": bodies.ascii_stl(),
        "a.obj": bodies.obj_text(),
        "a.ply": PLY,
        "a.3mf": bodies.package(),
    }.items():
        found = refused(tmp_path, name, content, "mesh-too-many-triangles")
        assert "11 triangles" in found.expected


def test_a_file_too_large_is_not_read(tmp_path):
    path = tmp_path / "sparse.stl"
    with path.open("wb") as stream:
        stream.truncate(mesh_fault.LARGEST_FILE_BYTES + 1)
    with pytest.raises(MorphError) as caught:
        read_mesh(path)
    assert caught.value.code == "mesh-file-too-large"


def test_what_is_no_file(tmp_path):
    (tmp_path / "folder.stl").mkdir()
    os.mkfifo(tmp_path / "pipe.stl")
    for name, code in {
        "folder.stl": "mesh-is-folder",
        "absent.stl": "mesh-missing",
        "pipe.stl": "mesh-unreadable",
        "a" * 300 + ".stl": "mesh-unreadable",
    }.items():
        with pytest.raises(MorphError) as caught:
            read_mesh(tmp_path / name)
        assert caught.value.code == code


def test_units_that_contradict_each_other(tmp_path):
    refused(tmp_path, "a.3mf", bodies.package(), "mesh-unit-conflict", LengthUnit.INCH)


def test_a_doubtful_size_names_the_units_that_fit(tmp_path):
    found = refused(tmp_path, "inch.stl", bodies.stl_bytes(bodies.BOX_POINTS / 25.4), "mesh-unit-doubtful")
    assert 'unit = "inch" makes 40 mm' in found.do


@pytest.mark.parametrize("seed", range(40))
def test_flipped_and_cut_bytes_never_end_in_a_traceback(tmp_path, seed):
    rng = np.random.default_rng(seed)
    sources = {
        "a.stl": BOX,
        "b.stl": bodies.ascii_stl(),
        "a.obj": bodies.obj_text(),
        "a.ply": PLY,
        "a.3mf": bodies.package(),
        "b.ply": bodies.ply_bytes(">", bodies.BOX_TRIANGLES.tolist()),
    }
    for name, content in sources.items():
        spoiled = bytearray(content)
        for place in rng.integers(0, len(spoiled), rng.integers(1, 12)):
            spoiled[place] = rng.integers(0, 256)
        (tmp_path / name).write_bytes(bytes(spoiled[: rng.integers(1, len(spoiled) + 1)] if seed % 2 else spoiled))
        try:
            read_mesh(tmp_path / name)
        except MorphError as error:
            assert error.sentence()
