"""Arrays kept on disk under the hash of everything they depend on. Losing the cache only costs time."""

from __future__ import annotations

import os
import tempfile
import zipfile
import zlib
from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from xcorr.provenance import sha256_of_file, sha256_of_json

_ENVIRONMENT = "XCORR_CACHE"
_CODE = ("kernels", "lines", "atmosphere")
_BROKEN = (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile, zlib.error)


def cache_folder() -> Path:
    """Folder of the cache: $XCORR_CACHE, else the user's cache folder."""
    named = os.environ.get(_ENVIRONMENT)
    if named:
        return Path(named)
    from platformdirs import user_cache_path

    return user_cache_path("xcorr", appauthor=False)


@cache
def code_digest() -> str:
    """Digest of the source files the arrays depend on: an edited program never meets old arrays."""
    package = Path(__file__).resolve().parent.parent
    files = sorted(path for name in _CODE for path in (package / name).glob("*.py"))
    return sha256_of_json([(path.name, sha256_of_file(path)) for path in files])


def load(key: str) -> dict[str, NDArray[np.float64]] | None:
    """Arrays stored under a key; None where there are none, or where the file is damaged."""
    try:
        # opened here: np.load leaves its own handle open on a truncated file. The zip CRC guards the bytes
        with (
            open(cache_folder() / f"{key}.npz", "rb") as stream,
            np.load(stream, allow_pickle=False) as stored,
        ):
            return {name: stored[name] for name in stored.files}
    except _BROKEN:
        return None


def store(key: str, arrays: dict[str, NDArray[np.float64]]) -> bool:
    """Keep arrays under a key; False, without complaint, where nothing can be written.

    The file appears whole or not at all: it is written beside its place and renamed.
    """
    folder = cache_folder()
    try:
        folder.mkdir(parents=True, exist_ok=True)
        handle, partial = tempfile.mkstemp(dir=folder, prefix=f".{key[:16]}-", suffix=".partial")
    except OSError:
        return False
    try:
        with os.fdopen(handle, "wb") as stream:
            np.savez(stream, **arrays)
        os.replace(partial, folder / f"{key}.npz")
    except OSError:
        Path(partial).unlink(missing_ok=True)
        return False
    return True
