"""Jobs whose blank is a mesh, through every stage: against the same body drawn, and in three file formats."""

import numpy as np
import pytest

import morph
from morph.core.errors import MorphError
from morph.core.verdict import Outcome
from tests.body import mesh_bodies

CHORD_MM = 0.004
WIDTH_MM = 5.4

JOB = """
name = "mesh"
[layout]
image = "density.npy"
size_mm = [60.0, 45.0]
[[port]]
name = "feed"
role = "in"
at_mm = [10.0, 0.0]
[[port]]
name = "return"
role = "out"
at_mm = [50.0, 0.0]
[carrier]
kind = "cylinder"
radius_mm = {radius_mm}
metal = "toward-axis"
depth_mm = 8.0
[section]
bore_range_mm = [3.5, 5.2]
[blank]
"""


def ladder_image():
    """A loop and its two feet: channels 5.4 mm wide at x = 10 and 50, y = 15 and 35 mm; 0.25 mm pixels."""
    x, y = np.meshgrid((np.arange(240) + 0.5) * 0.25, (np.arange(180) + 0.5) * 0.25)

    def box(x_low, x_high, y_low, y_high):
        return np.maximum(np.maximum(x_low - x, x - x_high), np.maximum(y_low - y, y - y_high))

    half = 0.5 * WIDTH_MM
    rows = [box(10 - half, 50 + half, level - half, level + half) for level in (15.0, 35.0)]
    columns = [box(at - half, at + half, -5.0, 35.0 + half) for at in (10.0, 50.0)]
    return np.clip(0.5 - np.minimum.reduce(rows + columns) / 0.25, 0.0, 1.0)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("mesh")
    np.save(folder / "density.npy", ladder_image()[::-1].astype(np.float32))
    return folder


def build(folder, blank, radius_mm=30.0, more=""):
    (folder / "job.toml").write_text(JOB.format(radius_mm=radius_mm) + blank + more)
    return morph.build(folder / "job.toml")


def require_sound(result, faces):
    summary = result.summary
    assert summary["insert"]["watertight"] and summary["insert"]["bodies"] == 1
    assert summary["insert"]["openings"] == summary["insert"]["openings_declared"] == 2
    assert [place["face"] for place in summary["insert"]["opening_places"]] == faces
    assert summary["insert"]["genus"] == 2  # a loop and a way through
    assert all(v.outcome is not Outcome.FAIL for v in result.verdicts), [v.text for v in result.verdicts]


def require_alike(drawn, given):
    """The same channels within 0.02 mm of bore, the same openings, the volume within 0.1 %."""
    one, two = drawn.records.plan, given.records.plan
    assert [b.id for b in one.branches] == [b.id for b in two.branches]
    for a, b in zip(one.branches, two.branches, strict=True):
        assert len(a.bore_mm) == len(b.bore_mm)
        np.testing.assert_allclose(a.bore_mm, b.bore_mm, atol=0.02)
        np.testing.assert_allclose(a.xyz_mm, b.xyz_mm, atol=0.02)
    ratio = given.summary["insert"]["volume_mm3"] / drawn.summary["insert"]["volume_mm3"]
    assert ratio == pytest.approx(1.0, abs=1e-3)
    places = [
        sorted(
            ([*o["xyz_mm"], o["diameter_mm"]] for o in result.summary["insert"]["opening_places"]), key=lambda p: p[1]
        )
        for result in (drawn, given)
    ]
    np.testing.assert_allclose(places[0], places[1], atol=0.02)


def test_a_core_as_a_mesh_gives_the_channels_of_the_same_core_drawn(folder):
    mesh_bodies.rod(30.0, -22.5 - 14.0, 22.5 + 10.0, chord_mm=CHORD_MM).export(folder / "core.stl")
    drawn = build(folder, 'margin_mm = [14.0, 10.0]\npart_faces = ["carrier", "top"]\n')
    given = build(folder, 'kind = "mesh"\nfile = "core.stl"\npart_faces = ["carrier", "top"]\n')
    assert drawn.summary["insert"]["opening_places"][0]["face"] == "foot"
    require_sound(given, ["foot", "foot"])
    require_alike(drawn, given)
    # the layout's 5.4 mm does not fit: bores are limited by the distance to the mesh
    room = given.records.plan.branches[0].room_by
    assert "face:carrier" in room


def test_a_flange_drawn_into_the_mesh_is_the_flange_of_the_job(folder):
    core = mesh_bodies.rod(30.0, -22.5 - 20.0, 22.5 + 10.0, chord_mm=CHORD_MM)
    mesh_bodies.united(core, mesh_bodies.rod(42.0, -42.5, -34.5)).export(folder / "flanged.stl")
    drawn = build(folder, "margin_mm = [20.0, 10.0]\nflange = { radius_mm = 42.0, height_mm = 8.0 }\n")
    given = build(folder, 'kind = "mesh"\nfile = "flanged.stl"\n')
    require_sound(given, ["foot", "foot"])
    require_alike(drawn, given)


def step_front(path):
    """The body of `mesh_bodies.round_front` by the CAD kernel, written as STEP."""
    from OCP.BRepAlgoAPI import BRepAlgoAPI_Common, BRepAlgoAPI_Fuse
    from OCP.BRepPrimAPI import BRepPrimAPI_MakeBox, BRepPrimAPI_MakeCylinder
    from OCP.gp import gp_Ax2, gp_Dir, gp_Pnt
    from OCP.STEPControl import STEPControl_StepModelType, STEPControl_Writer

    def rod(radius, low, high, x=0.0):
        frame = gp_Ax2(gp_Pnt(x, 0.0, low), gp_Dir(0.0, 0.0, 1.0))
        return BRepPrimAPI_MakeCylinder(frame, radius, high - low).Shape()

    box = BRepPrimAPI_MakeBox(gp_Pnt(0.0, -38.0, -30.0), gp_Pnt(80.0, 38.0, 30.0)).Shape()
    front = BRepAlgoAPI_Common(box, rod(60.0, -40.0, 40.0)).Shape()
    writer = STEPControl_Writer()
    writer.Transfer(
        BRepAlgoAPI_Fuse(front, rod(11.0, 29.0, 45.0, 30.0)).Shape(), STEPControl_StepModelType.STEPControl_AsIs
    )
    writer.Write(str(path))


@pytest.fixture(scope="module")
def fronts(folder):
    body = mesh_bodies.round_front()
    body.export(folder / "front.stl")
    body.export(folder / "front.3mf")
    pytest.importorskip("OCP")
    step_front(folder / "front.step")
    blank = 'kind = "mesh"\nfile = "front.{}"\nport_faces = ["back", "top"]\nstock_mm = {{ back = 0.5 }}\n'
    ports = JOB.replace("at_mm = [10.0, 0.0]", "at_mm = [10.0, 0.0]\nexit_mm = [30.0, 0.0, 45.0]")
    ports = ports.replace("at_mm = [50.0, 0.0]", 'at_mm = [50.0, 0.0]\nend = "thread"\nthread = "G1/8"')
    hole = "[[hole]]\nat_mm = [25.0, -25.0, 40.0]\naxis = [0, 0, -1]\ndiameter_mm = 6.0\n"
    found = {}
    for kind in ("stl", "3mf", "step"):
        (folder / "front.toml").write_text(ports.format(radius_mm=60.0) + blank.format(kind) + hole)
        found[kind] = morph.build(folder / "front.toml")
    return found


@pytest.mark.parametrize("kind", ["stl", "3mf", "step"])
def test_leads_come_out_of_the_back_and_of_the_boss(fronts, kind):
    result = fronts[kind]
    require_sound(result, ["back", "top"])
    back, top = (np.array(place["xyz_mm"]) for place in result.summary["insert"]["opening_places"])
    np.testing.assert_allclose(top, [30.0, 0.0, 45.0], atol=0.02)
    assert back[0] == pytest.approx(-0.5, abs=1e-3)  # on the stock
    assert result.records.finished is not None
    assert result.records.blank.holes[0].length_mm == pytest.approx(60.0, abs=1e-3)
    back_exit = next(one for one in result.records.plan.exits if one.port == "return")
    assert back_exit.face == "back" and back_exit.finish.cut_depth_mm > 0.0  # a thread square into a flat end
    assert any(notice.code == "mesh-blank" and f"front.{kind}" in notice.text for notice in result.notices)


def test_the_format_of_the_file_does_not_change_the_insert(fronts):
    assert fronts["stl"].files["graph.json"] == fronts["3mf"].files["graph.json"]
    volumes = [fronts[kind].summary["insert"]["volume_mm3"] for kind in ("stl", "3mf", "step")]
    assert volumes[1] == pytest.approx(volumes[0], rel=1e-6)
    # two sets of facets of the same round faces, each within its chord
    assert volumes[2] == pytest.approx(volumes[0], rel=5e-4)


def test_no_path_of_the_mesh_reaches_the_files(fronts, folder):
    for name, content in fronts["stl"].files.items():
        assert str(folder).encode() not in content, name
    assert b'file = "front.stl"' in fronts["stl"].files["report.html"].replace(b"&#34;", b'"').replace(b"&quot;", b'"')


def test_a_broken_mesh_leaves_no_result(folder):
    (folder / "broken.stl").write_bytes(b"solid nothing")
    with pytest.raises(MorphError) as caught:
        build(folder, 'kind = "mesh"\nfile = "broken.stl"\n')
    assert caught.value.code == "mesh-truncated"
