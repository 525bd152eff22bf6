"""Where things came from: digests, versions, and the data files that ship with the package."""

from __future__ import annotations

import hashlib
import json
import platform
from importlib import metadata
from pathlib import Path
from typing import Any

from xcorr.errors import InputError

_REPORTED = ("numpy", "scipy", "astropy", "numba", "h5py")


def data_path(*parts: str) -> Path:
    """Path of a shipped data file, installed or beside the package in a checkout.

    Parameters
    ----------
    *parts : str
        e.g. ``"templates", "co.h5"``.

    Raises
    ------
    InputError
        If the file is in neither place.
    """
    package = Path(__file__).resolve().parent
    for base in (package / "_data", package.parent):
        candidate = base.joinpath(*parts)
        if candidate.exists():
            return candidate
    raise InputError(f"shipped data file {'/'.join(parts)} is missing", "no such file", "reinstall xcorr")


def sha256_of_file(path: str | Path) -> str:
    """SHA-256 of a file's bytes, read in blocks."""
    digest = hashlib.sha256()
    with open(path, "rb") as stream:
        while block := stream.read(1 << 20):
            digest.update(block)
    return digest.hexdigest()


def sha256_of_json(value: Any) -> str:
    """SHA-256 of the canonical JSON form (sorted keys, no spaces) of a plain value."""
    text = json.dumps(value, sort_keys=True, separators=(",", ":"), allow_nan=True)
    return hashlib.sha256(text.encode()).hexdigest()


def versions() -> dict[str, str]:
    """Versions of the program, of Python and of the libraries the numbers depend on."""
    from xcorr import __version__

    found = {"xcorr": __version__, "python": platform.python_version()}
    found |= {name: metadata.version(name) for name in _REPORTED}
    return found
