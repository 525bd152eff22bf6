"""Molecule-by-molecule search for faint companions in integral-field spectra.

The public names are imported on first use, so that ``import xcorr`` and
``xcorr --help`` stay fast.
"""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_PUBLIC = {
    "read_cube": "xcorr.io",
    "read_spectrum": "xcorr.io",
    "read_template": "xcorr.io",
    "run": "xcorr.pipeline",
    "inject": "xcorr.simulate",
}

__all__ = ["__version__", "inject", "read_cube", "read_spectrum", "read_template", "run"]


def __getattr__(name: str) -> Any:
    if name in _PUBLIC:
        return getattr(import_module(_PUBLIC[name]), name)
    raise AttributeError(f"module 'xcorr' has no attribute {name!r}")
