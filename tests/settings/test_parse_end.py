"""The end of a port as a job writes it: every kind arrives, and what does not belong to it is refused."""

import pytest

from morph.core.errors import SettingError
from morph.settings.job import FaceSealEnd, PlainEnd, ThreadEnd

pytestmark = pytest.mark.quick

PORT = 'name = "feed"'
SEAL = 'end = "face-seal"\ngroove_inner_mm = 10\ngroove_outer_mm = 14.0\ngroove_depth_mm = 1.4\nland_mm = 20'


@pytest.mark.parametrize(
    ("lines", "end"),
    [
        ("", PlainEnd()),
        ('end = "plain"', PlainEnd()),
        ('end = "thread"\nthread = "G1/4"', ThreadEnd("G1/4")),
        (
            'end = "thread"\nthread = "M10x1"\nthread_depth_mm = 12\nrun_out_mm = 0\ndrill_stock_mm = 0.25\nland_mm = 18',
            ThreadEnd("M10x1", 12.0, 0.0, 0.25, 18.0),
        ),
        (SEAL, FaceSealEnd(10.0, 14.0, 1.4, 20.0)),
    ],
)
def test_every_end_arrives(read_changed, lines, end):
    job = read_changed((PORT, f"{PORT}\n{lines}"))
    assert job.ports[0].end == end and job.ports[1].end == PlainEnd()
    assert job.ports[1].end == PlainEnd()


@pytest.mark.parametrize(
    ("code", "lines", "named"),
    [
        ("setting-missing", 'end = "thread"', "thread"),
        ("setting-missing", 'end = "face-seal"\ngroove_inner_mm = 10', "groove_outer_mm"),
        ("setting-choice", 'end = "flange"', "face-seal"),
        ("setting-type", "end = 3", "end"),
        ("setting-conflict", 'thread = "G1/4"', 'end is "plain"'),
        ("setting-conflict", 'end = "plain"\nland_mm = 12', "land_mm"),
        ("setting-conflict", SEAL + '\nthread = "G1/4"', 'end is "face-seal"'),
        ("setting-conflict", 'end = "thread"\nthread = "G1/4"\ngroove_depth_mm = 2', "groove_depth_mm"),
        ("setting-range", 'end = "thread"\nthread = "G1/4"\nthread_depth_mm = 0', "thread_depth_mm"),
        ("setting-range", 'end = "thread"\nthread = "G1/4"\ndrill_stock_mm = -0.1', "drill_stock_mm"),
        ("setting-range", 'end = "thread"\nthread = "G1/4"\nrun_out_mm = 1e9', "run_out_mm"),
        ("setting-not-finite", 'end = "thread"\nthread = "G1/4"\nland_mm = nan', "land_mm"),
        ("setting-text", 'end = "thread"\nthread = ""', "thread"),
        ("setting-order", SEAL.replace("= 14.0", "= 9.0"), "groove_inner_mm"),
        ("setting-order", SEAL.replace("= 20", "= 13"), "groove_outer_mm"),
        ("setting-unknown", 'thred = "G1/4"', "thread"),
    ],
)
def test_a_wrong_end_is_refused(read_changed, code, lines, named):
    with pytest.raises(SettingError) as caught:
        read_changed((PORT, f"{PORT}\n{lines}"))
    assert caught.value.code == code and named in str(caught.value)
