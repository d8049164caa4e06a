"""Overhangs of the skin against closed forms: a box, a lying cylinder, a part face on the plate, stock."""

import numpy as np
import pytest

from morph.body.face import FaceRole
from morph.check.overhang import check_overhang, face_of_triangles, measure_overhang
from morph.core.verdict import Outcome
from morph.geometry.mesh import Mesh
from morph.solid.result import Insert
from tests.check.subjects import profile
from tests.solid.plans import box_blank, cylinder_blank

pytestmark = pytest.mark.quick

UP = np.array([0.0, 0.0, 1.0])
X = np.array([1.0, 0.0, 0.0])


def box_insert(low=(0, 0, 0), high=(60, 40, 30), inner=None) -> Insert:
    """A box; `inner` is a second box of channel wall facing inwards."""
    import trimesh

    body = trimesh.creation.box(bounds=(low, high))
    parts = [(body.vertices, body.faces, 0)]
    if inner is not None:
        hollow = trimesh.creation.box(bounds=inner)
        parts.append((hollow.vertices, hollow.faces[:, ::-1], 1))
    shift = np.cumsum([0, *(len(v) for v, _, _ in parts)])
    mesh = Mesh(np.vstack([p[0] for p in parts]), np.vstack([p[1] + s for p, s in zip(parts, shift, strict=False)]))
    label = np.concatenate([np.full(len(p[1]), p[2]) for p in parts])
    return Insert(mesh, label, 1.0, 0, ())


def cylinder_insert(radius_mm=30.0, z_mm=(0.0, 80.0), sections=720) -> Insert:
    import trimesh

    body = trimesh.creation.cylinder(radius_mm, z_mm[1] - z_mm[0], sections=sections)
    body.apply_translation([0, 0, 0.5 * sum(z_mm)])
    mesh = Mesh(np.asarray(body.vertices), np.asarray(body.faces))
    return Insert(mesh, np.zeros(len(mesh.triangles), dtype=np.int64), 1.0, 0, ())


def test_a_box_on_its_foot_hangs_nowhere_whatever_its_channels_do():
    row = check_overhang(box_insert(inner=((10, 10, 10), (50, 30, 20))), box_blank(), profile(), UP)[0]
    assert row.outcome is Outcome.PASS and row.value == 0.0 and row.hint == "" and row.xyz_mm is None


def test_a_part_face_on_the_plate_is_a_watch():
    row = check_overhang(box_insert(), box_blank(), profile(), -UP)[0]
    assert row.outcome is Outcome.WATCH and "+z lies on the plate" in row.text and row.value == 0.0


def test_a_tilted_box_hangs_on_its_foot_side():
    """Tilted by 30 degrees about y the foot looks down at 30 degrees, the -x side at 60: 60 x 40 mm hang."""
    tilt = np.radians(30.0)
    direction = np.array([np.sin(tilt), 0.0, np.cos(tilt)])
    found = measure_overhang(box_insert(), box_blank(), direction, 45.0)
    assert found.area_mm2 == pytest.approx(2400.0) and [f[0] for f in found.faces] == ["-z"]
    steep = measure_overhang(box_insert(), box_blank(), direction, 62.0)
    assert [f[0] for f in steep.faces] == ["-z", "-x"] and steep.area_mm2 == pytest.approx(2400.0 + 1200.0)
    assert measure_overhang(box_insert(), box_blank(), direction, 29.0).faces == ()


@pytest.mark.parametrize("roof_deg", [30.0, 45.0, 60.0])
def test_a_lying_cylinder_hangs_over_its_lower_arc(roof_deg):
    """Skin flatter than the roof angle a spans the arc from -a to a; half a degree is left at each end and each side below."""
    blank = cylinder_blank()
    found = measure_overhang(cylinder_insert(), blank, X, roof_deg)
    name, role, area = found.faces[0]
    assert len(found.faces) == 1 and area == pytest.approx(np.radians(2.0 * roof_deg - 2.0) * 30.0 * 80.0, rel=0.01)
    assert role is next(f.role for f in blank.faces if f.name == name)
    row = check_overhang(cylinder_insert(), blank, profile(), X)[0]
    assert row.outcome is Outcome.WATCH and row.xyz_mm[0] < 0.0
    assert ("rough" in row.text) == (role is FaceRole.PART)


def test_printed_skin_belongs_to_the_face_under_its_stock():
    blank = box_blank(stock={"-x": 2.0, "-z": 1.0})
    insert = box_insert((-2, 0, -1), (60, 40, 30))
    names = [blank.faces[i].name for i in face_of_triangles(insert.mesh, blank)]
    normals = {"-x": (0, -1), "+x": (0, 1), "-y": (1, -1), "+y": (1, 1), "-z": (2, -1), "+z": (2, 1)}
    corner = insert.mesh.vertices_mm[insert.mesh.triangles]
    normal = np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0])
    for name, n in zip(names, normal, strict=True):
        axis, sign = normals[name]
        assert np.sign(n[axis]) == sign and np.abs(n).argmax() == axis
