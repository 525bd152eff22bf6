"""``xcorr run``: search every molecule of a run file."""

from __future__ import annotations

import logging
import os
import platform
from pathlib import Path

import click

from xcorr.commands.options import (
    jobs_option,
    log_to_file,
    log_to_stderr,
    logging_options,
    out_option,
    overwrite_option,
    progress_bar,
)

log = logging.getLogger("xcorr.run")


@click.command("run")
@click.argument("run_file", metavar="RUN.toml", type=click.Path(path_type=Path))
@out_option
@overwrite_option
@jobs_option
@logging_options
def command(run_file: Path, out: Path, overwrite: bool, jobs: int | None, quiet: bool, debug: bool) -> None:
    """Search every molecule of RUN.toml and write the answer to a folder."""
    from xcorr.config import dump_toml, load_settings, named_files

    settings = load_settings(run_file).with_run(jobs=jobs)
    inputs = [run_file, *(path for _, path in named_files(settings))]

    from xcorr.io.output import output_directory
    from xcorr.io.results import write_result
    from xcorr.report.tables import latex_table, text_table

    with (
        log_to_stderr(quiet=quiet, debug=debug),
        output_directory(out, overwrite=overwrite, protect=inputs) as folder,
        log_to_file(folder / "log.txt"),
        progress_bar(quiet=quiet) as progress,
    ):
        _log_place(run_file, out, inputs)
        from xcorr.pipeline import run

        result = run(settings, jobs=settings.run.jobs, progress=progress)
        texts = {
            "summary.tex": latex_table(result),
            "run.toml": dump_toml(settings, relative_to=out.absolute()),
        }
        write_result(result, folder, texts)
    click.echo(text_table(result), nl=False)


def _log_place(run_file: Path, out: Path, inputs: list[Path]) -> None:
    """Host and absolute paths: in the log file only."""
    log.debug("host %s, process %d", platform.node(), os.getpid())
    log.debug("run file %s, output %s", run_file.absolute(), out.absolute())
    for path in inputs[1:]:
        log.debug("input %s", path)
