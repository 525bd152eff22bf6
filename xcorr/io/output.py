"""The output folder of a run: written beside its place, synced, then moved there in one step."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path

from xcorr.errors import OutputError


@contextmanager
def output_directory(
    path: str | Path, *, overwrite: bool = False, protect: Iterable[str | Path] = ()
) -> Iterator[Path]:
    """A folder to fill, which becomes `path` only when the block ends without an error.

    Whether `path` can be written is found out on entry, before any work. On an error or an interrupt
    nothing is left behind, and what stood at `path` before stands there still.

    Parameters
    ----------
    path : str or Path
        The final folder. Missing parents are made.
    overwrite : bool
        Replace a folder that is not empty.
    protect : iterable of path
        Files that must survive: a folder that holds one of them (an input, say) is never replaced, nor is
        one that holds the working directory or the home.

    Yields
    ------
    Path
        A sibling ``.NAME.partial-PID`` of `path`.

    Raises
    ------
    OutputError
        `path` is a file, or not empty, or must not be replaced.
    OSError
        The parent cannot be made or written.
    """
    final = Path(path).expanduser().resolve()
    check_output(final, overwrite=overwrite, protect=protect)
    parents = _make_parents(final.parent)
    partial = final.parent / f".{final.name}.partial-{os.getpid()}"
    try:
        partial.mkdir()
        yield partial
        _sync(partial)
        _move_into_place(partial, final, overwrite)
    except BaseException:
        # Also KeyboardInterrupt and the like: an interrupted run leaves nothing half-written.
        shutil.rmtree(partial, ignore_errors=True)
        _remove_empty(parents)
        raise


def check_output(final: Path, *, overwrite: bool, protect: Iterable[str | Path] = ()) -> None:
    """Refuse a place where the output must not go.

    Raises
    ------
    OutputError
    """
    if not final.name:
        raise OutputError("the output folder needs a name", str(final), "choose another --out")
    if not final.exists():
        return
    if not final.is_dir():
        raise OutputError("the output must be a folder", f"the file {final}", "choose another --out")
    if not any(final.iterdir()):
        return
    if not overwrite:
        raise OutputError(
            "the output folder exists and is not empty", str(final), "add --overwrite or choose another --out"
        )
    kept = [Path(item).resolve() for item in (*protect, Path.cwd(), os.path.expanduser("~"))]
    if held := [item for item in kept if item.is_relative_to(final)]:
        raise OutputError(
            "the output folder cannot be replaced, for it holds what must stay",
            str(held[0]),
            "choose another --out",
        )


def _make_parents(folder: Path) -> list[Path]:
    """Make missing parents; returns those made, innermost first."""
    missing = []
    while not folder.exists():
        missing.append(folder)
        folder = folder.parent
    made: list[Path] = []
    try:
        for parent in reversed(missing):
            parent.mkdir()
            made.insert(0, parent)
    except OSError:
        _remove_empty(made)
        raise
    return made


def _remove_empty(folders: Iterable[Path]) -> None:
    for folder in folders:
        try:
            folder.rmdir()
        except OSError:
            return


def _sync(folder: Path) -> None:
    """Flush every file and folder below `folder` to the disk."""
    for base, _, names in os.walk(folder):
        for name in (*names, "."):
            handle = os.open(os.path.join(base, name), os.O_RDONLY)
            try:
                os.fsync(handle)
            finally:
                os.close(handle)


def _move_into_place(partial: Path, final: Path, overwrite: bool) -> None:
    old = final.parent / f".{final.name}.replaced-{os.getpid()}"
    if overwrite and final.exists():
        os.rename(final, old)
    try:
        os.rename(partial, final)
    except OSError:
        if old.exists():
            os.rename(old, final)
        raise
    shutil.rmtree(old, ignore_errors=True)
    handle = os.open(final.parent, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
