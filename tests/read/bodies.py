"""Small bodies and hostile files for the tests of mesh readers, written by hand or by outside libraries."""

from __future__ import annotations

import io
import struct
import zipfile

import numpy as np

CORE = "http://schemas.microsoft.com/3dmanufacturing/core/2015/02"
BOX_POINTS = np.array([[x, y, z] for x in (0.0, 20.0) for y in (0.0, 30.0) for z in (0.0, 40.0)])
"""Corners of a box of 20 x 30 x 40 mm; volume 24 000 mm3, area 5200 mm2."""

BOX_TRIANGLES = np.array(
    [
        *([0, 1, 3], [0, 3, 2]),  # x = 0
        *([4, 6, 7], [4, 7, 5]),  # x = 20
        *([0, 4, 5], [0, 5, 1]),  # y = 0
        *([2, 3, 7], [2, 7, 6]),  # y = 30
        *([0, 2, 6], [0, 6, 4]),  # z = 0
        *([1, 5, 7], [1, 7, 3]),  # z = 40
    ]
)
BOX_QUADS = [[0, 1, 3, 2], [4, 6, 7, 5], [0, 4, 5, 1], [2, 3, 7, 6], [0, 2, 6, 4], [1, 5, 7, 3]]


def stl_bytes(points=BOX_POINTS, triangles=BOX_TRIANGLES, head=b"", announced=None):
    """A binary STL by the usual layout: 80 bytes, count, 12 floats and 2 bytes for each triangle."""
    corners = np.asarray(points)[np.asarray(triangles)]
    body = b"".join(struct.pack("<12fH", 0, 0, 0, *corner.ravel(), 0) for corner in corners)
    return head.ljust(80, b" ") + struct.pack("<I", len(corners) if announced is None else announced) + body


def ascii_stl(points=BOX_POINTS, triangles=BOX_TRIANGLES):
    lines = ["solid box"]
    for corner in np.asarray(points)[np.asarray(triangles)]:
        lines += ["facet normal 0 0 0", " outer loop", *(f"  vertex {x:.9g} {y:.9g} {z:.9g}" for x, y, z in corner)]
        lines += [" endloop", "endfacet"]
    return ("\n".join([*lines, "endsolid box"]) + "\n").encode()


def obj_text(polygons=BOX_QUADS, points=BOX_POINTS):
    rows = [f"v {x:.9g} {y:.9g} {z:.9g}" for x, y, z in points]
    rows += ["f " + " ".join(f"{c + 1}/{c + 1}" for c in polygon) for polygon in polygons]
    return ("# a box\no box\n" + "\n".join(rows) + "\n").encode()


def ply_bytes(order="<", polygons=BOX_QUADS, points=BOX_POINTS):
    """Binary PLY with a colour per vertex, which a reader passes over."""
    word = {"<": "binary_little_endian", ">": "binary_big_endian"}[order]
    head = (
        f"ply\nformat {word} 1.0\ncomment by hand\nelement vertex {len(points)}\nproperty double x\nproperty double y\n"
        f"property double z\nproperty uchar red\nelement face {len(polygons)}\n"
        "property list uchar int vertex_indices\nend_header\n"
    ).encode()
    body = b"".join(struct.pack(order + "3dB", *point, 7) for point in points)
    return head + body + b"".join(struct.pack(f"{order}B{len(p)}i", len(p), *p) for p in polygons)


def mesh_xml(points=BOX_POINTS, triangles=BOX_TRIANGLES):
    rows = "".join(f'<vertex x="{x}" y="{y}" z="{z}"/>' for x, y, z in points)
    faces = "".join(f'<triangle v1="{a}" v2="{b}" v3="{c}"/>' for a, b, c in triangles)
    return f"<mesh><vertices>{rows}</vertices><triangles>{faces}</triangles></mesh>"


def model_xml(resources, build='<item objectid="1"/>', unit="millimeter", more="", head=""):
    return (
        f'<?xml version="1.0" encoding="UTF-8"?>{head}<model unit="{unit}" xmlns="{CORE}" {more}>'
        f"<resources>{resources}</resources><build>{build}</build></model>"
    )


def package(model=None, part="3D/3dmodel.model", extra=(), compression=zipfile.ZIP_DEFLATED):
    """A 3MF package around a model, without relationships when its part stands at the usual place."""
    if model is None:
        model = model_xml(f'<object id="1" type="model">{mesh_xml()}</object>')
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", compression) as archive:
        if part != "3D/3dmodel.model":
            archive.writestr(
                "_rels/.rels",
                '<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships"><Relationship '
                f'Target="/{part}" Id="a" Type="http://schemas.microsoft.com/3dmanufacturing/2013/01/3dmodel"/>'
                "</Relationships>",
            )
        archive.writestr(part, model)
        for name, content in extra:
            archive.writestr(name, content)
    return stream.getvalue()
