"""BLAS is held to one thread inside the block, including the one scipy brings, and only there."""

import numpy as np
import pytest

from morph.core.threads import single_thread

pytestmark = pytest.mark.quick


def _blas_threads():
    from threadpoolctl import threadpool_info

    return {row["filepath"]: row["num_threads"] for row in threadpool_info() if row["user_api"] == "blas"}


def test_one_thread_inside_and_the_same_as_before_after():
    import scipy.linalg  # noqa: F401
    from threadpoolctl import threadpool_limits

    with threadpool_limits(2):
        before = _blas_threads()
        with single_thread():
            assert set(_blas_threads().values()) == {1} and len(_blas_threads()) == len(before) >= 1
        assert _blas_threads() == before


def test_the_threads_come_back_after_an_error():
    from threadpoolctl import threadpool_limits

    with threadpool_limits(2):
        before = _blas_threads()
        with pytest.raises(RuntimeError), single_thread():
            raise RuntimeError
        assert _blas_threads() == before


def test_a_sum_has_the_same_bytes_however_many_threads_are_allowed():
    from threadpoolctl import threadpool_limits

    grid = np.sin(np.arange(400.0 * 400.0)).reshape(400, 400)
    found = set()
    for count in (1, 2):
        with threadpool_limits(count), single_thread():
            found.add((grid @ grid).tobytes() + np.linalg.eigvalsh(grid @ grid.T).tobytes())
    assert len(found) == 1
