"""One build made by hand, shared by all report tests."""

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest


def _load(name: str):
    path = Path(__file__).with_name(f"{name}.py")
    spec = importlib.util.spec_from_file_location(f"report_{name}", path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def scene():
    """The module that makes the build."""
    return _load("scene")


@pytest.fixture(scope="session")
def make_records(scene):
    """A maker of records: keywords replace parts of the hand-made build."""
    from morph.check.centreline import make_centrelines
    from morph.check.fields import make_fields
    from morph.report.records import BuildRecords

    made = scene.parts()
    lines = make_centrelines(made["plan"])
    up = np.array([0.0, 0.0, 1.0])
    fields = make_fields(lines, lines.bore_mm, made["solid"].trimmed, made["blank"], up)
    return lambda **changed: BuildRecords(**{**made, "fields": fields, **changed})


@pytest.fixture(scope="session")
def records(make_records):
    return make_records()


@pytest.fixture(scope="session")
def summary(records):
    from morph.report.summary import make_summary

    return make_summary(records)


@pytest.fixture(scope="session")
def page(records, summary):
    from morph.report.page import make_report

    return make_report(records, summary)
