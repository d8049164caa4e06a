"""How many worker threads the compiled loops may use.

The kernels release the interpreter lock and each slab writes only its own rows, so that slabs can run
side by side in ordinary threads and give the same bytes for any number of them.
"""

from __future__ import annotations


def worker_count() -> int:
    """Returns the number of threads numba is set to (NUMBA_NUM_THREADS, or set_num_threads), at least 1."""
    from numba import get_num_threads

    return max(1, int(get_num_threads()))
