"""Cuts against closed forms and trimesh, and the worst wall against a wall worked out by hand."""

import re

import numpy as np
import pytest
import trimesh

from morph.core.verdict import Outcome, Verdict
from morph.geometry.mesh import Mesh
from morph.report.cut import Plane, cut_mesh
from morph.report.section import make_section, section_plane, wall_verdicts
from morph.report.section_view import draw_section

pytestmark = pytest.mark.quick

AXES = (np.array([1.0, 0, 0]), np.array([0, 1.0, 0]))


def area(loops):
    """Signed area by the shoelace formula, holes subtracted by their turning sense."""
    total = 0.0
    for loop in loops:
        x, y = loop.points_mm.T
        total += 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))
    return abs(total)


def as_mesh(part):
    return Mesh(part.vertices, part.faces)


@pytest.mark.parametrize("height", [-0.5 + 1e-9, 0.0, 0.25, 0.5])
def test_cut_of_a_cube_is_its_square_even_through_its_vertices(height):
    cube = as_mesh(trimesh.creation.box((1, 1, 1)))
    loops = cut_mesh(cube, np.zeros(12, int), Plane([0, 0, height], *AXES))
    assert len(loops) == 1 and area(loops) == pytest.approx(1.0)


def test_cut_of_a_torus_through_its_axis_is_two_circles():
    ring = as_mesh(trimesh.creation.torus(10.0, 2.0, major_sections=256, minor_sections=128))
    loops = cut_mesh(ring, np.zeros(len(ring.triangles), int), Plane([0, 0.01, 0], [1, 0, 0], [0, 0, 1]))
    assert len(loops) == 2
    for loop in loops:
        assert np.hypot(np.abs(loop.points_mm[:, 0]) - 10.0, loop.points_mm[:, 1]) == pytest.approx(2.0, abs=2e-3)


def test_cut_agrees_with_trimesh(records):
    mesh = records.insert.mesh
    part = trimesh.Trimesh(mesh.vertices_mm, mesh.triangles, process=False)
    rng = np.random.default_rng(3)
    for _ in range(5):
        normal = rng.normal(size=3)
        normal /= np.linalg.norm(normal)
        across = np.cross(normal, [0.3, 0.5, 0.8])
        across /= np.linalg.norm(across)
        plane = Plane(rng.normal(size=3) * 5, across, np.cross(normal, across))
        length = sum(
            float(np.linalg.norm(np.roll(loop.points_mm, -1, 0) - loop.points_mm, axis=1).sum())
            for loop in cut_mesh(mesh, records.insert.channel_triangle, plane)
        )
        other = part.section(plane_origin=plane.origin_mm, plane_normal=plane.normal)
        assert length == pytest.approx(other.length, rel=1e-7)


def test_labels_follow_the_triangles(records):
    plane = Plane([0, 0, 20.0], *AXES)
    for loop in cut_mesh(records.insert.mesh, records.insert.channel_triangle, plane):
        inside = np.hypot(*(0.5 * (loop.points_mm + np.roll(loop.points_mm, -1, 0))).T) < 29.9
        assert (loop.label == inside.astype(int)).all()


def test_plane_holds_the_wall_and_is_square_to_the_channel():
    rng = np.random.default_rng(11)
    for _ in range(20):
        middle, centre, tangent, build = rng.normal(size=(4, 3))
        tangent /= np.linalg.norm(tangent)
        build /= np.linalg.norm(build)
        plane, is_up = section_plane(middle, centre, tangent, build)
        assert abs(plane.normal @ (middle - centre)) < 1e-12
        assert np.linalg.norm(plane.across) == pytest.approx(1.0) and abs(plane.across @ plane.up) < 1e-12
        wall = (middle - centre) / np.linalg.norm(middle - centre)
        squarest = tangent - (tangent @ wall) * wall
        assert abs(plane.normal @ squarest) / np.linalg.norm(squarest) == pytest.approx(1.0)
        assert (plane.up @ build > 0) if is_up else (plane.normal @ build > 0)


def test_plane_survives_special_directions():
    z, x = np.array([0, 0, 1.0]), np.array([1.0, 0, 0])
    for middle, tangent in ((np.zeros(3), x), (z, z)):  # no wall direction; channel along the wall
        plane, _ = section_plane(middle, np.zeros(3), tangent, z)
        assert np.linalg.norm(plane.normal) == pytest.approx(1.0)


def test_worst_wall_is_drawn_in_its_true_length(records):
    # depth 8 less half of bore 5.2: 5.4 mm from B9 to the carrier at radius 30
    worst = wall_verdicts(records.verdicts)[0]
    section = make_section(records.insert, records.plan, worst, (0, 0, 1))
    assert section.drawn_mm == pytest.approx(5.4, abs=0.02)
    far = section.plane.space_mm(section.far_side_mm)[0]
    assert np.hypot(far[0], far[1]) == pytest.approx(30.0, abs=0.02)
    near = section.plane.space_mm(section.channel_side_mm)[0]
    assert np.hypot(near[0], near[1]) == pytest.approx(24.6, abs=0.02)
    assert {"B8", "B9"} & {crossing.branch for crossing in section.crossings}


def test_worst_is_a_fail_before_a_thinner_watch():
    def wall(outcome, value, code="wall-face"):
        return Verdict(code, outcome, "", value, "mm", 3.0, xyz_mm=(0, 0, 0))

    rows = (
        wall(Outcome.PASS, 1.0),
        wall(Outcome.WATCH, 3.1),
        wall(Outcome.FAIL, 4.0, "wall-between"),
        wall(Outcome.FAIL, 3.5, "wall-outer"),
        wall(Outcome.FAIL, 0.1, "bore-smallest"),
        Verdict("wall-between", Outcome.PASS, "none near", None, "mm", 3.0),
    )
    assert [(v.outcome.value, v.value) for v in wall_verdicts(rows)] == [
        ("fail", 3.5),
        ("fail", 4.0),
        ("watch", 3.1),
        ("pass", 1.0),
    ]


def test_worst_is_the_least_margin_and_a_merge_before_all():
    """3.3 mm of 3.0 has less margin than 2.2 mm of 1.0; channels that run together have none."""
    thick = Verdict("wall-face", Outcome.WATCH, "", 3.3, "mm", 3.0, xyz_mm=(0, 0, 0))
    thin = Verdict("wall-outer", Outcome.WATCH, "", 2.2, "mm", 1.0, xyz_mm=(0, 0, 0))
    assert wall_verdicts((thin, thick)) == [thick, thin]
    gone = Verdict("wall-face", Outcome.FAIL, "", 0.05, "mm", 3.0, band=0.2, xyz_mm=(0, 0, 0))
    merge = Verdict("branches-merge", Outcome.FAIL, "", 0.3, "mm", 0.0, xyz_mm=(0, 0, 0))
    assert wall_verdicts((gone, merge, thin)) == [merge, gone, thin]


def test_overlap_is_ringed_not_dimensioned(records):
    row = Verdict(
        "branches-merge", Outcome.FAIL, "x", -0.5, "mm", 0.0, branch_ids=("B9", "B8"), xyz_mm=(22.0, 0.0, 4.0)
    )
    section = make_section(records.insert, records.plan, row, (0, 0, 1))
    svg = draw_section(section, records.blank)
    assert (
        section.overlaps
        and "overlap 0.50 mm" in svg
        and ">B9 and B8<" in svg
        and "at least" not in svg
        and 'r="11"' in svg
    )


def test_label_is_the_branch_the_verdict_names_even_beside_a_junction(records):
    """At the end of B9 in N7 the centreline of B8 passes nearby; the opening is called B9 all the same."""
    worst = wall_verdicts(records.verdicts)[0]
    section = make_section(records.insert, records.plan, worst, (0, 0, 1))
    assert worst.branch_ids[0] == "B9" and [item.branch for item in section.named] == ["B9"]
    svg = draw_section(section, records.blank)
    assert ">B9<" in svg and ">B8<" not in svg


def test_plate_leaves_the_dimension_free(records):
    svg = draw_section(
        make_section(records.insert, records.plan, wall_verdicts(records.verdicts)[0], (0, 0, 1)), records.blank
    )
    left, top, wide, high = map(
        float, re.search(r'<rect x="([\d.-]+)" y="([\d.-]+)" width="([\d.]+)" height="(42)" rx="4"', svg).groups()
    )
    number = r'"([\d.-]+)"'
    line = re.search(rf"<line x1={number} y1={number} x2={number} y2={number}[^>]*width=\"2.6\"", svg)
    x1, y1, x2, y2 = map(float, line.groups())
    for t in np.linspace(0.0, 1.0, 50):
        x, y = x1 + t * (x2 - x1), y1 + t * (y2 - y1)
        assert not (left <= x <= left + wide and top <= y <= top + high)


def test_drawing_shows_value_limit_hatch_and_scale(records):
    worst = wall_verdicts(records.verdicts)[0]
    svg = draw_section(make_section(records.insert, records.plan, worst, (0, 0, 1)), records.blank)
    for wanted in ("5.40 mm !", "at least 5.20 + 0.12 band", 'fill-rule="evenodd"', "section-metal", "2 mm<", "B9"):
        assert wanted in svg


def test_machining_stock_is_drawn_where_it_is_cut(make_records, scene):
    # a wall at the foot: the printed skin lies 0.5 mm below the finished face
    verdict = Verdict(
        "wall-outer",
        Outcome.WATCH,
        "x",
        2.0,
        "mm",
        3.0,
        branch_ids=("L-feed",),
        xyz_mm=(9.0, -21.0, scene.FOOT_MM + 1.0),
    )
    records = make_records()
    section = make_section(records.insert, records.plan, verdict, (0, 0, 1))
    assert "finished face, under machining stock" in draw_section(section, records.blank)
    assert "machining stock" not in draw_section(section, scene.blank(stock_mm=0.0))


def test_rod_is_closed_and_of_the_right_size():
    from morph.geometry.mesh import measure_condition, mesh_volume_mm3
    from morph.report.cut import rod_mesh

    axis = np.array([1.0, 2.0, 2.0]) / 3.0
    rod = rod_mesh(np.array([1.0, 2.0, 3.0]), axis, 10.0, 6.0)
    assert measure_condition(rod).closed
    # a prism on 96 points of the circle: 48 r^2 sin(2 pi / 96) times its length
    assert mesh_volume_mm3(rod) == pytest.approx(48 * 9 * np.sin(2 * np.pi / 96) * 10.0)


def test_hole_beside_the_wall_is_drawn_and_named(records, scene):
    import dataclasses

    from morph.body.blank import Hole

    worst = wall_verdicts(records.verdicts)[0]
    section = make_section(records.insert, records.plan, worst, (0, 0, 1))
    hole = Hole("H1", np.array([21.0, 0.0, 40.0]), np.array([0, 0, -1.0]), 30.0, 4.0, 3.0)
    svg = draw_section(section, dataclasses.replace(scene.blank(), holes=(hole,)))
    assert ">H1</text>" in svg and "hole, made later" in svg
    assert "hole, made later" not in draw_section(section, scene.blank())


def test_plane_that_meets_no_channel_gives_no_section(make_records):
    verdict = Verdict("wall-outer", Outcome.PASS, "x", 2.0, "mm", 3.0, branch_ids=("B9",), xyz_mm=(0.0, 0.0, 500.0))
    records = make_records()
    flat = records.insert.__class__(records.insert.mesh, np.zeros(len(records.insert.mesh.triangles), int), 1.0, 0, ())
    assert make_section(flat, records.plan, verdict, (0, 0, 1)) is None
