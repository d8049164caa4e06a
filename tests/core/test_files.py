"""Result folders are written whole or not at all, whatever goes wrong on the way."""

import errno
import os
import threading
from pathlib import Path

import pytest

from morph.core import files
from morph.core.errors import ExportError
from morph.core.files import require_target, write_folder

pytestmark = pytest.mark.quick

NEW = {"a.txt": b"new a", "b.txt": b"new b"}


def _tree(folder):
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


def _code(target, *, force=False, content=NEW):
    with pytest.raises(ExportError) as caught:
        write_folder(target, content, force=force)
    return caught.value.code


def test_a_new_folder_and_its_missing_parent_are_made(tmp_path):
    paths = write_folder(tmp_path / "out" / "lamp", NEW)
    assert paths == [tmp_path / "out" / "lamp" / "a.txt", tmp_path / "out" / "lamp" / "b.txt"]
    assert _tree(tmp_path) == {"out": None, "out/lamp": None, "out/lamp/a.txt": b"new a", "out/lamp/b.txt": b"new b"}
    if os.name == "posix":
        plain = tmp_path / "plain"
        plain.mkdir()
        assert (tmp_path / "out" / "lamp").stat().st_mode == plain.stat().st_mode


def test_an_empty_folder_is_used_and_stays_the_same_folder(tmp_path):
    target = tmp_path / "lamp"
    target.mkdir()
    before = target.stat().st_ino
    write_folder(target, NEW)
    assert _tree(target) == {"a.txt": b"new a", "b.txt": b"new b"} and target.stat().st_ino == before


def test_a_link_to_an_empty_folder_is_followed(tmp_path):
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "real")
    write_folder(tmp_path / "link", NEW)
    assert (tmp_path / "link").is_symlink() and sorted(_tree(tmp_path / "real")) == ["a.txt", "b.txt"]


def test_files_in_the_folder_need_force_and_foreign_ones_stay(tmp_path):
    (tmp_path / "a.txt").write_bytes(b"old a")
    (tmp_path / "mine.txt").write_bytes(b"mine")
    before = _tree(tmp_path)
    assert _code(tmp_path) == "output-not-empty"
    assert _tree(tmp_path) == before
    write_folder(tmp_path, NEW, force=True)
    assert _tree(tmp_path) == {"a.txt": b"new a", "b.txt": b"new b", "mine.txt": b"mine"}


def test_places_that_cannot_be_a_folder(tmp_path):
    (tmp_path / "file").write_bytes(b"x")
    assert _code(tmp_path / "file") == "output-is-a-file"
    assert _code(tmp_path / "file" / "lamp") == "output-parent-missing"
    assert _code(tmp_path / "no" / "such" / "lamp") == "output-parent-missing"
    assert _code(tmp_path / "lamp\0") == "output-unwritable"
    assert _code(tmp_path / ("x" * 300)) == "output-unwritable"
    assert _tree(tmp_path) == {"file": b"x"}


def test_a_folder_in_the_way_of_a_file_stops_everything(tmp_path):
    (tmp_path / "a.txt").write_bytes(b"old a")
    (tmp_path / "b.txt").mkdir()
    before = _tree(tmp_path)
    assert _code(tmp_path, force=True) == "output-in-the-way"
    assert _tree(tmp_path) == before


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="permissions do not bind this user")
def test_a_folder_without_write_permission(tmp_path):
    locked = tmp_path / "locked"
    locked.mkdir(mode=0o500)
    assert _code(locked / "lamp") == "output-unwritable"
    assert _code(locked) == "output-unwritable"


def test_a_folder_the_system_calls_read_only(tmp_path, monkeypatch):
    monkeypatch.setattr(files.os, "access", lambda *_: False)
    assert _code(tmp_path / "lamp") == "output-unwritable"
    assert _code(tmp_path / "new" / "lamp") == "output-unwritable"
    assert _code(tmp_path) == "output-unwritable"
    assert _tree(tmp_path) == {}


def _failing(monkeypatch, method, error, at_call):
    """Makes the given Path method raise `error` at its `at_call`-th call, then work again."""
    real, calls = getattr(Path, method), []

    def wrapped(self, *args, **keywords):
        calls.append(self)
        if len(calls) == at_call:
            raise error
        return real(self, *args, **keywords)

    monkeypatch.setattr(Path, method, wrapped)
    return calls


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT])
@pytest.mark.parametrize("at_call", [1, 2])
def test_a_full_disk_leaves_nothing(tmp_path, monkeypatch, number, at_call):
    _failing(monkeypatch, "write_bytes", OSError(number, os.strerror(number)), at_call)
    assert _code(tmp_path / "out" / "lamp") == "output-disk-full"
    assert _tree(tmp_path) == {}


def test_a_really_full_disk(tmp_path):
    if not Path("/dev/full").exists():
        pytest.skip("no /dev/full on this system")
    with pytest.raises(ExportError) as caught:
        try:
            Path("/dev/full").write_bytes(b"x")
        except OSError as error:
            files._refuse(error, tmp_path)
    assert caught.value.code == "output-disk-full"


@pytest.mark.parametrize("at_call", range(1, 6))
@pytest.mark.parametrize("error", [OSError(errno.EIO, "Input/output error"), KeyboardInterrupt()], ids=["io", "ctrl-c"])
def test_a_failing_move_puts_everything_back(tmp_path, monkeypatch, at_call, error):
    target = tmp_path / "lamp"
    target.mkdir()
    for name in ("a.txt", "b.txt", "c.txt"):
        (target / name).write_bytes(b"old " + name.encode())
    before = _tree(tmp_path)
    calls = _failing(monkeypatch, "replace", error, at_call)
    content = NEW | {"d.txt": b"new d"}  # moves: a away, a in, b away, b in, d in
    with pytest.raises((ExportError, KeyboardInterrupt)) as caught:
        write_folder(target, content, force=True)
    assert len(calls) >= at_call
    assert getattr(caught.value, "code", "interrupted") in {"output-unwritable", "interrupted"}
    assert _tree(tmp_path) == before


@pytest.mark.parametrize("method", ["write_bytes", "rename", "mkdir"])
def test_an_interrupt_leaves_nothing(tmp_path, monkeypatch, method):
    _failing(monkeypatch, method, KeyboardInterrupt(), 1)
    with pytest.raises(KeyboardInterrupt):
        write_folder(tmp_path / "out" / "lamp", NEW)
    assert _tree(tmp_path) == {}


def test_another_run_that_was_faster_is_not_overwritten(tmp_path, monkeypatch):
    target = tmp_path / "lamp"
    real = Path.rename

    def slow(self, there):
        target.mkdir()
        (target / "a.txt").write_bytes(b"theirs")
        return real(self, there)

    monkeypatch.setattr(Path, "rename", slow)
    assert _code(target) == "output-not-empty"
    assert _tree(tmp_path) == {"lamp": None, "lamp/a.txt": b"theirs"}
    monkeypatch.setattr(Path, "rename", real)


def test_two_runs_at_once_leave_the_files_of_one(tmp_path):
    target = tmp_path / "lamp"
    names = [f"f{i}" for i in range(40)]
    ends = []

    def run(mark):
        for _ in range(10):
            write_folder(target, dict.fromkeys(names, mark), force=True)
        ends.append(mark)

    threads = [threading.Thread(target=run, args=(mark,)) for mark in (b"1", b"2")]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(ends) == [b"1", b"2"]
    found = _tree(tmp_path)
    assert len({found[f"lamp/{name}"] for name in names}) == 1
    assert len(found) == 41


def test_the_early_question_agrees_with_the_write(tmp_path):
    (tmp_path / "a.txt").write_bytes(b"old a")
    with pytest.raises(ExportError) as caught:
        require_target(tmp_path, force=False)
    assert caught.value.code == "output-not-empty"
    require_target(tmp_path, force=True)
    require_target(tmp_path / "new" / "lamp", force=False)
    assert _tree(tmp_path) == {"a.txt": b"old a"}


@pytest.mark.parametrize("name", ["../a", "b/c", ".hidden", ""])
def test_only_plain_names_are_written(tmp_path, name):
    with pytest.raises(ValueError, match="plain file name"):
        write_folder(tmp_path / "lamp", {name: b""})
