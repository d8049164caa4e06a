"""A first job file for an image: valid as written, ports where the channels leave, guesses marked."""

import json
import os
from pathlib import Path

import numpy as np
import pytest

from morph.cli.main import main
from morph.core.errors import MorphError
from morph.layout.density import make_density
from morph.layout.extract import make_graph
from morph.settings.job import CoolantEnd, Role
from morph.settings.read_job import read_job
from tests.cli.scene import straight_channel, tree

pytestmark = pytest.mark.quick

LAYOUTS = sorted((Path(__file__).parent.parent / "data" / "layouts").glob("*.npy"))


def _start(folder, value, *options):
    np.save(folder / "flow map.npy", value)
    assert main(["start", "flow map.npy", *options]) == 0
    return read_job(Path("job.toml"))


@pytest.fixture
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_a_straight_channel_with_its_size_given(folder, capsys):
    # by hand: the channel is 5 mm wide and leaves the 60 x 40 sheet at the middle of both short sides
    job = _start(folder, straight_channel(), "--size-mm", "60", "40")
    assert job.name == "flow-map" and job.layout.image == Path("flow map.npy") and job.layout.size_mm == (60.0, 40.0)
    assert [(port.name, port.role) for port in job.ports] == [("feed", Role.IN), ("return", Role.OUT)]
    assert sorted(port.at_mm for port in job.ports) == [
        (0.0, pytest.approx(20.0, abs=0.3)),
        (60.0, pytest.approx(20.0, abs=0.3)),
    ]
    # half a turn at depth: radius at depth at least 60 / pi = 19.1 mm; wall to the face at least one bore of 5
    at_depth_mm = job.carrier.radius_mm - job.carrier.depth_mm
    assert 60.0 / np.pi <= at_depth_mm <= 60.0 / np.pi + 1.0
    assert job.carrier.depth_mm - 2.5 >= 5.0
    said = capsys.readouterr().out
    assert "wrote job.toml with 2 ports" in said and "next: morph build job.toml" in said
    lines = (folder / "job.toml").read_text().splitlines()
    for told in [line for line in said.splitlines() if line.startswith("  line")]:
        number, why = told.removeprefix("  line").split(":", 1)
        assert f"EDIT: {why.strip()}" in lines[int(number) - 1]


def test_without_a_size_the_mean_channel_gets_a_usual_bore(folder):
    job = _start(folder, straight_channel())
    # 80 rows of which 10 are channel: 5 mm makes a row 0.5 mm and the sheet 60 x 40; the mean width comes from
    # area and perimeter and reads up to 4 / pi too wide where channels run along the pixels, as here
    assert 0.98 * np.pi / 4 <= job.layout.size_mm[0] / 60.0 <= 1.02
    assert job.layout.size_mm[0] / job.layout.size_mm[1] == pytest.approx(1.5, rel=0.005)
    assert "EDIT: a guess" in (folder / "job.toml").read_text().splitlines()[5]


def test_dark_channels_are_believed_when_most_is_bright(folder):
    job = _start(folder, 1.0 - straight_channel(), "--size-mm", "60", "40")
    assert job.layout.channel is CoolantEnd.LOW and len(job.ports) == 2


def test_every_connected_piece_gets_a_way_in_and_a_way_out(folder):
    value = np.zeros((80, 120))
    value[10:20] = 1.0  # one channel from left to right
    value[50:60] = 1.0  # another
    value[66:80, 50:70] = 1.0  # a blind pocket at the lower edge of the image
    job = _start(folder, value, "--size-mm", "60", "40")
    assert [port.role for port in job.ports].count(Role.IN) == 2
    assert {port.name for port in job.ports} == {"feed", "feed-2", "return", "return-2"}
    graph = make_graph(make_density(job.layout), job.layout, job.ports)
    assert len(graph.branches) == 2
    assert "# seen and not declared: [30.0, 0.0] (bottom" in (folder / "job.toml").read_text()


@pytest.mark.parametrize("layout", LAYOUTS, ids=lambda path: path.stem)
def test_real_layouts_give_jobs_whose_layout_stage_passes(folder, layout):
    assert main(["start", str(layout)]) == 0
    job = read_job(folder / "job.toml")
    assert job.layout.image.resolve() == layout.resolve()
    graph = make_graph(make_density(job.layout), job.layout, job.ports)
    assert graph.branches
    assert job.layout.size_mm[0] / (2 * np.pi * (job.carrier.radius_mm - job.carrier.depth_mm)) <= 0.51


def test_an_image_no_channel_leaves_says_which_line_to_edit(folder, capsys):
    value = np.zeros((60, 60))
    value[20:30, 10:50] = 1.0
    np.save("island.npy", value)
    assert main(["start", "island.npy"]) == 0
    said = capsys.readouterr().out
    assert "a second port is missing" in said and "with 0 ports" in said
    with pytest.raises(MorphError) as caught:
        read_job(Path("job.toml"))
    assert caught.value.code == "port-none-in"


def test_an_existing_job_is_never_overwritten_without_force(folder, capsys):
    (folder / "job.toml").write_text("mine")
    np.save("density.npy", straight_channel())
    before = tree(folder)
    assert main(["start", "density.npy"]) == 1
    assert "[output-exists]" in capsys.readouterr().err and tree(folder) == before
    assert main(["start", "density.npy", "--force"]) == 0
    assert (folder / "job.toml").read_text() != "mine"


def test_the_image_is_named_from_the_job_files_folder(folder):
    (folder / "maps").mkdir()
    (folder / "jobs").mkdir()
    np.save("maps/density.npy", straight_channel())
    assert main(["start", "maps/density.npy", "--out", "jobs/lamp.toml"]) == 0
    job = read_job(folder / "jobs" / "lamp.toml")
    assert 'image = "../maps/density.npy"' in (folder / "jobs" / "lamp.toml").read_text()
    assert job.layout.image.resolve() == folder / "maps" / "density.npy"


@pytest.mark.parametrize("name", ['say "x" \\ y.npy', "Kühlung.npy", "...npy", "#.npy"])
def test_odd_image_names_survive_the_job_file(folder, name):
    np.save(name, straight_channel())
    assert main(["start", name]) == 0
    assert read_job(Path("job.toml")).layout.image == Path(name)


@pytest.mark.skipif(os.name != "posix", reason="such names exist on posix systems")
@pytest.mark.parametrize("name", [b"bad\xff.npy", b"line\nbreak.npy"])
def test_a_name_that_no_job_file_can_hold(folder, name, capsys):
    path = os.fsdecode(name)
    np.save("density.npy", straight_channel())
    Path("density.npy").rename(path)
    assert main(["start", path]) == 1
    said = capsys.readouterr().err
    assert "[start-image-name]" in said and said.count("\n") == 1
    assert not (folder / "job.toml").exists()


def test_json_lists_ports_and_lines(folder, capsys):
    np.save("density.npy", straight_channel())
    assert main(["start", "density.npy", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["job"] == "job.toml" and [port["role"] for port in told["ports"]] == ["in", "out"]
    assert all(edit["line"] > 0 and edit["why"] for edit in told["edit"])


@pytest.mark.parametrize(
    ("options", "code"),
    [
        (["--size-mm", "60", "60"], "aspect-mismatch"),
        (["--size-mm", "nan", "40"], "setting-not-finite"),
        (["--size-mm", "-60", "-40"], "setting-range"),
        (["--out", "no/such/job.toml"], "output-parent-missing"),
        (["--out", "."], "output-is-a-folder"),
    ],
)
def test_bad_options(folder, capsys, options, code):
    np.save("density.npy", straight_channel())
    before = tree(folder)
    assert main(["start", "density.npy", *options]) == 1
    assert f"[{code}]" in capsys.readouterr().err and tree(folder) == before
