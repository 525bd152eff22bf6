"""Faults of an HDF5 file as errors of the input; faults of our own code stay what they are."""

from __future__ import annotations

import traceback
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from xcorr.errors import InputError

# what h5py raises on damaged or unexpected contents
_FAULTS = (OSError, KeyError, RuntimeError, ValueError, TypeError, OverflowError)


@contextmanager
def hdf5_guard(path: Path) -> Iterator[None]:
    """Turn an exception raised inside h5py into an `InputError`; any other passes through.

    Damage that keeps the HDF5 library itself busy without end (broken internal heaps) cannot be caught here.
    """
    try:
        yield
    except _FAULTS as error:
        if not any("h5py" in frame.filename for frame in traceback.extract_tb(error.__traceback__)):
            raise
        lines = str(error).strip().splitlines() or [type(error).__name__]
        raise InputError(
            "HDF5 file cannot be read", f"{path.name}: {lines[0][:120]}", "check the file"
        ) from error
