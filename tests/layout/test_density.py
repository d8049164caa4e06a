"""The canonical density: row order, channel end, samples, aspect, and places on the sheet by hand."""

import numpy as np
import pytest

from morph.core.errors import SettingError
from morph.layout.density import make_density
from morph.settings.job import CoolantEnd, LayoutSettings, MirrorAt, Rows, Samples

pytestmark = pytest.mark.quick

VALUE = np.linspace(0, 1, 8 * 10).reshape(8, 10)


def density(tmp_path, size_mm=(10.0, 8.0), **settings):
    np.save(tmp_path / "a.npy", VALUE)
    return make_density(LayoutSettings(tmp_path / "a.npy", size_mm, **settings))


def test_first_row_lies_on_top_or_at_the_bottom(tmp_path):
    np.testing.assert_array_equal(density(tmp_path).value, VALUE[::-1])
    np.testing.assert_array_equal(density(tmp_path, rows=Rows.BOTTOM_UP).value, VALUE)


def test_low_channels_are_turned_over(tmp_path):
    found = density(tmp_path, rows=Rows.BOTTOM_UP, channel=CoolantEnd.LOW)
    np.testing.assert_array_equal(found.value, 1 - VALUE)


def test_cells_lie_half_a_pitch_in_and_nodes_on_the_corners(tmp_path):
    cells = density(tmp_path)
    assert cells.pitch_mm == (1.0, 1.0) and cells.first_mm == (0.5, 0.5)
    nodes = density(tmp_path, size_mm=(9.0, 7.0), samples=Samples.NODES)
    assert nodes.pitch_mm == (1.0, 1.0) and nodes.first_mm == (0.0, 0.0)


@pytest.mark.parametrize(
    ("size_mm", "samples"), [((8.0, 10.0), Samples.CELLS), ((10.2, 8.0), Samples.CELLS), ((10.0, 8.0), Samples.NODES)]
)
def test_pixels_that_are_not_square_are_refused(tmp_path, size_mm, samples):
    with pytest.raises(SettingError) as caught:
        density(tmp_path, size_mm=size_mm, samples=samples)
    assert caught.value.code == "aspect-mismatch"


def test_the_aspect_message_gives_the_right_height(tmp_path):
    with pytest.raises(SettingError, match="height of 8 mm"):
        density(tmp_path, size_mm=(10.0, 9.0))


def test_one_percent_is_allowed(tmp_path):
    found = density(tmp_path, size_mm=(10.09, 8.0))
    assert found.pitch_mm == pytest.approx((1.009, 1.0))


@pytest.mark.parametrize("samples", list(Samples))
def test_a_mirrored_half_becomes_the_whole(tmp_path, samples):
    size = (10.0, 8.0) if samples is Samples.CELLS else (9.0, 7.0)
    shared = samples is Samples.NODES
    for edge, axis, turned in (
        (MirrorAt.LEFT, 1, True),
        (MirrorAt.RIGHT, 1, False),
        (MirrorAt.BOTTOM, 0, True),
        (MirrorAt.TOP, 0, False),
    ):
        found = density(tmp_path, size_mm=size, samples=samples, mirror_at=edge, rows=Rows.BOTTOM_UP)
        np.testing.assert_array_equal(found.value, np.flip(found.value, axis))
        half = VALUE.shape[axis]
        assert found.value.shape[axis] == 2 * half - shared
        kept = np.flip(found.value, axis) if turned else found.value
        np.testing.assert_array_equal(np.take(kept, range(half), axis), np.flip(VALUE, axis) if turned else VALUE)
        assert found.size_mm[1 - axis] == 2 * size[1 - axis]
