"""One thread for linear algebra, so that a sum has one order and a result one set of bytes.

The order in which a multi-threaded BLAS adds depends on the number of threads (measured on dot,
norm, lstsq, solve and eigh); compiled kernels in morph never reduce in parallel and keep theirs.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager


@contextmanager
def single_thread() -> Iterator[None]:
    """Holds every BLAS library at one thread inside the block, and gives the threads back after it.

    Only libraries already loaded can be held: scipy brings a BLAS of its own, so it is loaded here.
    """
    import scipy.linalg  # noqa: F401
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1, user_api="blas"):
        yield
