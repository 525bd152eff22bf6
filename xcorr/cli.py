"""The command line: parse, call, print; errors become one line and an exit code.

0 done, 1 internal error, 2 usage, input or I/O, 130 or 143 interrupted. Subcommands are imported when
they are called, so that ``xcorr --help`` imports no numerical library.
"""

from __future__ import annotations

import errno
import logging
import os
import shlex
import signal
import sys
import tempfile
import traceback
from collections.abc import Sequence
from importlib import import_module
from typing import Any

import click

from xcorr import __version__
from xcorr.errors import XcorrError

DONE, INTERNAL, BAD_INPUT, INTERRUPTED, TERMINATED = 0, 1, 2, 130, 143

_COMMANDS = {
    "run": "Search every molecule of a run file and write the answer.",
    "inspect": "Print what was understood of a cube or spectrum.",
    "templates": "List or build the built-in templates.",
    "simulate": "Write a scene with known truth, and a run file for it.",
}


class Terminated(BaseException):
    """SIGTERM arrived; not an Exception, so that only cleaning up catches it."""


class _LazyGroup(click.Group):
    """Commands by name; their modules are imported when they are asked for."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        command: click.Command = import_module(f"xcorr.commands.{cmd_name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in _COMMANDS and not args[0].startswith("-"):
            ctx.fail(f"No such command '{args[0]}'.")
        return super().resolve_command(ctx, args)


@click.group(cls=_LazyGroup, no_args_is_help=False, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="xcorr")
def cli() -> None:
    """Search integral-field spectra of faint companions, molecule by molecule."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str, optional
        Default: those of the process.

    Returns
    -------
    int
        The exit code.
    """
    arguments = list(sys.argv[1:] if arguments is None else arguments)
    previous = _on_terminate(_raise_terminated)
    try:
        return _run(arguments)
    except KeyboardInterrupt:
        print("xcorr: interrupted; nothing was left behind", file=sys.stderr)
        return INTERRUPTED
    except Terminated:
        print("xcorr: terminated; nothing was left behind", file=sys.stderr)
        return TERMINATED
    finally:
        _on_terminate(previous)
        logging.captureWarnings(False)


def _run(arguments: list[str]) -> int:
    debug = "--debug" in arguments
    try:
        # Not cli.main(): that turns KeyboardInterrupt into an error of its own.
        with cli.make_context("xcorr", list(arguments)) as context:
            cli.invoke(context)
        sys.stdout.flush()
    except click.exceptions.Exit as end:
        return end.exit_code
    except click.UsageError as error:
        command = error.ctx.command_path if error.ctx else "xcorr"
        typed = shlex.join(["xcorr", *arguments])
        return _fail(error.format_message().rstrip("."), typed, f"see {command} --help", debug)
    except click.ClickException as error:
        return _fail(error.format_message().rstrip("."), "an error", "see xcorr --help", debug)
    except XcorrError as error:
        return _fail(error.what, error.got or "nothing more to say", error.do or "see docs/errors.md", debug)
    except BrokenPipeError:
        # The reader of our output (head, less) is gone: no more can be said to it.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return BAD_INPUT
    except OSError as error:
        name = error.filename if error.filename is not None else "the output"
        return _fail(f"cannot read or write {name}", error.strerror or str(error), _io_advice(error), debug)
    except Exception:
        # Not a user's error: the traceback goes to a file, for the report of a defect.
        return _internal_error(arguments, debug)
    return DONE


def _fail(what: str, got: str, do: str, debug: bool) -> int:
    if debug:
        traceback.print_exc()
    line = "; ".join(" ".join(part.split()) for part in (what, f"got {got}", do))
    print(f"xcorr: error: {line}", file=sys.stderr)
    return BAD_INPUT


def _io_advice(error: OSError) -> str:
    if error.errno == errno.ENOENT:
        return "check the path"
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return "check the permissions or choose another place"
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        return "free space or choose another place"
    return "check the path and the disk"


def _internal_error(arguments: list[str], debug: bool) -> int:
    text = traceback.format_exc()
    handle, path = tempfile.mkstemp(prefix="xcorr-error-", suffix=".log")
    with os.fdopen(handle, "w", encoding="utf-8") as log:
        log.write(f"xcorr {__version__}, Python {sys.version}\n{shlex.join(['xcorr', *arguments])}\n\n{text}")
    if debug:
        print(text, file=sys.stderr)
    last = " ".join(text.strip().splitlines()[-1].split())
    print(f"xcorr: internal error: {last}; the traceback is in {path}; please report it", file=sys.stderr)
    return INTERNAL


def _raise_terminated(signum: int, frame: Any) -> None:
    raise Terminated


def _on_terminate(handler: Any) -> Any:
    try:
        return signal.signal(signal.SIGTERM, handler)
    except ValueError:
        return signal.SIG_DFL  # not the main thread: the caller's own handling stays


if __name__ == "__main__":
    sys.exit(main())
