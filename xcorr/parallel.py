"""Independent tasks on one or many workers, with the same bits for any number of them.

The only module that knows joblib. Linear algebra gives other bits for other thread counts, so every
task - also of a single job - runs with one BLAS and OpenMP thread; parallel work has one level.
"""

from __future__ import annotations

import os
import tempfile
import warnings
from collections.abc import Callable, Iterable, Iterator, Sequence
from functools import partial
from pathlib import Path
from typing import Any, TypeVar

from xcorr.errors import XcorrError

Task = TypeVar("Task")
Result = TypeVar("Result")


class WorkerError(XcorrError):
    """A worker process died; the message names the tasks that were running."""


def single_thread() -> Any:
    """Context manager: one BLAS and OpenMP thread in this process and thread."""
    from threadpoolctl import threadpool_limits

    return threadpool_limits(1)


def _run_one(
    function: Callable[[Task], Result], task: Task, index: int = 0, markers: str | None = None
) -> Result:
    marker = Path(markers, str(index)) if markers is not None else None
    if marker is not None:
        marker.touch()
    with single_thread():
        result = function(task)
    if marker is not None:
        marker.unlink()
    return result


def map_tasks(
    function: Callable[[Task], Result],
    tasks: Iterable[Task],
    *,
    jobs: int = 1,
    threads: bool = False,
    labels: Sequence[str] | None = None,
) -> Iterator[Result]:
    """Results of ``function(task)`` in the order of the tasks, as they become available.

    Parameters
    ----------
    function : callable
        Of one task. For processes it and the tasks must pickle (closures do).
    tasks : iterable
        Make each worth at least 0.3 s for processes; a task must not depend on `jobs`.
    jobs : int
        Number of workers; 1 runs in this process.
    threads : bool
        Threads (for kernels that release the GIL, and to share large arrays) instead of processes.
    labels : sequence of str, optional
        What an error calls each task; default "task 1 of n".

    Yields
    ------
    Result
        Bit for bit the same for any `jobs` and for threads and processes.

    Raises
    ------
    WorkerError
        A worker process was killed (most often: out of memory).
    """
    items = list(tasks)
    if jobs <= 1 or len(items) <= 1:
        yield from (_run_one(function, item) for item in items)
    elif threads:
        # BLAS has one limit for the whole process, so the caller holds it while any thread works:
        # the end of one task must not free the threads of another.
        with single_thread():
            yield from _on_workers(partial(_run_one, function), items, jobs, "threading")
    else:
        yield from _on_processes(function, items, jobs, labels)


def _on_workers(one: Callable[..., Result], items: list[Any], jobs: int, backend: str) -> Iterator[Result]:
    from joblib import Parallel, delayed

    pool = Parallel(n_jobs=min(jobs, len(items)), backend=backend, return_as="generator", batch_size=1)
    results = pool(delayed(one)(item) for item in items)
    try:
        for result in results:  # noqa: UP028 (yield from would close the pool outside the `finally`)
            yield result
    finally:
        with warnings.catch_warnings():
            # A consumer that stops early (interrupt, error) cancels the rest on purpose.
            warnings.filterwarnings("ignore", message=".*have been cancelled.*", category=UserWarning)
            results.close()


def _on_processes(
    function: Callable[[Task], Result], items: list[Task], jobs: int, labels: Sequence[str] | None
) -> Iterator[Result]:
    from joblib.externals.loky.process_executor import TerminatedWorkerError

    with tempfile.TemporaryDirectory(prefix="xcorr-tasks-") as markers:

        def one(numbered: tuple[int, Task]) -> Result:
            index, item = numbered
            return _run_one(function, item, index, markers)

        try:
            yield from _on_workers(one, list(enumerate(items)), jobs, "loky")
        except TerminatedWorkerError as error:
            running = sorted(int(name) for name in os.listdir(markers))
            names = [labels[index] if labels else f"task {index + 1} of {len(items)}" for index in running]
            raise WorkerError(
                "a worker process was killed",
                f"it died during {' or '.join(names) or 'start-up'}",
                "free memory, or use fewer jobs",
            ) from error
