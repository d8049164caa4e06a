"""Marks that hold for all tests: a long test is never part of the quick group, whatever its module says."""

import pytest


@pytest.hookimpl(tryfirst=True)
def pytest_collection_modifyitems(config, items):
    if config.option.markexpr != "quick":
        return
    slow = [item for item in items if item.get_closest_marker("slow")]
    config.hook.pytest_deselected(items=slow)
    items[:] = [item for item in items if not item.get_closest_marker("slow")]
