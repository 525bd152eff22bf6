"""One level of parallelism with the same bits for any number of threads."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

import numba
from threadpoolctl import threadpool_limits


@contextmanager
def limited_threads(jobs: int) -> Iterator[None]:
    """BLAS on one thread (its bits depend on the number), numba kernels on `jobs` (theirs do not)."""
    before = numba.get_num_threads()
    numba.set_num_threads(max(1, min(jobs, numba.config.NUMBA_NUM_THREADS)))
    try:
        with threadpool_limits(1):
            yield
    finally:
        numba.set_num_threads(before)
