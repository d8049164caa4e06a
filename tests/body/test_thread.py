"""Threads against the published sizes of ISO 228-1 and ISO 724 / 965."""

import pytest

from morph.body.thread import (
    METRIC_PITCHES_MM,
    PIPE_MM,
    ThreadStandard,
    make_thread,
    thread_names,
)
from morph.core.errors import SettingError

pytestmark = pytest.mark.quick

SIZE_MM = 0.001
"""Printed to three decimals."""

# ISO 228-1, read on pages and recomputed (level A + B): pitch, major, minor D1, largest D1; the drills are from
# memory, checked to lie inside the limits.
PIPE = {
    "G1/16": (0.907, 7.723, 6.561, 6.843, 6.8),
    "G1/8": (0.907, 9.728, 8.566, 8.848, 8.8),
    "G1/4": (1.337, 13.157, 11.445, 11.890, 11.8),
    "G1/2": (1.814, 20.955, 18.631, 19.172, 19.0),
    "G5/8": (1.814, 22.911, 20.587, 21.128, 21.0),
    "G3/4": (1.814, 26.441, 24.117, 24.658, 24.5),
    "G1": (2.309, 33.249, 30.291, 30.931, 30.75),
}
# ISO 724 basic sizes: M8 to M16 read on pages and recomputed (A + B), M5 and M6 recomputed (B from memory); the
# largest D1 of 6H of M10, M12, M14 read on pages, of the others from memory (ISO 965).
METRIC = {
    "M5": (0.8, 5.0, 4.134, 4.334, 4.2),
    "M6": (1.0, 6.0, 4.917, 5.153, 5.0),
    "M8": (1.25, 8.0, 6.647, 6.912, 6.8),
    "M10": (1.5, 10.0, 8.376, 8.676, 8.5),
    "M12": (1.75, 12.0, 10.106, 10.441, 10.2),
    "M14": (2.0, 14.0, 11.835, 12.210, 12.0),
    "M16": (2.0, 16.0, 13.835, 14.210, 14.0),
}


@pytest.mark.parametrize("name", sorted(PIPE | METRIC))
def test_sizes_of_the_standards(name):
    pitch, major, minor, minor_max, drill = (PIPE | METRIC)[name]
    thread = make_thread(name)
    found = (thread.pitch_mm, thread.major_mm, thread.minor_mm, thread.minor_max_mm)
    assert found == pytest.approx((pitch, major, minor, minor_max), abs=SIZE_MM)
    assert thread.drill_mm == drill and "memory" in thread.drill_source


def test_three_eighths():
    # major 16.662 and 19 per inch are ISO 228-1 (a page, level A); D1 = d - 1.280654 P (level B)
    thread = make_thread("G3/8")
    assert thread.major_mm == 16.662 and thread.pitch_mm == pytest.approx(25.4 / 19, abs=SIZE_MM)
    assert thread.minor_mm == pytest.approx(16.662 - 1.280654 * 25.4 / 19, abs=2 * SIZE_MM)
    assert "by rule" in thread.drill_source


@pytest.mark.parametrize("name", thread_names())
def test_the_basic_profiles(name):
    """ISO 228-1: D1 = d - 1.280654 P. ISO 68-1 / 724: D1 = D - 1.082532 P, pitch diameter D - 0.649519 P."""
    thread = make_thread(name)
    pipe = thread.standard is ThreadStandard.PIPE
    per_pitch = 1.280654 if pipe else 1.082532
    assert thread.major_mm - thread.minor_mm == pytest.approx(per_pitch * thread.pitch_mm, abs=SIZE_MM)
    height = 0.640327 if pipe else 0.649519
    assert thread.major_mm - thread.pitch_diameter_mm == pytest.approx(height * thread.pitch_mm, abs=6e-4)
    assert thread.minor_mm <= thread.drill_mm <= thread.minor_max_mm < thread.pitch_diameter_mm


def test_pitches_per_inch():
    """28, 19, 14 and 11 threads per inch (ISO 228-1)."""
    per_inch = {"G1/16": 28, "G1/8": 28, "G1/4": 19, "G3/8": 19, "G1/2": 14, "G5/8": 14, "G3/4": 14, "G1": 11}
    assert set(per_inch) == set(PIPE_MM)
    for name, count in per_inch.items():
        assert make_thread(name).pitch_mm == pytest.approx(25.4 / count, abs=SIZE_MM)


def test_tolerance_of_metric_minor_diameters_follows_its_formula():
    """ISO 965-1: 230 P^0.7 um from P = 1 mm on, below 433 P - 190 P^1.22 um, rounded to preferred numbers (from memory)."""
    for name in thread_names():
        thread = make_thread(name)
        if thread.standard is ThreadStandard.METRIC:
            p = thread.pitch_mm
            micron = 230.0 * p**0.7 if p >= 1.0 else 433.0 * p - 190.0 * p**1.22
            assert 1000.0 * (thread.minor_max_mm - thread.minor_mm) == pytest.approx(micron, rel=0.045)


def test_coarse_and_fine_m5_to_m20_are_there():
    names = thread_names()
    assert len(names) == len(set(names)) and len(names) == 8 + sum(map(len, METRIC_PITCHES_MM.values()))
    # common practice, no source: D - P drills of fine threads
    for name, drill in (("M8x1", 7.0), ("M10x1", 9.0), ("M12x1.5", 10.5), ("M14x1.5", 12.5), ("M16x1.5", 14.5)):
        assert make_thread(name).drill_mm == pytest.approx(drill)
    assert make_thread("M20").drill_mm == 17.5 and make_thread("M20x1.5").drill_mm == 18.5


@pytest.mark.parametrize(
    ("written", "means"), [("M10x1.5", "M10"), ("M10X1", "M10x1"), (" G1/4 ", "G1/4"), ("M8\u00d71.0", "M8x1")]
)
def test_other_spellings(written, means):
    assert make_thread(written) == make_thread(means)


@pytest.mark.parametrize(
    ("name", "near"),
    [
        ("G1/3", "G1/4"),
        ("g1/4", "G1/4"),
        ("M9", "M8 or"),
        ("M9", "M10 or"),
        ("M10x2", "M10 or M10x1.25"),
        ("1/4", "G1/4"),
        ("M99", "M20"),
        ("", "G1/16"),
        ("M1000000000000000000000", "M1"),
        ("nan", "Known"),
    ],
)
def test_an_unknown_thread_is_told_the_nearest(name, near):
    with pytest.raises(SettingError) as caught:
        make_thread(name, "[[port]] 'feed' thread")
    assert caught.value.code == "thread-unknown" and near in caught.value.do and "'feed'" in caught.value.where
