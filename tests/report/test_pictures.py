"""The numbers behind the pictures: sheet, density, still views, decimated meshes and the 3D scene."""

import io
import re

import numpy as np
import pytest
import trimesh
from PIL import Image

from morph.geometry.mesh import Mesh, measure_condition
from morph.layout.density import Density
from morph.report.decimate import make_screen_mesh
from morph.report.density_view import density_picture, draw_density
from morph.report.drawing import INK
from morph.report.figures import MOST_CHANNEL_TRIANGLES, MOST_SKIN_TRIANGLES, hover_words, make_figure, make_scene
from morph.report.page import sheet_scene
from morph.report.png import png_bytes
from morph.report.projection_view import VIEWS, flat_mm, outline_mm
from morph.report.sheet_view import draw_sheet
from morph.settings.job import Samples, Seam, SeenFrom

pytestmark = pytest.mark.quick


def test_sheet_walls_are_those_to_the_part_face(records):
    shown = sheet_scene(records)
    # bore 3.0 at depth 8: 6.5 mm all along B6; B9 falls from bore 5.2 (5.4 mm) to 4.0 (6.0 mm)
    assert shown.colours.values["B6"] == pytest.approx(6.5, abs=1e-9)
    assert shown.colours.values["B9"][[0, -1]] == pytest.approx([5.4, 6.0], abs=1e-9)
    assert "L-feed" not in shown.colours.values
    assert shown.colours.ends == (5.0, 6.5)
    assert shown.marked == ("B9", (45.0, 50.0))


def test_sheet_is_mirrored_only_when_the_drawing_reads_from_the_metal(records, make_records, scene):
    ports = {}
    for side in (SeenFrom.PART, SeenFrom.METAL):
        shown = sheet_scene(make_records(job=scene.job(seen_from=side)))
        ports[side] = shown.seen(np.array([15.0, 0.0]))[0].tolist()
    assert ports == {SeenFrom.PART: [15.0, 0.0], SeenFrom.METAL: [75.0, 0.0]}


def test_sheet_marks_ports_by_shape_and_idle_branches_by_hatch(records):
    svg = draw_sheet(sheet_scene(records))
    assert "feed (in)" in svg and "return (out)" in svg
    assert svg.count("url(#sheet-no-flow)") == 2  # the one idle branch and the legend
    assert "wall to the finished part face, mm" in svg and ">6.5<" in svg


def test_colours_end_where_the_scale_ends(records):
    shown = sheet_scene(records)
    fills = re.findall(r'<path d="M[^"]*" fill="(#[0-9a-f]{6})" stroke="\1"', draw_sheet(shown))
    from morph.report.colour import COLOUR_STEPS, map_hex

    ramp = map_hex(np.arange(COLOUR_STEPS) / (COLOUR_STEPS - 1))
    assert set(fills) - {INK} <= set(ramp) and ramp[-1] in fills  # B6 at 6.5 mm is the end of the scale
    assert ramp[round((5.4 - 5.0) / 1.5 * (COLOUR_STEPS - 1))] in fills


def test_density_picture_keeps_bottom_at_the_bottom_and_coolant_dark():
    value = np.zeros((3, 4))
    value[0, 1] = 1.0  # bottom row of the sheet, second column
    grey = density_picture(Density(value, (4.0, 3.0), Samples.CELLS, Seam.OPEN, "x", "y"))
    assert grey.shape == (3, 4) and grey[2, 1] == grey.min() < 100
    assert (np.delete(grey.ravel(), 9) == 255).all()


def test_large_density_is_averaged():
    value = np.zeros((2200, 1100))
    value[:, :550] = 1.0
    grey = density_picture(Density(value, (11.0, 22.0), Samples.CELLS, Seam.OPEN, "x", "y"))
    assert max(grey.shape) <= 1024 and grey[:, 0].max() < 100 and grey[:, -1].min() == 255


def test_png_reads_back():
    grey = np.random.default_rng(1).integers(0, 256, (17, 31)).astype(np.uint8)
    assert (np.asarray(Image.open(io.BytesIO(png_bytes(grey)))) == grey).all()


def test_density_drawing_names_every_node_and_branch(records):
    svg = draw_density(records.density, records.graph)
    for name in [*(f"N{i}" for i in range(1, 9)), *(f"B{i}" for i in range(1, 10))]:
        assert f">{name}</text>" in svg


def test_node_samples_reach_half_a_cell_beyond_the_sheet(make_records, records):
    def image_width(samples):
        density = Density(np.ones((3, 5)), (90.0, 60.0), samples, Seam.OPEN, "x", "y")
        return float(re.search(r'<image [^>]*width="([\d.]+)"', draw_density(density, records.graph))[1])

    assert image_width(Samples.NODES) / image_width(Samples.CELLS) == pytest.approx(
        1.25, abs=1e-3
    )  # 4 steps + 2 halves


def test_views_are_right_handed_projections():
    points = np.array([[1.0, 2.0, 3.0]])
    assert [flat_mm(view, points)[0].tolist() for view in VIEWS] == [[1, 3], [2, 3], [1, 2]]


def test_outline_is_the_convex_hull(records):
    outline = outline_mm(flat_mm(VIEWS[0], records.insert.mesh.vertices_mm))
    x, z = outline.T
    assert (x.min(), x.max()) == pytest.approx((-30, 30)) and (z.min(), z.max()) == pytest.approx((-45.5, 40.0))


def test_screen_mesh_is_small_near_and_keeps_values():
    ball = trimesh.creation.icosphere(subdivisions=5, radius=10.0)  # 20480 triangles
    full = Mesh(ball.vertices, ball.faces)
    small = make_screen_mesh(full, 3000)
    assert 1000 < len(small.mesh.triangles) <= 3000
    assert np.linalg.norm(small.mesh.vertices_mm, axis=1) == pytest.approx(10.0, abs=0.15)
    assert small.mean_of(full.vertices_mm[:, 2]) == pytest.approx(small.mesh.vertices_mm[:, 2], abs=1e-9)
    assert small.mesh.triangles.max() == len(small.mesh.vertices_mm) - 1
    first = small.first_of(np.arange(len(full.vertices_mm)))
    assert (small.stands_for[first] == np.arange(len(first))).all()


def test_small_mesh_is_left_alone(records):
    same = make_screen_mesh(records.solid.trimmed, 10**6)
    assert same.mesh is records.solid.trimmed and measure_condition(same.mesh).closed


def test_scene_holds_every_quantity_per_vertex(records):
    shown = make_scene(records)
    n = len(shown.channels.vertices_mm)
    assert [q.name for q in shown.quantities] == ["wall", "bore", "ceiling"]
    assert all(q.values.shape == (n,) and q.low < q.high and q.unit for q in shown.quantities)
    assert len(shown.branch) == n and set(shown.branch) == {b.id for b in records.plan.branches}
    assert len(shown.channels.triangles) <= MOST_CHANNEL_TRIANGLES and len(shown.skin.triangles) <= MOST_SKIN_TRIANGLES
    assert MOST_CHANNEL_TRIANGLES + MOST_SKIN_TRIANGLES <= 60000
    assert re.fullmatch(r"\S+: bore \d\.\d\d mm, wall \d+\.\d\d mm, angle \d+ deg", hover_words(shown)[0])
    # bores of the plan run from 3.0 to 5.2 mm
    assert (shown.quantities[1].low, shown.quantities[1].high) == pytest.approx((3.0, 5.2))


def test_figure_shows_the_insert_see_through_and_the_first_quantity(records):
    figure = make_figure(make_scene(records))
    channels, skin, exits = figure.data
    assert skin.opacity < 0.5 and channels.opacity is None
    assert channels.cmin == pytest.approx(make_scene(records).quantities[0].low)
    assert list(exits.text) == ["feed (in)", "return (out)"]


def test_names_in_a_crowd_cover_neither_each_other_nor_the_signs():
    """Nine names for one place: all are written, apart, inside the drawing, and the far ones tied by a line."""
    from morph.report.drawing import Drawing
    from morph.report.label_places import LETTER_PX, SIZE_PX, LabelPlaces

    drawing = Drawing((0.0, 0.0), (100.0, 100.0), 400.0, "crowd", "t")
    labels = LabelPlaces(drawing)
    labels.keep_clear(np.array([3.0, 3.0]), 5.0)
    for index in range(9):
        labels.write(np.array([3.0, 3.0]), f"N{index}", "#000000", beside=True)
    found = re.findall(r'<text x="([\d.]+)" y="([\d.]+)"', drawing.svg())
    places = np.array(found, dtype=float)
    assert len(places) == 9
    apart = np.abs(places[:, None] - places[None, :]) + np.eye(9)[:, :, None] * 1e3
    assert ((apart[..., 0] >= 2 * LETTER_PX) | (apart[..., 1] >= SIZE_PX)).all()
    assert places.min() >= 5.0 and places.max() <= 395.0 and "<line" in drawing.svg()
    sign = np.abs(places - [12.0, 388.0])
    assert ((sign[:, 0] >= LETTER_PX + 5.0) | (sign[:, 1] >= 0.5 * SIZE_PX + 5.0)).all()
