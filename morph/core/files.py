"""Result folders that are written whole or not at all.

All files go into a new hidden folder first, and are moved into place at the end. It lies beside a
target that does not exist yet, and becomes it by one rename; it lies inside one that does, because
that may be a disk of its own, and its files are moved one by one under a lock, every replaced file
being put back when a move fails. Whatever happens, the hidden folder is removed.
"""

from __future__ import annotations

import errno
import itertools
import os
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import NoReturn

from morph.core.errors import ExportError

_NO_SPACE = {errno.ENOSPC, getattr(errno, "EDQUOT", errno.ENOSPC), errno.EFBIG}
_STAGE_NUMBER = itertools.count()


def write_folder(target: Path, files: Mapping[str, bytes], *, force: bool = False) -> list[Path]:
    """Writes `files` into the folder `target`, all or none, and returns their paths sorted by name.

    Args:
        target: the folder; it is created, and so is its parent folder. An existing empty folder is used.
        files: plain file names and their content.
        force: an existing folder that is not empty is used too; only files of these names are replaced.

    Raises:
        ExportError: the folder is not empty (without `force`), is a file, cannot be written, or the disk is full.
    """
    for name in files:
        if not name or Path(name).name != name or name.startswith("."):
            raise ValueError(f"not a plain file name: {name!r}")
    require_target(target, force=force)
    folder = target.resolve()
    with _made_parent(folder), _staging(folder) as stage:
        try:
            for name in sorted(files):
                (stage / name).write_bytes(files[name])
            _publish(stage, folder, sorted(files), force=force)
        except OSError as error:
            _refuse(error, target)
    return [target / name for name in sorted(files)]


def require_target(target: Path, *, force: bool) -> None:
    """Raises the ExportError that `write_folder` would end with, as far as it can be known before a long build.

    Raises:
        ExportError: as for `write_folder`.
    """
    try:
        folder = target.resolve()
        if folder.is_dir():
            if not force and not _is_empty(folder):
                raise _not_empty(target)
            _require_writable(folder, target)
            return
        if folder.exists():
            raise ExportError(
                "output-is-a-file",
                expected="a folder for the results",
                found="a file of that name",
                where=str(target),
                do="Choose another folder with --out.",
            )
        _require_parent(folder, target)
    except (OSError, ValueError, RuntimeError) as error:
        if isinstance(error, OSError):
            _refuse(error, target)
        raise _unwritable(target, "a path the system does not accept") from error


def require_file(target: Path, *, force: bool) -> None:
    """Raises unless the file `target` can be written: new (or replaced, with `force`), in an existing folder.

    Raises:
        ExportError: the file exists (without `force`), is a folder, or its folder is missing or cannot be written.
    """
    try:
        if target.is_dir():
            raise ExportError(
                "output-is-a-folder",
                expected="the name of a file",
                found="a folder of that name",
                where=str(target),
                do="Choose another file name with --out.",
            )
        if target.exists() and not force:
            raise ExportError(
                "output-exists",
                expected="a new file",
                found="an existing one",
                where=str(target),
                do="Give --force to replace it, or choose another name with --out.",
            )
        if not target.parent.is_dir():
            raise _no_parent(target, target.parent.name)
        _require_writable(target.parent, target)
    except OSError as error:
        _refuse(error, target)
    except ValueError as error:
        raise _unwritable(target, "a path the system does not accept") from error


def write_file(target: Path, content: bytes, *, force: bool = False) -> None:
    """Writes one file, whole or not at all.

    Raises:
        ExportError: as for `require_file`, or the disk is full.
    """
    require_file(target, force=force)
    with _staging(target) as stage:
        try:
            part = stage / "whole"
            part.write_bytes(content)
            part.replace(target)
        except OSError as error:
            _refuse(error, target)


def _require_parent(folder: Path, target: Path) -> None:
    parent = folder.parent
    if parent.is_dir():
        _require_writable(parent, target)
    elif parent.exists() or not parent.parent.is_dir():
        raise _no_parent(target, parent.name if parent.exists() else parent.parent.name)
    else:
        _require_writable(parent.parent, target)


def _require_writable(folder: Path, target: Path) -> None:
    if not os.access(folder, os.W_OK | os.X_OK):
        raise _unwritable(target, "a folder this user may not write into")


def _is_empty(folder: Path) -> bool:
    """Returns whether `folder` holds nothing but the hidden folders of runs that are writing just now."""
    return all(entry.name.startswith(_stage_prefix(folder)) for entry in folder.iterdir())


def _not_empty(target: Path) -> ExportError:
    return ExportError(
        "output-not-empty",
        expected="a new or an empty folder",
        found="a folder with files in it",
        where=str(target),
        do="Give --force to replace the results in it, or choose another folder with --out.",
    )


def _no_parent(target: Path, missing: str) -> ExportError:
    return ExportError(
        "output-parent-missing",
        expected="an existing folder to write into",
        found=f"no folder {missing}",
        where=str(target),
        do="Create it first, or choose another place with --out.",
    )


def _unwritable(target: Path, found: str, *, denied: bool = False) -> ExportError:
    return ExportError(
        "output-unwritable",
        expected="a folder that can be written",
        found=found,
        where=str(target),
        do=("Change its permissions, or choose" if denied else "Choose") + " another folder with --out, on a disk.",
    )


def _refuse(error: OSError, target: Path) -> NoReturn:
    if error.errno in _NO_SPACE:
        raise ExportError(
            "output-disk-full",
            expected="room for the results on the disk",
            found=error.strerror or "no space left",
            where=str(target),
            do="Free some space, or choose a folder on another disk with --out; nothing was left behind.",
        ) from error
    denied = error.errno in (errno.EACCES, errno.EPERM)
    raise _unwritable(target, error.strerror or type(error).__name__, denied=denied) from error


@contextmanager
def _made_parent(folder: Path) -> Iterator[None]:
    """Makes the parent of `folder` when it is missing, and takes it away again when the block fails."""
    made = False
    try:
        if not folder.parent.is_dir():
            folder.parent.mkdir(exist_ok=True)
            made = True
        yield
    except BaseException as error:
        if made:
            with suppress(OSError):
                folder.parent.rmdir()
        if isinstance(error, OSError):
            _refuse(error, folder)
        raise


@contextmanager
def _staging(folder: Path) -> Iterator[Path]:
    """Makes a hidden folder that no other run has, beside `folder` or inside when it exists, and removes it again."""
    stage = _new_folder(folder)
    try:
        yield stage
    finally:
        shutil.rmtree(stage, ignore_errors=True)


def _stage_prefix(folder: Path) -> str:
    return f".{folder.name[:64]}.partial-"


def _new_folder(folder: Path) -> Path:
    base = folder if folder.is_dir() else folder.parent
    while True:  # a number is never used twice: a published stage's name must not be taken by another thread
        stage = base / f"{_stage_prefix(folder)}{os.getpid()}-{next(_STAGE_NUMBER)}"
        try:
            stage.mkdir()
        except FileExistsError:
            continue
        return stage


def remove_partial(target: Path, process: int) -> None:
    """Removes the hidden folders that the ended process `process` left beside `target` or in it."""
    with suppress(OSError):
        folder = target.resolve()
        places = [folder.parent, *(entry for entry in folder.parent.iterdir() if entry.is_dir())]
        for place in places:
            for stage in place.glob(f".*.partial-{process}-*"):
                shutil.rmtree(stage, ignore_errors=True)


def _publish(stage: Path, folder: Path, names: list[str], *, force: bool) -> None:
    if not folder.exists():
        with suppress(FileExistsError, NotADirectoryError):
            _rename_new(stage, folder)
            return
    with _locked(folder):
        if not force and not _is_empty(folder):
            raise _not_empty(folder)
        _move_in(stage, folder, names)


def _rename_new(stage: Path, folder: Path) -> None:
    try:
        stage.rename(folder)
    except OSError as error:
        if error.errno in {errno.ENOTEMPTY, errno.EEXIST}:  # another run was faster
            raise FileExistsError(*error.args) from error
        raise


def _move_in(stage: Path, folder: Path, names: list[str]) -> None:
    """Moves files from `stage` into `folder`; puts the old ones back when one cannot be moved."""
    old = stage / ".replaced"
    old.mkdir()
    saved: list[str] = []
    moved: list[str] = []
    try:
        for name in names:
            there = folder / name
            if there.is_dir() and not there.is_symlink():
                raise ExportError(
                    "output-in-the-way",
                    expected=f"a file or nothing at {name}",
                    found="a folder of that name",
                    where=str(there),
                    do="Remove or rename it, or choose another folder with --out.",
                )
            if there.exists() or there.is_symlink():
                saved.append(name)
                there.replace(old / name)
            moved.append(name)
            (stage / name).replace(there)
    except BaseException:
        for name in moved:
            with suppress(OSError):
                (folder / name).unlink()
        for name in saved:
            with suppress(OSError):
                (old / name).replace(folder / name)
        raise


@contextmanager
def _locked(folder: Path) -> Iterator[None]:
    """Holds an advisory lock on `folder` where the system has one, so that two runs do not mix their files."""
    try:
        import fcntl
    except ImportError:  # no such locks on this platform: the moves still replace whole files
        yield
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX)
        yield
    finally:
        os.close(handle)
