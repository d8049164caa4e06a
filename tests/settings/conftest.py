"""A valid job to spoil, one setting at a time."""

import tomllib

import pytest

from morph.settings.read_job import read_job

VALID = """
name = "lamp-core"
[layout]
image = "density.npy"
size_mm = [96.0, 64.0]
[[port]]
name = "feed"
role = "in"
at_mm = [0.0, 12.0]
[[port]]
name = "return"
role = "out"
at_mm = [96.0, 50.0]
[carrier]
kind = "cylinder"
radius_mm = 30.0
metal = "toward-axis"
depth_mm = 8.0
"""


@pytest.fixture
def valid_text():
    return VALID


@pytest.fixture
def read_text(tmp_path):
    """Reads a job file of the given text."""

    def read(text):
        path = tmp_path / "job.toml"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return read_job(path)

    return read


@pytest.fixture
def read_changed(read_text):
    """Reads the valid job with lines replaced: pairs of (line as it stands, lines instead)."""

    def read(*changes):
        text = VALID
        for old, new in changes:
            assert old in text
            text = text.replace(old, new, 1)
        return read_text(text)

    assert tomllib.loads(VALID)
    return read
