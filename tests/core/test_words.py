"""Counts read as a person writes them, and a figure never reads like a limit it does not meet."""

import pytest

from morph.core.words import counted, told_apart

pytestmark = pytest.mark.quick


def test_counts():
    assert counted(1, "body", "bodies") == "1 body" and counted(3, "body", "bodies") == "3 bodies"
    assert counted(1, "loop") == "1 loop" and counted(0, "loop") == "0 loops"


@pytest.mark.parametrize("value", [0.4999, 0.49951, 0.500001, 0.5049, 1.4996])
def test_a_figure_beside_its_limit_does_not_read_like_it(value):
    text = told_apart(value, (0.5, 1.5))
    assert float(text) != 0.5 and float(text) != 1.5 and float(text) == pytest.approx(value, abs=0.005)


def test_far_from_its_limit_two_digits_do():
    assert told_apart(1.13, (0.5, 1.5)) == "1.13" and told_apart(1.5, (1.5,)) == "1.50"
