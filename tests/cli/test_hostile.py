"""Hostile inputs: each ends in its own code and one sentence, leaves nothing behind, and is quick."""

import time

import pytest

from morph.cli.main import main
from morph.core.codes import explanations
from tests.cli.hostile import ALL
from tests.cli.scene import tree

pytestmark = pytest.mark.quick

SLOWEST_S = 5.0


@pytest.fixture
def no_solid(monkeypatch):
    """Fails the test when a hostile job reaches the solid stage, where kernels would compile."""
    from morph.solid import channel

    def reached(*_arguments, **_keywords):
        raise AssertionError("a hostile job reached the solid stage")

    monkeypatch.setattr(channel, "make_channel_solid", reached)


def test_there_are_enough_of_them():
    assert len(ALL) >= 60 and len({case.code for case in ALL}) >= 50


@pytest.mark.parametrize("case", ALL, ids=[f"{i:02}-{case.code}" for i, case in enumerate(ALL)])
def test_a_hostile_input_is_refused(job_folder, no_solid, capsys, case):
    case.prepare(job_folder)
    before = tree(job_folder)
    begin = time.perf_counter()
    status = main(list(case.arguments))
    seconds = time.perf_counter() - begin
    said = capsys.readouterr()
    sentence = said.err.splitlines()[-1]
    assert (status, said.out) == (1, "")
    assert f"[{case.code}]" in sentence, sentence
    assert sentence.startswith("morph: ") and "; expected " in sentence and len(sentence) < 900
    assert "Traceback" not in said.err and explanations()[case.code].kind == "error"
    assert tree(job_folder) == before
    assert seconds < SLOWEST_S
