"""Options that commands share, and where the log goes."""

from __future__ import annotations

import logging
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import click

Decorator = Callable[[Callable[..., Any]], Callable[..., Any]]


def _jobs(ctx: click.Context, param: click.Parameter, value: int | None) -> int | None:
    if value is not None and value < 1:
        raise click.BadParameter("must be at least 1", ctx, param)
    return value


overwrite_option = click.option("--overwrite", is_flag=True, help="Replace a folder that is not empty.")
jobs_option = click.option("--jobs", type=int, callback=_jobs, help="Number of workers.")
out_option = click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder to write.")
json_option = click.option("--json", "as_json", is_flag=True, help="Print JSON.")


def logging_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """``--quiet`` and ``--debug``."""
    function = click.option("--quiet", is_flag=True, help="Log warnings only.")(function)
    return click.option("--debug", is_flag=True, help="Log more, and show tracebacks.")(function)


class _Echo(logging.Handler):
    """Lines to whatever stderr is at that moment, so that a progress bar can move out of their way."""

    def emit(self, record: logging.LogRecord) -> None:
        print(self.format(record), file=sys.stderr)


@contextmanager
def log_to_stderr(*, quiet: bool, debug: bool) -> Iterator[None]:
    """The package's log on stderr while the block runs."""
    level = logging.DEBUG if debug else logging.WARNING if quiet else logging.INFO
    handler = _Echo()
    handler.setFormatter(logging.Formatter("xcorr: %(message)s"))
    with _attached(handler, level):
        yield


@contextmanager
def log_to_file(path: Path) -> Iterator[None]:
    """The package's log, with times, and third-party warnings in a file while the block runs."""
    handler = logging.FileHandler(path, encoding="utf-8")
    handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(name)s: %(message)s"))
    warned = logging.getLogger("py.warnings")
    warned.propagate = False
    warned.addHandler(handler)
    logging.captureWarnings(True)
    try:
        with _attached(handler, logging.DEBUG):
            yield
    finally:
        logging.captureWarnings(False)
        warned.removeHandler(handler)
        warned.propagate = True
        handler.close()


@contextmanager
def _attached(handler: logging.Handler, level: int) -> Iterator[None]:
    logger = logging.getLogger("xcorr")
    before = logger.level
    handler.setLevel(level)
    logger.setLevel(level if before == logging.NOTSET else min(level, before))
    logger.addHandler(handler)
    try:
        yield
    finally:
        logger.removeHandler(handler)
        logger.setLevel(before)


@contextmanager
def progress_bar(*, quiet: bool) -> Iterator[Callable[[int, int, str], None] | None]:
    """A callable (done, total, what) that moves a bar on a terminal; None where stderr is none."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("", total=None)

        def show(done: int, total: int, what: str) -> None:
            bar.update(task, completed=done, total=total, description=what)

        yield show
