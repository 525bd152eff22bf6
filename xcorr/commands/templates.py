"""``xcorr templates``: the built-in templates, listed or written to files."""

from __future__ import annotations

import json
from pathlib import Path

import click

from xcorr.commands.options import (
    jobs_option,
    json_option,
    log_to_stderr,
    logging_options,
    out_option,
    overwrite_option,
)


@click.group("templates")
def command() -> None:
    """List or build the built-in templates."""


@command.command("list")
@json_option
@logging_options
def list_templates(as_json: bool, quiet: bool, debug: bool) -> None:
    """Print the built-in templates: range, sources, caveats."""
    with log_to_stderr(quiet=quiet, debug=debug):
        from xcorr.atmosphere import catalogue

        entries = catalogue()
    if as_json:
        from xcorr.io.summary import plain

        text = {"schema": "xcorr-templates-1", "templates": plain(entries)}
        click.echo(json.dumps(text, indent=2, allow_nan=False))
        return
    for entry in entries:
        low, high = entry.wavelength_range_um
        click.echo(f"{entry.name:<6} {low:.3f}-{high:.3f} um\n       source: {entry.source}")
        for caveat in entry.caveats:
            click.echo(f"       caveat: {caveat}")


@command.command("build")
@out_option
@click.option(
    "--range", "wavelength_range_um", type=(float, float), required=True, help="Low and high, um, vacuum."
)
@click.option("--name", "names", multiple=True, help="A built-in template, repeatable.  [default: all]")
@click.option(
    "--t-eff",
    "t_effs",
    type=float,
    multiple=True,
    default=(1200.0,),
    show_default=True,
    help="K, repeatable.",
)
@click.option(
    "--log-g", "log_gs", type=float, multiple=True, default=(4.0,), show_default=True, help="cgs, repeatable."
)
@overwrite_option
@jobs_option
@logging_options
def build(
    out: Path,
    wavelength_range_um: tuple[float, float],
    names: tuple[str, ...],
    t_effs: tuple[float, ...],
    log_gs: tuple[float, ...],
    overwrite: bool,
    jobs: int | None,
    quiet: bool,
    debug: bool,
) -> None:
    """Write built-in templates as HDF5 files that a [[template]] can name.

    The folder can be resumed: the same command makes only what is missing.
    """
    with log_to_stderr(quiet=quiet, debug=debug):
        from xcorr.commands._building import Request, build_templates

        request = Request.of(names, wavelength_range_um, t_effs, log_gs)
        for shard in build_templates(request, out, overwrite=overwrite, jobs=jobs or 1):
            click.echo(str(out / shard))
