"""Reproducible HDF5: no timestamps, fixed filters, sorted attributes."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np


def write_tables(
    path: Path, attributes: dict[str, Any], tables: dict[str, tuple[np.ndarray, str, str]]
) -> None:
    """Write one file of named arrays.

    Parameters
    ----------
    path : Path
        Overwritten.
    attributes : dict
        File attributes: text, numbers or arrays of them.
    tables : dict
        name -> (array, unit, meaning). A name may hold groups ("a/b").
    """
    with h5py.File(path, "w", track_order=False) as file:
        for key in sorted(attributes):
            file.attrs[key] = attributes[key]
        for name in sorted(tables):
            array, unit, meaning = tables[name]
            data = file.create_dataset(
                name, data=array, compression="gzip", compression_opts=9, shuffle=True, track_times=False
            )
            data.attrs["unit"] = unit
            data.attrs["meaning"] = meaning
