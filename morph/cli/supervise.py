"""A long command in a process of its own, so that Ctrl-C ends it within two seconds wherever it is.

Python answers a signal only between two of its own steps, and one call into a geometry library can
take several seconds. The command therefore runs in a child; this process only waits, passes signals
on, gives the child a moment to tidy up, and then ends it. A build writes nothing before its last
moment, so there is nothing to lose.
"""

from __future__ import annotations

import os
import signal
import sys
import time
from collections.abc import Callable
from types import FrameType
from typing import NoReturn

PATIENCE_S = 1.2
"""How long a child may take to end by itself after a signal."""

_POLL_S = 0.02
_DIE_WITH_PARENT = 1  # prctl's PR_SET_PDEATHSIG


class _Signalled(BaseException):
    """Leaves a wait when a signal arrives."""

    def __init__(self, number: int) -> None:
        self.number = number


def can_supervise() -> bool:
    """Returns whether this system can run a command in a child that shares everything loaded so far."""
    return hasattr(os, "fork") and os.name == "posix"


def run_supervised(work: Callable[[], int], clean: Callable[[int], None]) -> int:
    """Runs `work` in a child process and returns its exit status.

    Args:
        work: the command; it prints its own messages and returns its status.
        clean: called with the child's process id when the child had to be ended by force.

    Returns:
        The child's status; 128 plus the signal's number when a signal ended it.
    """
    sys.stdout.flush()
    sys.stderr.flush()
    parent = os.getpid()
    child = os.fork()
    if child == 0:
        _be_child(work, parent)
    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, _raise)
    try:
        _, status = os.waitpid(child, 0)
    except _Signalled as stop:
        for number in (signal.SIGINT, signal.SIGTERM):
            signal.signal(number, signal.SIG_IGN)
        return _stop(child, stop.number, clean)
    return _exit_status(status)


def _raise(number: int, _frame: FrameType | None) -> NoReturn:
    raise _Signalled(number)


def _be_child(work: Callable[[], int], parent: int) -> NoReturn:
    """Runs `work` and ends this process; a traceback is printed as ever."""
    _end_with(parent)
    signal.signal(signal.SIGINT, _interrupt_once)
    status = 1
    try:
        status = work()
        sys.stdout.flush()
    except SystemExit as stop:
        status = stop.code if isinstance(stop.code, int) else 1
    except BrokenPipeError:
        status = 1
    except BaseException:
        sys.excepthook(*sys.exc_info())
    finally:
        sys.stderr.flush()
        os._exit(status)


def _interrupt_once(_number: int, _frame: FrameType | None) -> NoReturn:
    """Raises KeyboardInterrupt for the first Ctrl-C; later ones must not disturb the tidying up."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    raise KeyboardInterrupt


def _end_with(parent: int) -> None:
    """Asks the system, where it can, to end this process when its parent is ended by force."""
    if sys.platform == "linux":
        import ctypes

        ctypes.CDLL(None).prctl(_DIE_WITH_PARENT, signal.SIGKILL)
        if os.getppid() != parent:
            os._exit(128 + signal.SIGKILL)


def _stop(child: int, number: int, clean: Callable[[int], None]) -> int:
    """Passes the signal on, waits a moment, ends the child by force when it is still there, returns the status."""
    os.kill(child, number)
    end = time.monotonic() + PATIENCE_S
    while time.monotonic() < end:
        done, _ = os.waitpid(child, os.WNOHANG)
        if done:
            return 128 + number
        time.sleep(_POLL_S)
    os.kill(child, signal.SIGKILL)
    os.waitpid(child, 0)
    clean(child)
    print("\nmorph: interrupted; nothing was written", file=sys.stderr)
    return 128 + number


def _exit_status(status: int) -> int:
    code = os.waitstatus_to_exitcode(status)
    if code >= 0:
        return code
    if code == -signal.SIGKILL:
        print("\nmorph: the system ended the build by force, as it does when memory runs out", file=sys.stderr)
    return 128 - code
