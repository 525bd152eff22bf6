"""Blocks of columns on threads around kernels that release the GIL."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numba


def for_each_block(
    task: Callable[[slice], None], n_columns: int, columns_per_block: int, jobs: int | None = None
) -> None:
    """Run `task` on consecutive slices of columns, on `jobs` threads.

    The block size depends on neither jobs nor memory, so results are the same bits for any number of threads.

    Parameters
    ----------
    task : callable
        Works on one slice and writes its own part of the output.
    n_columns, columns_per_block : int
        Number of columns in all and in a block.
    jobs : int, optional
        Threads; numba's thread count (NUMBA_NUM_THREADS) by default.
    """
    slices = [slice(k, min(k + columns_per_block, n_columns)) for k in range(0, n_columns, columns_per_block)]
    threads = min(jobs or numba.get_num_threads(), len(slices))
    if threads <= 1:
        for block in slices:
            task(block)
        return
    with ThreadPoolExecutor(threads) as pool:
        for future in [pool.submit(task, block) for block in slices]:
            future.result()
