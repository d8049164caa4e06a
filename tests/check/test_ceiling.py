"""Ceilings and spans of simple channels against closed forms; the walls are trimesh bodies turned inside out."""

import numpy as np
import pytest
import trimesh

from morph.check.ceiling import check_ceiling, list_flat_patches, measure_ceiling
from morph.check.flat_patch import ceiling_angles_deg, find_flat
from morph.core.verdict import Outcome
from morph.geometry.mesh import Mesh
from tests.check.subjects import profile

pytestmark = pytest.mark.quick

UP = np.array([0.0, 0.0, 1.0])
SPAN_MM = 0.03
"""Borders are sampled every 0.1 mm and run through facets; a span is right to this."""


def channel(body: trimesh.Trimesh) -> Mesh:
    """The body's surface facing inwards, as a channel wall faces."""
    return Mesh(np.asarray(body.vertices), np.asarray(body.faces)[:, ::-1])


def bore(radius_mm: float, length_mm: float, tilt_deg: float = 0.0, sections: int = 48) -> trimesh.Trimesh:
    """A round bore along x without end faces, its +x end raised by `tilt_deg`: rings about 1 mm apart, facets turned by 1 degree.

    The diagonals go either way in a fixed disorder, as a simplified surface has them.
    """
    rings = int(length_mm) + 1
    angle = np.radians(1.0) + 2.0 * np.pi * np.arange(sections) / sections
    x = np.linspace(-0.5 * length_mm, 0.5 * length_mm, rings)
    ring = radius_mm * np.column_stack([np.cos(angle), np.sin(angle)])
    vertices = np.column_stack([np.repeat(x, sections), np.tile(ring, (rings, 1))])
    faces = []
    for i in range(rings - 1):
        for k in range(sections):
            a, b = i * sections + k, i * sections + (k + 1) % sections
            c, d = a + sections, b + sections
            faces += [[a, b, c], [b, d, c]] if (7 * i + 3 * k) % 5 < 2 else [[a, b, d], [a, d, c]]
    body = trimesh.Trimesh(vertices, np.array(faces), process=False)
    body.apply_transform(trimesh.transformations.rotation_matrix(-np.radians(tilt_deg), [0, 1, 0]))
    return body


@pytest.mark.parametrize("roof_deg", [30.0, 45.0, 60.0])
@pytest.mark.parametrize("radius_mm", [2.0, 5.0])
def test_cap_of_a_level_bore(radius_mm, roof_deg):
    found = measure_ceiling(channel(bore(radius_mm, 40.0)), UP, roof_deg)
    assert found.span_mm == pytest.approx(
        2.0 * radius_mm * np.sin(np.radians(roof_deg)), abs=SPAN_MM + 0.005 * radius_mm
    )
    assert found.area_mm2 == pytest.approx(2.0 * np.radians(roof_deg) * radius_mm * 40.0, rel=0.02)
    assert found.share == pytest.approx(2.0 * roof_deg / 360.0, rel=0.02)
    assert found.xyz_mm[1:] == pytest.approx((0.0, radius_mm), abs=0.05)


def test_patches_are_listed_with_their_area_and_place():
    """Two level bores side by side: two caps of area 2 a r L; upright there is none."""
    wide, narrow = bore(5.0, 40.0), bore(2.0, 30.0)
    narrow.apply_translation([0.0, 20.0, 0.0])
    walls = channel(trimesh.util.concatenate([narrow, wide]))
    first, second = list_flat_patches(walls, UP, 45.0)
    assert first.area_mm2 == pytest.approx(0.5 * np.pi * 5.0 * 40.0, rel=0.02)
    assert second.area_mm2 == pytest.approx(0.5 * np.pi * 2.0 * 30.0, rel=0.02)
    assert first.xyz_mm == pytest.approx((0.0, 0.0, 5.0), abs=1.0)
    assert second.xyz_mm == pytest.approx((0.0, 20.0, 2.0), abs=1.0)
    whole = measure_ceiling(walls, UP, 45.0)
    assert first.area_mm2 + second.area_mm2 == pytest.approx(whole.area_mm2, rel=1e-9)
    assert not set(first.triangles) & set(second.triangles)
    assert list_flat_patches(channel(bore(2.0, 30.0)), np.array([1.0, 0.0, 0.0]), 45.0) == ()


@pytest.mark.parametrize("tilt_deg", [15.0, 30.0, 50.0])
def test_cap_of_a_climbing_bore(tilt_deg):
    """The wall at angle p from its top has normal cos p times cos(tilt) against up: flat where cos p > cos 45 / cos tilt."""
    found = measure_ceiling(channel(bore(4.0, 60.0, tilt_deg)), UP, 45.0)
    cosine = np.cos(np.pi / 4) / np.cos(np.radians(tilt_deg))
    if cosine >= 1.0:
        assert found.span_mm == 0.0 and found.area_mm2 == 0.0
    else:
        assert found.span_mm == pytest.approx(8.0 * np.sin(np.arccos(cosine)), abs=2 * SPAN_MM)


def test_flat_roof_of_a_chamber():
    body = trimesh.creation.box((30.0, 8.0, 5.0)).subdivide().subdivide()
    found = measure_ceiling(channel(body), UP, 45.0)
    assert found.span_mm == pytest.approx(8.0, abs=SPAN_MM) and found.area_mm2 == pytest.approx(240.0, rel=1e-6)
    assert found.xyz_mm[2] == pytest.approx(2.5, abs=1e-6) and abs(found.xyz_mm[1]) < 0.05
    assert measure_ceiling(channel(body), np.array([0.0, 1.0, 0.0]), 45.0).span_mm == pytest.approx(5.0, abs=SPAN_MM)


@pytest.mark.parametrize("sides", [3, 6])
def test_circle_in_a_regular_roof(sides):
    """The largest circle in a regular polygon is its inscribed circle, 2 R cos(pi / n), though no vertex lies inside it."""
    found = measure_ceiling(channel(trimesh.creation.cylinder(9.0, 6.0, sections=sides)), UP, 45.0)
    assert found.span_mm == pytest.approx(18.0 * np.cos(np.pi / sides), abs=SPAN_MM)
    assert found.xyz_mm == pytest.approx((0.0, 0.0, 3.0), abs=0.05)


def test_end_of_an_upright_bore():
    """A ball end of radius 4 is flatter than 45 degrees inside a circle of radius 4 sin(45)."""
    body = trimesh.creation.capsule(20.0, 4.0, count=(48, 48))
    found = measure_ceiling(channel(body), UP, 45.0)
    assert found.span_mm == pytest.approx(8.0 * np.sin(np.pi / 4), abs=2 * SPAN_MM)


def test_a_pointed_roof_has_no_ceiling():
    """Two roof planes at 50 degrees meet in a crease: averaging their normals there would invent a level strip."""
    half, rise = 3.0, 3.0 * np.tan(np.radians(50.0))
    profile_yz = np.array([[-half, 0], [half, 0], [half, 4], [0, 4 + rise], [-half, 4]])
    body = trimesh.creation.extrude_polygon(trimesh.path.polygons.Polygon(profile_yz), 20.0)
    body.apply_transform(np.array([[0, 0, 1, 0], [1, 0, 0, 0], [0, 1, 0, 0], [0, 0, 0, 1.0]]))
    found = measure_ceiling(channel(body.subdivide()), UP, 45.0)
    assert found.area_mm2 == 0.0 and found.span_mm == 0.0 and found.xyz_mm is None


def test_stacked_channels_do_not_narrow_each_other():
    """Seen from above the two bores overlap; each keeps its own span."""
    low, high = bore(4.0, 40.0), bore(3.0, 40.0)
    high.apply_translation([0.0, 1.5, 10.0])
    both = trimesh.util.concatenate([low, high])
    assert measure_ceiling(channel(both), UP, 45.0).span_mm == pytest.approx(8 * np.sin(np.pi / 4), abs=0.05)


def test_angles_are_from_the_plate():
    normals = np.array([[0, 0, -1.0], [1, 0, 0], [0, 0, 1], [0, np.sin(0.5), -np.cos(0.5)]])
    assert ceiling_angles_deg(normals, UP) == pytest.approx([0.0, 90.0, 180.0, np.degrees(0.5)])


def test_a_mesh_without_a_plan_is_judged_too():
    wall = channel(bore(5.0, 40.0))
    area, span = check_ceiling(wall, profile(), UP)
    assert (area.code, span.code) == ("ceiling", "span") and span.outcome is Outcome.FAIL and span.branch_ids == ()
    assert area.outcome is Outcome.WATCH
    _, narrow = check_ceiling(channel(bore(3.0, 40.0)), profile(), UP)
    assert narrow.outcome is Outcome.PASS and narrow.value == pytest.approx(6 * np.sin(np.pi / 4), abs=0.05)


def test_nothing_is_flat_on_an_upright_wall():
    assert len(find_flat(channel(bore(3.0, 20.0)), np.array([1.0, 0, 0]), 45.0).triangle) == 0


@pytest.mark.parametrize("arm_mm", [8.0, 5.0])
def test_the_corner_of_a_coarse_roof_is_found(arm_mm):
    """An L of arms 8 mm and `arm_mm` wide in a handful of triangles: the widest place is its corner.

    The circle touches both outer sides and the inner corner: (a - r)^2 + (8 - r)^2 = r^2, r = a + 8 - sqrt(16 a).
    """
    a = arm_mm
    outline = trimesh.path.polygons.Polygon([(0, 0), (30, 0), (30, 8), (a, 8), (a, 30), (0, 30)])
    found = measure_ceiling(channel(trimesh.creation.extrude_polygon(outline, 4.0)), UP, 45.0)
    assert found.span_mm == pytest.approx(2.0 * (a + 8.0 - np.sqrt(16.0 * a)), abs=SPAN_MM)
    assert found.area_mm2 == pytest.approx(30 * 8 + 22 * a)
