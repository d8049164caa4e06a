"""A whole job comes out as written; everything wrong is refused with its own code, place and cure."""

import pytest

from morph.core.codes import explanations
from morph.core.errors import InputError, MorphError, SettingError
from morph.settings.job import (
    BoxBlankSettings,
    CarrierBlankSettings,
    ConeMap,
    ConeSettings,
    CoolantEnd,
    CylinderBlankSettings,
    FlangeSettings,
    LevelRule,
    Metal,
    Role,
    Rows,
    Samples,
    SeenFrom,
    TrueAt,
)
from morph.settings.read_job import read_job

pytestmark = pytest.mark.quick

FULL = """
name = "lamp-core.v2"
[layout]
image = "maps/density.png"
rows = "bottom-up"
samples = "nodes"
size_mm = [96, 64.5]
seen_from = "metal"
channel = "low"
level = "keep-area"
area_ratio = 0.36
seam = "open"
mirror_at = "none"
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 12.0]
exit_mm = [24.0, 8.0, -60.0]
leave = [0, 0, -10]
end = "plain"
[[port]]
name = "return"
role = "out"
at_mm = [96.0, 50.0]
[[port]]
name = "clean-1"
role = "access"
at_mm = [48, 64.5]
[carrier]
kind = "cylinder"
radius_mm = 30
metal = "away-from-axis"
wall_to_face_mm = 4
true_at = "face"
[section]
shape = "round"
bore_scale = 1.25
bore_range_mm = [3, 3]
blend_mm = 0
[print]
process = "steel-40um"
build_direction = [0.0, 1.0, 0.0]
[service]
wall_face_mm = 2.5
wall_face_bores = 0.5
wall_between_mm = 2
wall_outer_mm = 4
wall_hole_mm = 5
smallest_bore_mm = 2
[blank]
kind = "box"
min_mm = [-40, -41, -42]
max_mm = [40, 41, 42]
part_faces = ["carrier", "top"]
port_faces = ["-z", "+x"]
stock_mm = { foot = 1.5, "+x" = 0.25 }
[[hole]]
at_mm = [1, 2, 3]
axis = [0, 0, 1]
diameter_mm = 6
wall_mm = 1.5
depth_mm = 20
[[hole]]
at_mm = [1, 2, 3]
axis = [1, 0, 0]
diameter_mm = 8
[quality]
h_mm = 0.2
"""


def test_every_setting_arrives(read_text, tmp_path):
    job = read_text(FULL)
    assert job.name == "lamp-core.v2" and job.file.name == "job.toml"
    layout = job.layout
    assert layout.image == tmp_path / "maps/density.png" and layout.size_mm == (96.0, 64.5)
    assert (layout.rows, layout.samples, layout.seen_from) == (Rows.BOTTOM_UP, Samples.NODES, SeenFrom.METAL)
    assert (layout.channel, layout.level, layout.area_ratio) == (CoolantEnd.LOW, LevelRule.KEEP_AREA, 0.36)
    assert [(p.name, p.role, p.at_mm) for p in job.ports] == [
        ("feed", Role.IN, (0.0, 12.0)),
        ("return", Role.OUT, (96.0, 50.0)),
        ("clean-1", Role.ACCESS, (48.0, 64.5)),
    ]
    assert job.ports[0].exit_mm == (24.0, 8.0, -60.0) and job.ports[0].leave == (0.0, 0.0, -1.0)
    assert job.ports[1].exit_mm is None and job.ports[1].leave is None
    assert job.carrier.metal is Metal.AWAY_FROM_AXIS and job.carrier.true_at is TrueAt.FACE
    assert (job.carrier.radius_mm, job.carrier.depth_mm, job.carrier.wall_to_face_mm) == (30.0, None, 4.0)
    assert (job.section.bore_scale, job.section.bore_range_mm, job.section.blend_mm) == (1.25, (3.0, 3.0), 0.0)
    assert job.printing.profile.name == "steel-40um" and job.printing.build_direction == (0.0, 1.0, 0.0)
    service = job.service
    assert (service.wall_face_mm, service.wall_face_bores, service.wall_between_mm) == (2.5, 0.5, 2.0)
    assert (service.wall_outer_mm, service.wall_hole_mm, service.smallest_bore_mm) == (4.0, 5.0, 2.0)
    assert job.blank.shape == BoxBlankSettings((-40.0, -41.0, -42.0), (40.0, 41.0, 42.0))
    assert job.blank.part_faces == ("carrier", "top") and job.blank.port_faces == ("-z", "+x")
    assert job.blank.stock_mm == (("+x", 0.25), ("foot", 1.5))
    assert job.holes[0].depth_mm == 20.0 and job.holes[0].wall_mm == 1.5
    assert job.holes[1].depth_mm is None and job.holes[1].wall_mm is None and job.holes[1].axis == (1.0, 0.0, 0.0)
    assert job.quality.h_mm == 0.2


def test_a_cone_arrives(read_changed):
    carrier = read_changed((CYLINDER, 'kind = "cone"\nhalf_angle_deg = -7.5\nmap = "polar"')).carrier
    assert carrier == ConeSettings(30.0, -7.5, Metal.TOWARD_AXIS, depth_mm=8.0, map=ConeMap.POLAR)
    assert read_changed((CYLINDER, 'kind = "cone"\nhalf_angle_deg = 12')).carrier.map is ConeMap.FLAT


def test_a_flange_arrives(read_changed):
    flange = "[blank]\nflange = { radius_mm = 45, height_mm = 12 }\n[carrier]"
    assert read_changed(("[carrier]", flange)).blank.flange == FlangeSettings(45.0, 12.0)


def test_every_optional_setting_has_its_default(read_text, valid_text):
    job = read_text(valid_text)
    assert (job.layout.rows, job.layout.samples, job.layout.level) == (Rows.TOP_DOWN, Samples.CELLS, LevelRule.HALF)
    assert (job.layout.seen_from, job.layout.channel, job.layout.area_ratio) == (SeenFrom.PART, CoolantEnd.HIGH, None)
    assert job.carrier.true_at is TrueAt.DEPTH
    assert (job.section.bore_scale, job.section.bore_range_mm, job.section.blend_mm) == (1.0, None, 0.6)
    assert job.printing.build_direction == (0.0, 0.0, 1.0)
    assert job.service.wall_face_mm == job.service.wall_hole_mm == job.service.smallest_bore_mm == 3.0
    assert job.blank.shape == CarrierBlankSettings((10.0, 10.0), None)
    assert (job.blank.part_faces, job.blank.port_faces, job.blank.stock_mm) == (("carrier",), ("foot",), ())
    assert job.holes == () and job.quality.h_mm is None


def test_a_cylinder_blank_and_a_shell(read_text, valid_text):
    job = read_text(valid_text + '[blank]\nkind = "cylinder"\nradius_mm = 55\nz_mm = [-40, 50]\n')
    assert job.blank.shape == CylinderBlankSettings(55.0, (-40.0, 50.0))
    job = read_text(valid_text + "[blank]\nmargin_mm = [0, 3]\nthickness_mm = 22\n")
    assert job.blank.shape == CarrierBlankSettings((0.0, 3.0), 22.0)


def test_a_number_level_and_windows_line_ends_and_a_byte_order_mark(read_text, valid_text):
    text = valid_text.replace("[[port]]", "level = 0.42\n[[port]]", 1).replace("\n", "\r\n")
    assert read_text(b"\xef\xbb\xbf" + text.encode()).layout.level == 0.42


def test_a_relative_profile_starts_from_the_job(read_changed, tmp_path):
    from importlib import resources

    shipped = (resources.files("morph.settings") / "profiles" / "steel-40um.toml").read_text()
    (tmp_path / "own.toml").write_text(shipped.replace('name = "steel-40um"', 'name = "own"'))
    assert read_changed(("[carrier]", '[print]\nprocess = "own.toml"\n[carrier]')).printing.profile.name == "own"


CYLINDER = 'kind = "cylinder"'
LAYOUT, PORT, CARRIER = "size_mm = [96.0, 64.0]", 'name = "feed"', "radius_mm = 30.0"
BAD = [
    # code, line as it stands, lines instead, what the message must name
    ("setting-unknown", "depth_mm = 8.0", "depht_mm = 8.0", "depth_mm"),
    ("setting-unknown", "[carrier]", "[carier]", "carrier"),
    ("setting-unknown", "[carrier]", "[Carrier]", "carrier"),
    ("setting-unknown", LAYOUT, LAYOUT + "\nrow = 1", "rows"),
    ("setting-unknown", PORT, PORT + "\nat = 1", "at_mm"),
    ("setting-unknown", "[carrier]", "[service]\nwall_mm = 3\n[carrier]", "wall_"),
    ("setting-unknown", "[carrier]", "[blank]\nstock_mm = {feet = 1.0}\n[carrier]", "foot"),
    ("setting-unknown", "[carrier]", "[quality]\nh = 0.2\n[carrier]", "h_mm"),
    ("setting-missing", 'name = "lamp-core"', "", "name"),
    ("setting-missing", LAYOUT, "", "[layout] size_mm"),
    ("setting-missing", CARRIER, "", "[carrier] radius_mm"),
    ("setting-missing", 'metal = "toward-axis"', "", "[carrier] metal"),
    ("setting-missing", 'role = "in"', "", "[[port]] 1 role"),
    ("setting-type", 'name = "lamp-core"', "name = 5", "name: found 5"),
    ("setting-type", CARRIER, 'radius_mm = "30"', "[carrier] radius_mm"),
    ("setting-type", CARRIER, "radius_mm = true", "found true"),
    ("setting-type", CARRIER, "radius_mm = 2020-01-01", "2020-01-01"),
    ("setting-type", CARRIER, "radius_mm = [30.0]", "[30.0]"),
    ("setting-type", LAYOUT, "size_mm = 96", "a list of 2 numbers"),
    ("setting-type", LAYOUT, "size_mm = [1, 2, 3]", "a list of 2 numbers"),
    ("setting-type", LAYOUT, "size_mm = [true, 2]", "found true"),
    ("setting-type", LAYOUT, LAYOUT + "\nlevel = true", "keep-area"),
    ("setting-type", LAYOUT, LAYOUT + "\nrows = 1", "top-down"),
    ("setting-type", "[carrier]", "[[carrier]]", "[carrier]"),
    ("setting-type", "[carrier]", '[blank]\npart_faces = "carrier"\n[carrier]', "a list of names"),
    ("setting-type", "[carrier]", "[blank]\nstock_mm = 1.0\n[carrier]", "a table"),
    ("setting-text", 'name = "lamp-core"', 'name = ""', "printable"),
    ("setting-text", "density.npy", "density\\u0000.npy", "image"),
    ("setting-text", "density.npy", "d" * 2000, "2000 characters"),
    ("setting-text", "density.npy", "d" * 300 + ".npy", "255 bytes"),
    ("setting-choice", LAYOUT, LAYOUT + '\nrows = "top-dwon"', "top-down"),
    ("setting-choice", LAYOUT, LAYOUT + '\nlevel = "otsu"', "half"),
    ("setting-choice", 'role = "in"', 'role = "inlet"', "in"),
    ("setting-choice", 'kind = "cylinder"', 'kind = "sphere"', "cylinder"),
    ("setting-choice", "[carrier]", '[blank]\nport_faces = ["foots"]\n[carrier]', "foot"),
    ("setting-choice", "[carrier]", '[blank]\nkind = "ball"\n[carrier]', "carrier, cylinder, box"),
    ("setting-not-finite", CARRIER, "radius_mm = nan", "nan"),
    ("setting-not-finite", CARRIER, "radius_mm = -inf", "-inf"),
    ("setting-not-finite", CARRIER, "radius_mm = 1" + "0" * 400, "bits"),
    ("setting-not-finite", LAYOUT, LAYOUT + "\nlevel = nan", "level"),
    ("setting-range", CARRIER, "radius_mm = 0.0", "more than 0"),
    ("setting-range", CARRIER, "radius_mm = -30.0", "-30"),
    ("setting-range", CYLINDER, 'kind = "cone"\nhalf_angle_deg = 0', "at least 0.01 degrees off 0"),
    ("setting-range", CYLINDER, 'kind = "cone"\nhalf_angle_deg = -80.0', "less than 80"),
    ("setting-missing", CYLINDER, 'kind = "cone"', "half_angle_deg"),
    ("setting-choice", CYLINDER, 'kind = "cone"\nhalf_angle_deg = 9\nmap = "mercator"', "flat, polar"),
    ("setting-conflict", CARRIER, CARRIER + "\nhalf_angle_deg = 5", "half_angle_deg"),
    ("setting-conflict", CARRIER, CARRIER + '\nmap = "flat"', "map"),
    ("setting-range", LAYOUT, "size_mm = [96.0, 0.0]", "size_mm"),
    ("setting-range", LAYOUT, "size_mm = [96.0, 2000.5]", "2000"),
    ("setting-range", LAYOUT, LAYOUT + "\nlevel = 0.0", "between 0 and 1"),
    ("setting-range", LAYOUT, LAYOUT + "\nlevel = 1", "between 0 and 1"),
    ("setting-range", LAYOUT, LAYOUT + '\nlevel = "keep-area"\narea_ratio = 1.0', "less than 1"),
    ("setting-range", "depth_mm = 8.0", "depth_mm = 0", "[carrier] depth_mm"),
    ("setting-range", "[carrier]", "[quality]\nh_mm = 0.001\n[carrier]", "0.05"),
    ("setting-range", "[carrier]", "[service]\nwall_face_mm = -1\n[carrier]", "wall_face_mm"),
    ("setting-order", "[carrier]", "[section]\nbore_range_mm = [5, 3]\n[carrier]", "lower number first"),
    ("setting-order", "[carrier]", '[blank]\nkind = "cylinder"\nradius_mm = 50\nz_mm = [3, 3]\n[carrier]', "z_mm"),
    (
        "setting-order",
        "[carrier]",
        '[blank]\nkind = "box"\nmin_mm = [0, 5, 0]\nmax_mm = [9, 5, 9]\n[carrier]',
        "y above min_mm's 5 mm",
    ),
    ("setting-conflict", LAYOUT, LAYOUT + "\narea_ratio = 0.3", "keep-area"),
    ("setting-conflict", "[carrier]", "[blank]\nradius_mm = 50\n[carrier]", "radius_mm"),
    ("setting-conflict", "[carrier]", '[blank]\nport_faces = ["foot", "foot"]\n[carrier]', "each name once"),
    ("setting-unknown", "[carrier]", "[blank]\nflange = { radius_mm = 45, hight_mm = 12 }\n[carrier]", "height_mm"),
    ("setting-missing", "[carrier]", "[blank]\nflange = { radius_mm = 45 }\n[carrier]", "height_mm"),
    ("setting-zero-direction", "[carrier]", "[print]\nbuild_direction = [0, 0, 0]\n[carrier]", "build_direction"),
    ("setting-zero-direction", PORT, PORT + "\nleave = [0.0, 0.0, -0.0]", "leave"),
    ("job-name", 'name = "lamp-core"', 'name = "../lamp"', "letters"),
    ("job-name", 'name = "lamp-core"', 'name = ".lamp"', "letters"),
    ("job-name", 'name = "lamp-core"', 'name = "a b"', "letters"),
    ("job-name", 'name = "lamp-core"', 'name = "' + "a" * 65 + '"', "64"),
    ("depth-choice", "depth_mm = 8.0", "", "neither"),
    ("depth-choice", "depth_mm = 8.0", "depth_mm = 8.0\nwall_to_face_mm = 4.0", "both"),
    ("port-name", PORT, 'name = "=cmd"', "letter or digit first"),
    ("port-name", PORT, 'name = "feed/1"', "letters"),
    ("port-name-twice", PORT, 'name = "RETURN"', "return"),
    ("port-place-twice", "at_mm = [0.0, 12.0]", "at_mm = [96.0, 50.0]", "feed"),
    ("port-outside", "at_mm = [0.0, 12.0]", "at_mm = [-0.1, 12.0]", "x 0 to 96"),
    ("port-outside", "at_mm = [0.0, 12.0]", "at_mm = [12.0, 64.1]", "y 0 to 64"),
    ("port-none-in", 'role = "in"', 'role = "access"', "enters"),
    ("port-none-out", 'role = "out"', 'role = "in"', "leaves"),
    ("part-faces-carrier", "[carrier]", '[blank]\npart_faces = ["top"]\n[carrier]', "carrier"),
    ("face-part-and-port", "[carrier]", '[blank]\nport_faces = ["carrier"]\n[carrier]', "leak"),
    ("profile-unknown", "[carrier]", '[print]\nprocess = "steel-40"\n[carrier]', "steel-40um"),
    ("profile-missing", "[carrier]", '[print]\nprocess = "own.toml"\n[carrier]', "own.toml"),
    ("profile-unreadable", "[carrier]", '[print]\nprocess = "folder.toml"\n[carrier]', "a folder"),
    ("profile-too-large", "[carrier]", '[print]\nprocess = "large.toml"\n[carrier]', "1000000 bytes"),
    ("toml-syntax", "[carrier]", "[carrier", "line"),
    ("toml-syntax", CARRIER, CARRIER + "\n" + CARRIER, "line"),
    ("toml-syntax", CARRIER, "radius_mm = " + "9" * 5000, "digits"),
    ("toml-too-deep", CARRIER, "radius_mm = " + "[" * 5000, "nested"),
    ("toml-too-deep", CARRIER, "a." * 100_000 + "b = 1", "deeper key"),
    ("toml-too-deep", CARRIER, '"x y".' * 20 + "b = 1", "deeper key"),
]


@pytest.mark.parametrize(("code", "old", "new", "named"), BAD, ids=[f"{row[0]}-{i}" for i, row in enumerate(BAD)])
def test_a_bad_setting_is_named(read_changed, tmp_path, code, old, new, named):
    (tmp_path / "folder.toml").mkdir()
    (tmp_path / "large.toml").write_text("#" + "x" * 1_000_000)
    with pytest.raises(MorphError) as caught:
        read_changed((old, new))
    assert caught.value.code == code
    assert named in str(caught.value)
    assert str(caught.value).count("\n") == 0 and len(str(caught.value)) < 500
    assert explanations()[code].kind == "error"


def test_a_single_port_table_is_told_about_double_brackets(read_text, valid_text):
    first, second = valid_text.split("[[port]]", 2)[0], valid_text.split("[[port]]", 2)[2]
    with pytest.raises(SettingError) as caught:
        read_text(f"{first}[port]{second}")
    assert caught.value.code == "setting-type" and "double brackets" in str(caught.value)


def test_a_thousand_ports_are_too_many(read_text, valid_text):
    ports = "".join(f'[[port]]\nname = "p{i}"\nrole = "in"\nat_mm = [1, {i / 100}]\n' for i in range(1000))
    with pytest.raises(SettingError) as caught:
        read_text(valid_text + ports)
    assert caught.value.code == "setting-range" and "1002" in str(caught.value)


LATER = [
    ('kind = "cylinder"', 'kind = "revolved"\nprofile_mm = [[1, 2], [3, 4]]'),
    ('kind = "cylinder"', 'kind = "freeform"\nfile = "core.stl"'),
    ("[carrier]", '[moulding]\npolymer = "PP"\n[carrier]'),
]


@pytest.mark.parametrize(("old", "new"), LATER, ids=range(len(LATER)))
def test_what_does_not_exist_yet_is_refused_by_name(read_changed, old, new):
    with pytest.raises(SettingError) as caught:
        read_changed((old, new))
    assert caught.value.code == "not-available"
    assert "not available yet" in str(caught.value)


@pytest.mark.parametrize(
    ("added", "code"),
    [
        ("crop_mm = [0, 0, 97, 64]", "crop-range"),
        ("crop_mm = [50, 0, 20, 64]", "crop-range"),
        ("crop_mm = [-1, 0, 20, 64]", "crop-range"),
        ("crop_mm = [0, 0, 20]", "setting-type"),
        ('crop_mm = [4, 0, 96, 64]\nseam = "joined"', "setting-conflict"),
        ("pixel_mm = 0.5", "setting-conflict"),
        ('mirror_at = "middle"', "setting-choice"),
    ],
)
def test_crop_mirror_and_pixel_that_cannot_be(read_changed, added, code):
    with pytest.raises(SettingError) as caught:
        read_changed((LAYOUT, f"{LAYOUT}\n{added}"))
    assert caught.value.code == code


def test_ports_of_a_mirrored_layout_lie_on_the_doubled_sheet(read_changed):
    job = read_changed((LAYOUT, LAYOUT + '\nmirror_at = "right"'), ("[96.0, 50.0]", "[192.0, 50.0]"))
    assert job.layout.sheet_mm == (192.0, 64.0) and job.ports[1].at_mm == (192.0, 50.0)
    job = read_changed((LAYOUT, LAYOUT + "\ncrop_mm = [0, 0, 80, 60]"), ("[96.0, 50.0]", "[80.0, 50.0]"))
    assert job.layout.sheet_mm == (80.0, 60.0)


def test_a_place_a_rounding_error_off_the_sheet_lies_on_its_edge(read_changed):
    job = read_changed(("at_mm = [0.0, 12.0]", "at_mm = [-1e-9, 12.0]"), ("[96.0, 50.0]", "[96.0000000001, 50.0]"))
    assert job.ports[0].at_mm == (0.0, 12.0) and job.ports[1].at_mm == (96.0, 50.0)


def test_bad_files(tmp_path, read_text, monkeypatch):
    cases = [
        (tmp_path / "none.toml", "job-missing"),
        (tmp_path, "job-unreadable"),
        (tmp_path / ("x" * 400), "job-missing"),
    ]
    for path, code in cases:
        with pytest.raises(InputError) as caught:
            read_job(path)
        assert caught.value.code == code
    for content, code in [(b"\x89PNG\r\n\x1a\n\x00", "toml-not-text"), (b"#" * 1_000_001, "job-too-large")]:
        with pytest.raises(InputError) as caught:
            read_text(content)
        assert caught.value.code == code
    with pytest.raises(SettingError) as caught:
        read_text("")
    assert caught.value.code == "setting-missing"

    def refuse(*_args, **_keywords):
        raise PermissionError(13, "Permission denied")

    path = tmp_path / "job.toml"
    monkeypatch.setattr(type(path), "open", refuse)
    with pytest.raises(InputError) as caught:
        read_job(path)
    assert caught.value.code == "job-unreadable" and "Permission denied" in str(caught.value)
