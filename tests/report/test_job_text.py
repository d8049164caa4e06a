"""The settings on the page are a job file: read back, they are the same job."""

import dataclasses
import tomllib

import numpy as np
import pytest

from morph.core.fingerprint import fingerprint
from morph.report.job_text import job_text
from morph.settings.read_job import read_job

pytestmark = pytest.mark.quick

CYLINDER = """
name = "a-core"
[layout]
image = "d.npy"
size_mm = [60.0, 40.0]
level = 0.4375
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 12.5]
exit_mm = [1.0, 2.0, -20.0]
[[port]]
name = "return"
role = "out"
at_mm = [60.0, 30.0]
end = "thread"
thread = "G1/8"
drill_stock_mm = 0.25
[[port]]
name = "rod"
role = "access"
at_mm = [30.0, 40.0]
end = "face-seal"
groove_inner_mm = 10.0
groove_outer_mm = 14.0
groove_depth_mm = 1.4
land_mm = 18.0
[carrier]
kind = "cylinder"
radius_mm = 30.0
metal = "toward-axis"
wall_to_face_mm = 3.5
[blank]
kind = "box"
min_mm = [-40.0, -40.0, -40.0]
max_mm = [40.0, 40.0, 40.0]
port_faces = ["foot", "+x"]
stock_mm = { foot = 1.5, "+x" = 0.5 }
[[hole]]
at_mm = [0.0, 0.0, -40.0]
axis = [0.0, 0.0, 1.0]
diameter_mm = 6.0
"""
CONE = """
name = "a-cone"
[layout]
image = "d.npy"
size_mm = [60.0, 40.0]
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 12.5]
[[port]]
name = "return"
role = "out"
at_mm = [60.0, 30.0]
[carrier]
kind = "cone"
radius_mm = 40.0
half_angle_deg = 5.0
metal = "toward-axis"
depth_mm = 8.0
[section]
shape = "roofed"
bore_range_mm = [3.25, 6.0]
[blank]
kind = "cylinder"
radius_mm = 60.0
z_mm = [-40.0, 40.0]
flange = { radius_mm = 70.0, height_mm = 8.0 }
"""


@pytest.mark.parametrize("text", [CYLINDER, CONE])
def test_read_back_it_is_the_same_job(tmp_path, text):
    np.save(tmp_path / "d.npy", np.zeros((4, 6)))
    (tmp_path / "one.toml").write_text(text)
    job = read_job(tmp_path / "one.toml")
    (tmp_path / "two.toml").write_text(job_text(job))
    again = read_job(tmp_path / "two.toml")
    assert fingerprint(dataclasses.replace(again, file=job.file)) == fingerprint(job)
    assert job_text(again) == job_text(job)


def test_hostile_names_stay_inside_their_quotes(scene):
    name = 'a"\n[print]\nprocess = "x\\'
    written = tomllib.loads(job_text(scene.job(name)))
    assert written["name"] == name and written["print"]["process"] == "steel-test"
