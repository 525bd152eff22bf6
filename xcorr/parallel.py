"""Independent tasks on one or many workers, with the same bits for any number of them.

The only module that knows joblib. Linear algebra gives other bits for other thread counts, so every
task - also of a single job - runs with one BLAS and OpenMP thread; parallel work has one level.
"""

from __future__ import annotations

import os
import tempfile
import threading
import warnings
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from typing import Any, TypeVar

from xcorr.errors import XcorrError

Task = TypeVar("Task")
Result = TypeVar("Result")


class WorkerError(XcorrError):
    """A worker process died; the message names the tasks that were running."""


class _SingleThread:
    """One BLAS/OpenMP thread while any task of this process runs.

    The limit is a property of the process: of several tasks in threads the first to enter sets it and
    the last to leave lifts it, or one task's end would free the threads of another.
    """

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._inside = 0
        self._limiter: Any = None

    @contextmanager
    def __call__(self) -> Iterator[None]:
        from threadpoolctl import threadpool_limits

        with self._lock:
            if self._inside == 0:
                self._limiter = threadpool_limits(1)
            self._inside += 1
        try:
            yield
        finally:
            with self._lock:
                self._inside -= 1
                if self._inside == 0:
                    self._limiter.restore_original_limits()


single_thread = _SingleThread()


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
        yield from _on_workers(partial(_run_one, function), items, jobs, "threading")
    else:
        yield from _on_processes(function, items, jobs, labels)


def _on_workers(one: Callable[..., Result], items: list[Any], jobs: int, backend: str) -> Iterator[Result]:
    from joblib import Parallel, delayed

    # inner_max_num_threads would be refused by the threading backend; _run_one limits in either case.
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
