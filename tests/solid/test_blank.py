"""The blank's mesh: exact volumes, stock on the right faces, facets within their sagitta."""

import numpy as np
import pytest

from morph.core.errors import GeometryError
from morph.core.tolerance import FACET_MM
from morph.geometry.mesh import measure_condition, mesh_volume_mm3
from morph.solid.blank import n_sides, same_area_radius_mm
from morph.solid.cut import blank_mesh
from tests.solid import plans

pytestmark = pytest.mark.quick


def with_carrier(radius_mm, metal_inside, box_low, box_high):
    """A box cut by a cylinder about z, as a job with kind box and a cylinder carrier gives it."""
    import dataclasses

    from morph.body.face import CylinderFace, FaceRole

    box = plans.box_blank(low=box_low, high=box_high, part=())
    face = CylinderFace("carrier", FaceRole.PART, 0.0, radius_mm, metal_inside)
    radii = {"outer_radius_mm": radius_mm} if metal_inside else {"inner_radius_mm": radius_mm}
    return dataclasses.replace(box, faces=(face, *box.faces), **radii)


def test_box_finished_and_printed():
    blank = plans.box_blank(stock={"-z": 2.0, "+x": 1.0})
    finished, printed = blank_mesh(blank, printed=False), blank_mesh(blank, printed=True)
    assert mesh_volume_mm3(finished) == pytest.approx(60 * 40 * 30, rel=1e-12)
    assert mesh_volume_mm3(printed) == pytest.approx(61 * 40 * 32, rel=1e-12)
    assert printed.vertices_mm[:, 2].min() == -2.0 and printed.vertices_mm[:, 0].max() == 61.0
    assert len(finished.triangles) == 12


@pytest.mark.parametrize("inner", [None, 11.0])
def test_cylinder_volume_is_that_of_the_round_body(inner):
    blank = plans.cylinder_blank(
        radius_mm=30.0, z_mm=(-5.0, 80.0), inner_radius_mm=inner, stock={"foot": 1.5, "bore": 0.5}
    )
    hole = 0.0 if inner is None else inner
    finished, printed = blank_mesh(blank, printed=False), blank_mesh(blank, printed=True)
    assert mesh_volume_mm3(finished) == pytest.approx(np.pi * (30**2 - hole**2) * 85, rel=1e-6)
    less = 0.0 if inner is None else 10.5
    assert mesh_volume_mm3(printed) == pytest.approx(np.pi * (30**2 - less**2) * 86.5, rel=1e-6)
    condition = measure_condition(printed)
    assert condition.closed and condition.genus == (0 if inner is None else 1)


@pytest.mark.parametrize("radius", [0.5, 5.0, 30.0, 200.0])
def test_facets_stay_within_their_sagitta(radius):
    sides = n_sides(radius)
    corner = same_area_radius_mm(radius, sides)
    middle = corner * np.cos(np.pi / sides)
    assert corner - radius <= FACET_MM and radius - middle <= FACET_MM
    assert 0.5 * sides * corner**2 * np.sin(2 * np.pi / sides) == pytest.approx(np.pi * radius**2, rel=1e-12)
    assert sides % 4 == 0


def test_a_box_cut_by_a_core_and_by_a_cavity():
    core = with_carrier(20.0, True, (-30.0, -30.0, 0.0), (30.0, 30.0, 50.0))
    assert mesh_volume_mm3(blank_mesh(core, printed=True)) == pytest.approx(np.pi * 400 * 50, rel=1e-6)
    cavity = with_carrier(20.0, False, (-30.0, -30.0, 0.0), (30.0, 30.0, 50.0))
    mesh = blank_mesh(cavity, printed=True)
    assert mesh_volume_mm3(mesh) == pytest.approx((3600 - np.pi * 400) * 50, rel=1e-6)
    assert measure_condition(mesh).genus == 1
    half = with_carrier(20.0, True, (0.0, -30.0, 0.0), (30.0, 30.0, 50.0))
    assert mesh_volume_mm3(blank_mesh(half, printed=True)) == pytest.approx(np.pi * 200 * 50, rel=1e-6)


def test_an_oblique_plane_cuts_its_side_away():
    import dataclasses

    from morph.body.face import FaceRole, PlaneFace

    box = plans.box_blank(low=(0, 0, 0), high=(10, 10, 10))
    normal = np.array([1.0, 1.0, 0.0]) / np.sqrt(2)
    bevel = PlaneFace("bevel", FaceRole.OUTER, 0.0, np.array([10.0, 5.0, 5.0]), normal)
    blank = dataclasses.replace(box, faces=(*box.faces, bevel))
    assert mesh_volume_mm3(blank_mesh(blank, printed=False)) == pytest.approx(1000 - 0.5 * 5 * 5 * 10, rel=1e-6)


def test_faces_without_metal_are_refused():
    with pytest.raises(GeometryError) as caught:
        blank_mesh(with_carrier(5.0, True, (20.0, 20.0, 0.0), (30.0, 30.0, 10.0)), printed=False)
    assert caught.value.code == "solid-empty"


def cone_blank(half_angle_deg, z_mm, thickness_mm=None, stock=None):
    """A frustum of radius 30 at z = 0, solid or a shell of a thickness square to its face."""
    import dataclasses

    from morph.body.face import ConeFace, FaceRole
    from morph.geometry.cone import Cone

    base = plans.cylinder_blank(z_mm=z_mm, stock=stock)
    cone = Cone(30.0, np.radians(half_angle_deg))
    faces = [ConeFace("carrier", FaceRole.PART, 0.0, cone, True), *base.faces[1:]]
    if thickness_mm is not None:
        bore = (stock or {}).get("bore", 0.0)
        faces.append(ConeFace("bore", FaceRole.OUTER, bore, cone.offset(-thickness_mm), False))
    return dataclasses.replace(base, faces=tuple(faces), outer_radius_mm=None)


def frustum(low, high, height):
    """Volume of a frustum of a cone (handbook of geometry)."""
    return np.pi * height * (low * low + low * high + high * high) / 3


@pytest.mark.parametrize("angle", [12.0, -12.0, 60.0])
def test_frustum_volume_is_that_of_the_round_body(angle):
    z = (-10.0, 25.0) if angle != 60.0 else (-10.0, 60.0)
    slope = np.tan(np.radians(angle))
    ends = [30.0 + slope * at for at in z]
    mesh = blank_mesh(cone_blank(angle, z), printed=False)
    assert mesh_volume_mm3(mesh) == pytest.approx(frustum(*ends, z[1] - z[0]), rel=2e-6)
    assert measure_condition(mesh).closed and measure_condition(mesh).genus == 0
    # Every vertex of the round face lies within the facet rule, square to it.
    at = mesh.vertices_mm
    away = (np.hypot(at[:, 0], at[:, 1]) - 30.0 - slope * at[:, 2]) * np.cos(np.radians(angle))
    assert away.max() <= FACET_MM and away.min() > -1e-4


def test_conical_shell_and_its_stock():
    blank = cone_blank(12.0, (-10.0, 25.0), 8.0, {"foot": 2.0, "bore": 0.5})
    slope, cosine = np.tan(np.radians(12.0)), np.cos(np.radians(12.0))

    def shell(low, high, thickness):
        outer = [30.0 + slope * z for z in (low, high)]
        inner = [r - thickness / cosine for r in outer]
        return frustum(*outer, high - low) - frustum(*inner, high - low)

    finished, printed = blank_mesh(blank, printed=False), blank_mesh(blank, printed=True)
    assert mesh_volume_mm3(finished) == pytest.approx(shell(-10.0, 25.0, 8.0), rel=4e-6)
    assert mesh_volume_mm3(printed) == pytest.approx(shell(-12.0, 25.0, 8.5), rel=4e-6)
    assert measure_condition(printed).genus == 1


def test_a_conical_bore_may_end_in_its_apex():
    # A bore of apex angle 2 x 45 degrees, radius 15 at the top: its volume is that of a cone 15 mm high.
    blank = cone_blank(45.0, (-20.0, 5.0), 20.0 * np.cos(np.radians(45.0)))
    outer = frustum(10.0, 35.0, 25.0)
    mesh = blank_mesh(blank, printed=False)
    assert mesh_volume_mm3(mesh) == pytest.approx(outer - np.pi * 15**3 / 3, rel=4e-6)
    assert measure_condition(mesh).genus == 0
