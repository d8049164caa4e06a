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
