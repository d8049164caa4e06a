"""Whatever stands in any key of a job, reading it ends in a Job or in one sentence, never in a traceback."""

import datetime
import json
import math
import tomllib
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from morph.core.errors import MorphError
from morph.settings.job import Job
from morph.settings.read_job import parse_job
from tests.settings.test_read_job import FULL

pytestmark = pytest.mark.quick

SCALARS = (
    st.integers(-(10**30), 10**30)
    | st.floats(allow_nan=True, allow_infinity=True)
    | st.booleans()
    | st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
    | st.sampled_from(["half", "in", "cylinder", "carrier", "foot", "freeform", "x.toml", "steel-40um", ""])
    | st.just(datetime.date(2020, 2, 29))
)
VALUES = st.recursive(
    SCALARS,
    lambda inner: (
        st.lists(inner, max_size=4) | st.dictionaries(st.sampled_from(["a", "foot", "name"]), inner, max_size=2)
    ),
    max_leaves=6,
)


def _toml(value):
    """A value as inline TOML."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return "nan" if math.isnan(value) else str(value)
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, list):
        return "[" + ", ".join(map(_toml, value)) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(key)} = {_toml(item)}" for key, item in value.items()) + "}"
    return str(value)


def _places(table, path=()):
    for key, value in table.items() if isinstance(table, dict) else enumerate(table):
        yield (*path, key)
        if isinstance(value, dict) or (isinstance(value, list) and value and isinstance(value[0], dict)):
            yield from _places(value, (*path, key))


PLACES = list(_places(tomllib.loads(FULL)))


@settings(max_examples=250, deadline=None, derandomize=True)
@given(st.lists(st.tuples(st.sampled_from(PLACES), VALUES), min_size=1, max_size=2))
def test_any_value_anywhere(changes):
    job = tomllib.loads(FULL)
    for place, value in changes:
        inside = job
        for key in place[:-1]:
            inside = inside[key] if isinstance(inside, list) or key in inside else {}
            if not isinstance(inside, dict | list):
                return
        if isinstance(inside, dict) or place[-1] < len(inside):
            inside[place[-1]] = value
    text = "\n".join(f"{json.dumps(key)} = {_toml(value)}" for key, value in job.items())
    tomllib.loads(text)
    try:
        found = parse_job(text.encode(), Path("job.toml"))
    except MorphError as error:
        assert "\n" not in str(error) and error.code and len(str(error)) < 600
    else:
        assert isinstance(found, Job)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(st.binary(max_size=200) | st.text(max_size=200).map(str.encode) | st.just(FULL.encode()).map(lambda b: b[:137]))
def test_any_bytes(content):
    with pytest.raises(MorphError):
        parse_job(content, Path("job.toml"))
