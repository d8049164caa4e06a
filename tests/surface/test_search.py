"""The search for a better placement: on a face with one bump it leads away from the bump."""

from pathlib import Path

import numpy as np
import pytest

from morph.settings.job import FreeformSettings, SeenFrom
from morph.surface.distortion import measure_maps
from morph.surface.lay import make_freeform
from morph.surface.search import search_placement
from tests.surface import bodies

SIZE, DEPTH_MM = (50.0, 36.0), 5.0


def bump(x, y):
    return 4.0 * np.exp(-((x - 14.0) ** 2 + y**2) / 160.0)


@pytest.fixture(scope="module")
def found():
    mesh = bodies.parametric(bodies.height_field(bump), (-70.0, 70.0), (-50.0, 50.0), 9_000, 8)
    how = FreeformSettings(
        Path("face.stl"), (0.0, 0.0, float(bump(0, 0))), (0, 1, 0), (0.0, 0.0, -5.0), depth_mm=DEPTH_MM
    )
    return mesh, how, search_placement(how, mesh, SIZE, SeenFrom.PART, DEPTH_MM, 20.0, 20.0)


def test_the_best_placement_leaves_the_bump(found):
    _, _, search = found
    assert len(search.tried) == 15
    own = search.tried[0]
    assert own.shift_mm == (0.0, 0.0) and own.turn_deg == 0.0
    # the bump lies right of the centre: it leaves the sheet to any side but that one
    assert search.best.shift_mm in {(-20.0, 0.0), (0.0, 20.0), (0.0, -20.0)}
    towards = min(p.length_error_max for p in search.tried if p.shift_mm == (20.0, 0.0))
    assert search.best.length_error_max == min(p.length_error_max for p in search.tried) < 0.5 * towards
    assert search.best.length_error_max < 0.5 * own.length_error_max


def test_a_proposal_written_into_the_job_gives_what_was_told(found):
    mesh, how, search = found
    best = search.best
    again = FreeformSettings(how.file, best.anchor_mm, best.up, how.metal_at_mm, depth_mm=DEPTH_MM)
    sheet = make_freeform(again, mesh, SIZE, SeenFrom.PART, DEPTH_MM)
    assert measure_maps(sheet.carrier, SIZE, DEPTH_MM).length_error_max == best.length_error_max


def test_a_turned_heading_is_counter_clockwise(found):
    left = next(p for p in found[2].tried if p.turn_deg == 20.0 and p.shift_mm == (0.0, 20.0))
    assert left.up[0] == pytest.approx(-np.sin(np.radians(20.0)), abs=0.05)


def test_placements_that_cannot_be_are_listed_with_their_fault():
    mesh = bodies.parametric(bodies.height_field(lambda x, y: 0 * x), (-40.0, 40.0), (-40.0, 40.0), 3_000, 8)
    how = FreeformSettings(Path("face.stl"), (0.0, 0.0, 0.0), (0, 1, 0), (0.0, 0.0, -5.0), depth_mm=DEPTH_MM)
    search = search_placement(how, mesh, SIZE, SeenFrom.PART, DEPTH_MM, 30.0, 10.0)
    assert search.best.shift_mm == (0.0, 0.0)
    away = [p for p in search.tried if p.shift_mm[0] == 30.0]
    assert len(away) == 3 and {p.refusal for p in away} == {"sheet-larger-than-surface"}
    assert all(p.length_error_max is None for p in away)
