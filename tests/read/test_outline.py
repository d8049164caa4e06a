"""Outline drawings: areas by closed form, the same graph as the image, and drawings that are none."""

import io
import math

import numpy as np
import pytest

from morph.core.errors import InputError
from morph.layout.density import make_density
from morph.layout.extract import make_graph
from morph.read.image import read_image
from morph.read.outline import covered
from morph.settings.job import LayoutSettings, Rows
from tests.layout.drawing import drawn, ports

pytestmark = pytest.mark.quick

SIZE_MM = (60.0, 40.0)
BOTH = ports(("a", "in", 0, 20), ("b", "out", 60, 20))


def refused(path, code):
    with pytest.raises(InputError) as caught:
        read_image(path, SIZE_MM)
    assert caught.value.code == code, caught.value.sentence()
    return caught.value


def dxf(path, add, units=4):
    """Writes a DXF by ezdxf; `add` draws into its model space."""
    import ezdxf

    document = ezdxf.new("R2010")
    document.units = units
    add(document.modelspace())
    document.saveas(path)
    return path


def svg(path, body, head='width="60mm" height="40mm" viewBox="0 0 60 40"', before=""):
    path.write_text(f'{before}<svg xmlns="http://www.w3.org/2000/svg" {head}>{body}</svg>')
    return path


def area_mm2(path, size_mm=SIZE_MM, pixel_mm=None):
    value = read_image(path, size_mm, pixel_mm).value
    return float(value.mean()) * size_mm[0] * size_mm[1]


def pixel_outlines(mask):
    """The border of the coolant pixels of `mask` as closed rings of grid corners, found with shapely."""
    from shapely import box, unary_union

    pixels = [box(c, r, c + 1, r + 1) for r, c in np.argwhere(mask)]
    area = unary_union(pixels)
    rings = []
    for part in getattr(area, "geoms", [area]):
        rings += [np.array(ring.coords[:-1]) for ring in (part.exterior, *part.interiors)]
    return rings


LINES = [
    ([(-9, 20), (70, 20)], 5.0),
    ([(15, 20), (22, 32), (40, 32), (46, 20)], 4.0),
    ([(30, 20), (30, 7)], 4.0),
]


@pytest.fixture(scope="module")
def mask():
    return np.asarray(drawn(LINES, SIZE_MM, 0.5).value) > 0.5


def same_graph(one, two):
    assert [(b.id, b.start, b.end) for b in one.branches] == [(b.id, b.start, b.end) for b in two.branches]
    for a, b in zip(one.branches, two.branches, strict=True):
        np.testing.assert_allclose(a.sheet_mm, b.sheet_mm, atol=1e-6)
        np.testing.assert_allclose(a.bore_mm, b.bore_mm, atol=1e-6)


def graph_of(image, **changes):
    layout = LayoutSettings(image, SIZE_MM, **changes)
    return make_graph(make_density(layout), layout, BOTH)


def test_dxf_by_an_independent_writer_gives_the_graph_of_the_image(tmp_path, mask):
    """The outlines run along pixel borders, so the filled cells are the pixels. Writer: ezdxf."""
    np.save(tmp_path / "a.npy", mask.astype(float))

    def add(space):
        for ring in pixel_outlines(mask):
            space.add_lwpolyline(ring * 0.5, close=True)

    path = dxf(tmp_path / "a.dxf", add)
    image = read_image(path, SIZE_MM, 0.5)
    np.testing.assert_allclose(image.value, mask, atol=1e-9)
    assert "cells of 0.5 mm" in image.note and "unit of the drawing 1 mm" in image.note
    plain = graph_of(tmp_path / "a.npy", rows=Rows.BOTTOM_UP)
    same_graph(graph_of(path, rows=None, samples=None, pixel_mm=0.5), plain)
    assert len(plain.branches) == 6


def test_svg_gives_the_graph_of_the_image(tmp_path, mask):
    np.save(tmp_path / "a.npy", mask.astype(float))
    whole = "".join("M" + "L".join(f"{x * 0.5},{40 - y * 0.5}" for x, y in ring) + "Z" for ring in pixel_outlines(mask))
    path = svg(tmp_path / "a.svg", f'<path fill-rule="evenodd" d="{whole}"/>')
    same_graph(graph_of(path, rows=None, samples=None, pixel_mm=0.5), graph_of(tmp_path / "a.npy", rows=Rows.BOTTOM_UP))


@pytest.mark.parametrize("dtype", ["vti", "npz", "csv", "tif"])
def test_every_image_format_gives_the_graph_of_the_npy(tmp_path, dtype):
    value = np.asarray(drawn(LINES, SIZE_MM, 0.5).value)
    np.save(tmp_path / "a.npy", value)
    path, changes = tmp_path / f"a.{dtype}", {"rows": Rows.BOTTOM_UP}
    if dtype == "vti":
        import uvw

        with uvw.ImageData(str(path), [(0.0, 60.0), (0.0, 40.0)], [121, 81]) as file:
            file.addCellData(uvw.DataArray(value.T, [0, 1], "density"), "binary")
        changes = {"rows": None, "samples": None}
    elif dtype == "npz":
        np.savez_compressed(path, density=value)
    elif dtype == "csv":
        np.savetxt(path, value, delimiter=",", fmt="%.17g")
    else:
        import tifffile

        tifffile.imwrite(path, value, photometric="minisblack")  # 64 bits
    same_graph(graph_of(path, **changes), graph_of(tmp_path / "a.npy", rows=Rows.BOTTOM_UP))


def test_areas_of_shapes_by_closed_form(tmp_path):
    circle = dxf(tmp_path / "c.dxf", lambda space: space.add_circle((30, 20), 9))
    assert area_mm2(circle) == pytest.approx(math.pi * 81, rel=2e-3)
    ring = dxf(tmp_path / "r.dxf", lambda space: (space.add_circle((30, 20), 9), space.add_circle((30, 20), 5)))
    assert area_mm2(ring) == pytest.approx(math.pi * (81 - 25), rel=2e-3)
    ellipse = dxf(tmp_path / "e.dxf", lambda space: space.add_ellipse((30, 20), (12, 0), 0.5))
    assert area_mm2(ellipse) == pytest.approx(math.pi * 12 * 6, rel=2e-3)
    slot = dxf(
        tmp_path / "s.dxf",
        lambda space: space.add_lwpolyline(
            [(10, 17, 0), (50, 17, 1), (50, 23, 0), (10, 23, 1)], format="xyb", close=True
        ),
    )
    assert area_mm2(slot) == pytest.approx(40 * 6 + math.pi * 9, rel=2e-3)
    shapes = '<rect x="5" y="10" width="20" height="6"/><circle cx="40" cy="20" r="7"/><ellipse cx="15" cy="30" rx="8" ry="3"/>'
    assert area_mm2(svg(tmp_path / "a.svg", shapes)) == pytest.approx(120 + math.pi * 49 + math.pi * 24, rel=2e-3)


def test_lines_and_arcs_that_meet_make_an_outline(tmp_path):
    def add(space):
        space.add_line((10, 17), (50, 17))
        space.add_arc((50, 20), 3, -90, 90)
        space.add_line((10, 23), (50, 23))
        space.add_arc((10, 20), 3, 90, 270)

    assert area_mm2(dxf(tmp_path / "a.dxf", add)) == pytest.approx(40 * 6 + math.pi * 9, rel=2e-3)


def test_units_places_and_nesting(tmp_path):
    inch = dxf(tmp_path / "i.dxf", lambda space: space.add_circle((1, 0.8), 0.3), units=1)
    image = read_image(inch, SIZE_MM)
    rows, columns = image.value.shape
    y, x = (np.average(np.arange(n) + 0.5, weights=image.value.sum(axis=a)) for n, a in ((rows, 1), (columns, 0)))
    assert x * 60 / columns == pytest.approx(25.4, abs=0.01) and y * 40 / rows == pytest.approx(0.8 * 25.4, abs=0.01)
    assert "25.4 mm" in image.note
    none = dxf(tmp_path / "n.dxf", lambda space: space.add_circle((30, 20), 9), units=0)
    assert "taken as mm" in read_image(none, SIZE_MM).note
    overlap = dxf(tmp_path / "o.dxf", lambda s: (s.add_lwpolyline([(5, 5), (35, 5), (35, 10), (5, 10)], close=True), s.add_lwpolyline([(25, 5), (30, 5), (30, 30), (25, 30)], close=True)))  # fmt: skip
    assert area_mm2(overlap) == pytest.approx(30 * 5 + 20 * 5, rel=2e-3)
    target = dxf(tmp_path / "t.dxf", lambda s: [s.add_circle((30, 20), r) for r in (15, 10, 5)])
    assert area_mm2(target) == pytest.approx(math.pi * (225 - 100 + 25), rel=2e-3)


def test_blocks_are_drawn_where_they_are_put_and_text_is_told(tmp_path):
    import ezdxf

    document = ezdxf.new("R2010")
    document.units = 4
    document.blocks.new("slot").add_lwpolyline([(0, 0), (10, 0), (10, 4), (0, 4)], close=True)
    for x in (5, 25):
        document.modelspace().add_blockref("slot", (x, 10))
    document.modelspace().add_text("cooling")
    document.saveas(tmp_path / "b.dxf")
    image = read_image(tmp_path / "b.dxf", SIZE_MM)
    assert float(image.value.mean()) * 2400 == pytest.approx(80, rel=2e-3)
    assert image.remarks == ("Left out of the drawing, as no outline: 1 TEXT.",)


def test_svg_transforms_units_and_rows(tmp_path):
    turned = svg(
        tmp_path / "t.svg",
        '<g transform="translate(30 10) rotate(90)"><rect x="-5" y="-8" width="10" height="16"/></g>',
    )
    image = read_image(turned, SIZE_MM)
    rows = len(image.value)
    assert float(image.value.mean()) * 2400 == pytest.approx(160, rel=2e-3)
    y = np.average(np.arange(rows) + 0.5, weights=image.value.sum(axis=1)) * 40 / rows
    assert y == pytest.approx(30, abs=0.05), "10 mm below the upper edge"
    scaled = svg(tmp_path / "s.svg", '<rect x="100" y="100" width="200" height="60"/>', 'width="60mm" height="40mm" viewBox="0 0 600 400"')  # fmt: skip
    assert area_mm2(scaled) == pytest.approx(20 * 6, rel=2e-3)
    other = svg(tmp_path / "o.svg", '<rect x="1" y="10" width="20" height="6"/>', 'width="30mm" height="40mm"')
    layout = LayoutSettings(other, SIZE_MM, rows=None, samples=None)
    assert "image-size-differs" in {notice.code for notice in make_density(layout).notices}


def test_what_lies_off_the_sheet_is_cut_and_told(tmp_path):
    path = dxf(tmp_path / "a.dxf", lambda s: s.add_lwpolyline([(-10, 15), (70, 15), (70, 20), (-10, 20)], close=True))
    image = read_image(path, SIZE_MM)
    assert float(image.value.mean()) * 2400 == pytest.approx(300, rel=1e-6)
    assert "100.0 mm2" in image.remarks[0]


def test_the_covered_share_is_exact_for_slanted_edges():
    """A triangle over three cells: areas 1/2 - 1/8, 3/8 ... by the trapezium under y = x / 2, cell by cell."""
    ring = np.array([[0, 0], [2, 0], [2, 1], [0, 0.0]])
    np.testing.assert_allclose(covered([ring], (1, 2), (2.0, 1.0)), [[0.25, 0.75]], atol=1e-15)
    away = ring + np.array([-1.0, 0.0])
    np.testing.assert_allclose(covered([away], (1, 2), (2.0, 1.0)), [[0.75, 0.0]], atol=1e-15)


def test_random_polygons_cover_their_area():
    from shapely import Polygon, box

    rng = np.random.default_rng(11)
    for _ in range(40):
        turn = np.sort(rng.uniform(0, 2 * np.pi, 12))
        ring = np.array([30, 20]) + (rng.uniform(4, 28, 12)[:, None] * np.column_stack([np.cos(turn), np.sin(turn)]))
        polygon = Polygon(ring)
        if not polygon.is_valid:
            continue
        share = covered([np.vstack([ring, ring[:1]])], (40, 60), SIZE_MM)
        assert share.sum() == pytest.approx(polygon.intersection(box(0, 0, 60, 40)).area, rel=1e-9)


@pytest.mark.parametrize(
    ("body", "code"),
    [
        ("", "outline-none"),
        ('<path d="M5 5 L20 20 L20 5 L5 20 Z"/>', "outline-crosses"),
        ('<path fill="none" stroke="black" d="M5 5 L20 20"/>', "outline-open"),
        ('<path fill="none" d="M5 5L9 5M9 5L9 9M9 5L12 3"/>', "outline-open"),
        ('<rect x="200" y="5" width="9" height="9"/>', "outline-off-sheet"),
        ('<defs><rect id="a" width="9" height="9"/></defs><use href="#a"/>', "outline-svg-kind"),
        ("<script>1</script>", "outline-svg-kind"),
        ("<g>" * 100 + "</g>" * 100, "image-xml-unsafe"),
        ("<rect", "image-damaged"),
        ('<path d="M nan nan L 1 1 Z"/>', "outline-none"),
        ('<rect x="1" y="1" width="0.0001" height="0.0001"/>', "outline-off-sheet"),
    ],
)
def test_svg_that_is_no_drawing_of_channels_is_refused(tmp_path, body, code):
    refused(svg(tmp_path / "a.svg", body), code)


def test_svg_with_entities_or_another_root_is_refused(tmp_path):
    bomb = '<!DOCTYPE s [<!ENTITY a "aaaa"><!ENTITY b "&a;&a;&a;">]>'
    refused(svg(tmp_path / "a.svg", "<text>&b;</text>", before=bomb), "image-xml-unsafe")
    (tmp_path / "b.svg").write_text("<html/>")
    refused(tmp_path / "b.svg", "image-not-its-kind")


def test_dxf_that_is_no_drawing_of_channels_is_refused(tmp_path, monkeypatch):
    monkeypatch.setattr("morph.read.outline.MOST_RINGS", 50)
    refused(dxf(tmp_path / "a.dxf", lambda space: space.add_text("nothing")), "outline-none")
    refused(dxf(tmp_path / "b.dxf", lambda space: space.add_line((1, 1), (9, 9))), "outline-open")
    bow = [(5, 5), (20, 20), (20, 5), (5, 20)]
    refused(dxf(tmp_path / "c.dxf", lambda space: space.add_lwpolyline(bow, close=True)), "outline-crosses")
    refused(dxf(tmp_path / "d.dxf", lambda space: space.add_circle((500, 500), 9)), "outline-off-sheet")
    (tmp_path / "e.dxf").write_bytes(b"PK\x03\x04")
    refused(tmp_path / "e.dxf", "image-not-its-kind")
    thousands = lambda space: [space.add_circle((30, 20), 0.1 * k) for k in range(1, 53)]  # noqa: E731
    refused(dxf(tmp_path / "f.dxf", thousands), "image-too-large")


def test_cut_and_altered_drawings_never_fall_over(tmp_path):
    import ezdxf

    document, stream = ezdxf.new("R12"), io.StringIO()
    document.modelspace().add_circle((30, 20), 9)
    document.write(stream)
    whole = stream.getvalue().encode()
    rng = np.random.default_rng(5)
    for number in range(25):
        harm = bytearray(whole)
        if number % 2:
            harm = harm[: int(rng.integers(1, len(whole)))]
        else:
            for at in rng.integers(0, len(harm), 30):
                harm[at] = int(rng.integers(256))
        (tmp_path / "a.dxf").write_bytes(bytes(harm))
        try:
            read_image(tmp_path / "a.dxf", SIZE_MM)
        except InputError as error:
            assert error.code.startswith(("image-", "outline-"))


def test_a_drawing_needs_the_sheet_and_a_grid_that_fits(tmp_path):
    path = dxf(tmp_path / "a.dxf", lambda space: space.add_circle((30, 20), 9))
    with pytest.raises(InputError) as caught:
        read_image(path)
    assert caught.value.code == "outline-needs-size"
    with pytest.raises(InputError) as caught:
        read_image(path, SIZE_MM, 0.001)
    assert caught.value.code == "image-too-large"


@pytest.mark.parametrize(("kind", "library"), [("dxf", "ezdxf"), ("svg", "svgelements")])
def test_a_missing_library_is_told_with_its_cure(tmp_path, monkeypatch, kind, library):
    import sys

    monkeypatch.setitem(sys.modules, library, None)
    (tmp_path / f"a.{kind}").write_text("0\nSECTION\n")
    error = refused(tmp_path / f"a.{kind}", "reader-missing")
    assert library in error.expected and "drawings" in error.do


def test_a_first_job_leaves_rows_and_samples_to_a_format_that_states_them(tmp_path):
    import uvw

    from morph.cli.first_job import make_first_job
    from morph.settings.read_job import parse_job

    value = np.asarray(drawn(LINES, SIZE_MM, 0.5).value)
    with uvw.ImageData(str(tmp_path / "a.vti"), [(0.0, 60.0), (0.0, 40.0)], [121, 81]) as file:
        file.addCellData(uvw.DataArray(value.T, [0, 1], "density"), "binary")
    first = make_first_job(tmp_path / "a.vti", "a.vti", "bars", SIZE_MM)
    job = parse_job(first.text.encode(), tmp_path / "job.toml")
    assert job.layout.rows is None and job.layout.samples is None
    assert sorted(port.at_mm[0] for port in job.ports) == [0.0, 60.0]
