"""A template to a file that `xcorr.io.read_template` reads back."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np

from xcorr.template import Template

TEMPLATE_SCHEMA = "xcorr-template-1"


def write_template(path: str | os.PathLike[str], template: Template) -> None:
    """Write a template as HDF5, whole or not at all; equal templates give equal bytes.

    Datasets ``wavelength`` (um, vacuum), ``flux``, ``reference_flux`` and ``flag`` (1 = not covered);
    attributes ``name``, ``kind``, ``description`` (caveats included), ``resolving_power`` where known.

    Raises
    ------
    OSError
        The file cannot be written.
    """
    import h5py

    path = Path(path)
    partial = path.with_name(f".{path.name}.partial-{os.getpid()}")
    covered = template.covered if template.covered is not None else np.ones(template.flux.size, bool)
    columns = {
        "wavelength": template.wavelength_um,
        "flux": template.flux,
        "reference_flux": template.reference_flux,
        "flag": (~covered).astype(np.uint8),
    }
    caveats = [note.message for note in template.notes]
    try:
        with h5py.File(partial, "w") as file:
            for name, values in columns.items():
                file.create_dataset(name, data=values, track_times=False)
            file["wavelength"].attrs["unit"] = "um"
            file["wavelength"].attrs["medium"] = "vacuum"
            file.attrs["schema"] = TEMPLATE_SCHEMA
            file.attrs["name"] = template.name
            file.attrs["kind"] = template.kind
            file.attrs["description"] = "; ".join([template.description, *caveats])
            if template.resolving_power is not None:
                file.attrs["resolving_power"] = template.resolving_power
        handle = os.open(partial, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
        os.replace(partial, path)
    finally:
        partial.unlink(missing_ok=True)
