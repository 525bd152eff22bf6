"""1-D files to `Cube` (one spaxel, orders one after the other) and to `Template`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import CoverageError, InputError
from xcorr.io.columns import Block, Columns, read_columns
from xcorr.io.cubes import kept_cards, settle
from xcorr.io.frames import barycentric_km_s, spectral_frame
from xcorr.io.overrides import Overrides
from xcorr.io.resolving import resolving_power
from xcorr.io.samples import read_data, read_errors, read_quality
from xcorr.provenance import sha256_of_file

_ALL = (slice(None), slice(None), slice(None))


def read_columns_spectrum(path: Path, overrides: Overrides) -> Cube:
    """Read a 1-D table or image-row file; see `xcorr.io.read_spectrum`."""
    columns = read_columns(
        path,
        wavelength_unit=overrides.wavelength_unit,
        medium=overrides.medium,
        air_formula=overrides.air_formula,
        extension=overrides.science_extension,
        error_kind=overrides.error_kind,
    )
    blocks = _chosen(columns, overrides, path.name)
    wavelength = np.concatenate([block.wavelength for _, block in blocks])
    order = np.concatenate([np.full(block.wavelength.size, i, np.int16) for i, block in blocks])

    def joined(name: str) -> NDArray[Any] | None:
        parts = [getattr(block, name) for _, block in blocks]
        return None if any(part is None for part in parts) else np.concatenate(parts)

    flux, error, flag, r = joined("flux"), joined("error"), joined("flag"), joined("resolving")
    if flux is None:
        raise InputError(f"{path.name} has no flux column", columns.form, "name it flux")
    shape = (wavelength.size, 1, 1)
    samples = read_data(shape, [(_ALL, flux.reshape(shape))])
    used = {"science": columns.form, "wavelengths": f"{columns.wavelength_unit}, {columns.medium}"}
    if flag is not None:
        bits = (overrides.quality_bad_bits, overrides.quality_good_bits)
        used["quality"] = "flag column: " + read_quality(samples, [(_ALL, flag.reshape(shape))], *bits)
    if error is not None:
        kind = columns.error_kind or "sigma"
        read_errors(samples, [(_ALL, error.reshape(shape))], kind, "error column")
        used["error"] = f"error column: {kind}"
    settle(samples, wavelength, overrides)
    used |= {f"masked {cause}": str(count) for cause, count in samples.masked.items()}

    frame, frame_notes = spectral_frame(_with_frame(columns.meta), overrides)
    z_b, velocity_notes = barycentric_km_s(columns.meta, overrides, None)
    resolving, r_notes = resolving_power(overrides.resolving_power, columns.meta, wavelength, shape)
    if resolving is None and r is not None:
        resolving = np.asarray(r, dtype=np.float64)
    return Cube(
        data=samples.data,
        variance=samples.variance,
        mask=samples.mask,
        wavelength_um=wavelength,
        order=order,
        resolving_power=resolving,
        frame=frame,
        barycentric_velocity_km_s=z_b,
        scale_exponent=samples.scale_exponent,
        unit=columns.flux_unit,
        gain_e_per_unit=overrides.gain_e_per_unit,
        telluric_corrected=bool(overrides.telluric_corrected),
        starlight_removed=bool(overrides.starlight_removed),
        header=kept_cards(columns.meta),
        source=path.name,
        sha256=sha256_of_file(path),
        planes=used,
        notes=(*columns.notes, *frame_notes, *velocity_notes, *r_notes, *samples.notes),
    )


def _with_frame(meta: Any) -> dict[str, Any]:
    """Text and ECSV files may say `frame`; FITS says SPECSYS."""
    words = {"observatory": "TOPOCENT", "barycentric": "BARYCENT", "heliocentric": "HELIOCEN"}
    frame = words.get(str(meta.get("FRAME", "")).strip().lower())
    return {**meta, **({"SPECSYS": frame} if frame and "SPECSYS" not in meta else {})}


def _chosen(columns: Columns, overrides: Overrides, name: str) -> list[tuple[int, Block]]:
    """(file index, block) of the orders kept, cut to the wavelength range."""
    wanted = range(len(columns.blocks)) if overrides.orders is None else sorted(set(overrides.orders))
    if any(i >= len(columns.blocks) for i in wanted):
        raise InputError(f"{name}: no such order", f"{list(wanted)} of {len(columns.blocks)}", "count from 0")
    chosen = [(i, _cut(columns.blocks[i], overrides)) for i in wanted]
    kept = [(i, block) for i, block in chosen if block.wavelength.size]
    if not kept:
        low, high = overrides.wavelength_range_um or (0.0, 0.0)
        raise CoverageError(
            f"{name}: wavelength_range_um leaves no channel", f"{low}-{high} um", "mend the range"
        )
    return kept


def _cut(block: Block, overrides: Overrides) -> Block:
    if overrides.wavelength_range_um is None:
        return block
    low, high = overrides.wavelength_range_um
    inside = (block.wavelength >= low) & (block.wavelength <= high)

    def cut(values: Any) -> Any:
        return None if values is None else values[inside]

    return Block(
        block.wavelength[inside],
        cut(block.flux),
        cut(block.error),
        cut(block.flag),
        cut(block.resolving),
        cut(block.reference),
    )
