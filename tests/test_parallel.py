"""Parallel tasks: the same bits for any number of workers, and errors that say where."""

import os
import signal

import numpy as np
import pytest
from threadpoolctl import threadpool_info

from xcorr.errors import InputError
from xcorr.kernels.threads import limited_threads
from xcorr.parallel import WorkerError, map_tasks

WAYS = [{"jobs": 1}, {"jobs": 2}, {"jobs": 3}, {"jobs": 2, "threads": True}]


def product(seed):
    """A matrix product large enough that its bits depend on the number of BLAS threads."""
    block = np.random.default_rng(seed).normal(size=(300, 700)).astype(np.float32)
    return (block @ block.T).sum(axis=1)


def blas_threads(_):
    return max(pool["num_threads"] for pool in threadpool_info())


def fail_at_three(index):
    if index == 3:
        raise InputError("bad task", str(index), "mend it")
    return index


def die_at_three(index):
    if index == 3:
        os.kill(os.getpid(), signal.SIGKILL)
    return index


@pytest.mark.parametrize("way", WAYS[1:])
def test_same_bits_and_order(way):
    expected = [result.tobytes() for result in map_tasks(product, range(5), jobs=1)]
    assert [result.tobytes() for result in map_tasks(product, range(5), **way)] == expected


@pytest.mark.parametrize("way", WAYS)
def test_one_thread_inside_every_task(way):
    assert set(map_tasks(blas_threads, range(40), **way)) == {1}


def test_the_limit_ends_with_the_tasks():
    before = blas_threads(0)
    list(map_tasks(blas_threads, range(4), jobs=2, threads=True))
    list(map_tasks(blas_threads, range(4), jobs=1))
    assert blas_threads(0) == before


@pytest.mark.parametrize("way", WAYS)
def test_our_errors_arrive_whole(way):
    with pytest.raises(InputError) as caught:
        list(map_tasks(fail_at_three, range(6), **way))
    assert (caught.value.what, caught.value.got, caught.value.do) == ("bad task", "3", "mend it")


def test_a_killed_worker_names_its_task():
    labels = [f"block {index}" for index in range(6)]
    with pytest.raises(WorkerError, match="block 3"):
        list(map_tasks(die_at_three, range(6), jobs=2, labels=labels))


@pytest.mark.parametrize("way", WAYS)
def test_stopping_early_is_no_error(way):
    results = map_tasks(fail_at_three, [0, 1, 2, 4, 5], **way)
    assert next(results) == 0
    results.close()


def test_kernels_get_the_jobs_and_blas_gets_one():
    import numba

    before = blas_threads(0), numba.get_num_threads()
    with limited_threads(1):
        assert (blas_threads(0), numba.get_num_threads()) == (1, 1)
        with limited_threads(10_000):
            assert (blas_threads(0), numba.get_num_threads()) == (1, numba.config.NUMBA_NUM_THREADS)
        assert numba.get_num_threads() == 1
    assert (blas_threads(0), numba.get_num_threads()) == before


@pytest.mark.parametrize("way", WAYS)
def test_no_tasks(way):
    assert list(map_tasks(product, [], **way)) == []
