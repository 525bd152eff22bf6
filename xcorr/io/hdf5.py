"""The HDF5 layout of cubes and spectra, described in docs/file-formats.md."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import CoverageError, InputError
from xcorr.io.celestial import field_position
from xcorr.io.cubes import settle
from xcorr.io.frames import BARYCENTRIC_CARD, barycentric_km_s, spectral_frame
from xcorr.io.hdf5_guard import hdf5_guard
from xcorr.io.medium import decide_medium, to_vacuum
from xcorr.io.overrides import Overrides
from xcorr.io.rawtable import plain_attribute
from xcorr.io.resolving import resolving_power
from xcorr.io.samples import Samples, read_data, read_errors, read_quality
from xcorr.io.spectral_units import spectral_unit
from xcorr.provenance import sha256_of_file

SCHEMA = "xcorr-cube-1"
_DATA = ("data", "flux")
_ERRORS = {
    "variance": "variance",
    "error": "sigma",
    "sigma": "sigma",
    "noise": "sigma",
    "inverse_variance": "inverse_variance",
    "ivar": "inverse_variance",
}
_QUALITY = ("mask", "quality", "dq")

_BLOCK = 64


def is_hdf5(path: Path) -> bool:
    """Whether the file starts with the HDF5 signature."""
    with open(path, "rb") as stream:
        return stream.read(8) == b"\x89HDF\r\n\x1a\n"


def read_hdf5_cube(path: Path, overrides: Overrides) -> Cube:
    """Read an HDF5 cube or spectrum; see `xcorr.io.read_cube`."""
    import h5py

    with hdf5_guard(path), h5py.File(path, "r") as file:
        return _read(file, path, overrides)


def _attributes(item: Any) -> dict[str, Any]:
    return {str(key): plain_attribute(value) for key, value in item.attrs.items()}


def _dataset(file: Any, names: Any, role: str, override: Any) -> tuple[str, Any] | None:
    import h5py

    if override is not None:
        found = file.get(override) if isinstance(override, str) else None
        if not isinstance(found, h5py.Dataset):
            raise InputError(
                f"{role}_extension is not in the file", repr(override), f"it holds {_names(file)}"
            )
        return str(override), found
    for name in names:
        if isinstance(file.get(name), h5py.Dataset):
            return name, file[name]
    return None


def _read(file: Any, path: Path, overrides: Overrides) -> Cube:
    science = _dataset(file, _DATA, "science", overrides.science_extension)
    if science is None:
        raise InputError(f"{path.name} has no dataset data or flux", _names(file), "see docs/file-formats.md")
    data = science[1]
    if data.ndim not in (1, 3) or data.size == 0 or data.dtype.kind not in "iuf":
        raise InputError(
            "dataset of the cube must be (wave, y, x) or (wave,)", f"{data.dtype} {data.shape}", "reshape"
        )
    root = _attributes(file)
    cards = {**_group(file, "header"), **{key.upper(): value for key, value in root.items()}}
    wavelength, medium, unit, notes = _wavelength(file, path, root, overrides)
    if wavelength.shape != (data.shape[0],):
        raise InputError(
            "one wavelength per channel needed", f"{wavelength.shape} for {data.shape}", "check the file"
        )
    order = _order(file, wavelength.size, path.name)
    keep = _kept(wavelength, order, overrides)
    samples, used = _samples(file, science, keep, wavelength[keep], overrides, root)
    shape = samples.data.shape
    celestial = _group(file, "celestial") or None
    frame, frame_notes = _frame(root, overrides)
    velocity = _number(root, "barycentric_velocity_km_s")
    if velocity is not None:
        cards[BARYCENTRIC_CARD] = velocity
    z_b, velocity_notes = barycentric_km_s(cards, overrides, _position(celestial))
    resolving, r_notes = _resolving(file, keep, wavelength[keep], cards, shape, overrides)
    gain = overrides.gain_e_per_unit or _number(root, "gain_e_per_unit")
    used |= {"spectral_axis": f"wavelength in {unit}, {medium}"}
    return Cube(
        data=samples.data,
        variance=samples.variance,
        mask=samples.mask,
        wavelength_um=wavelength[keep],
        order=order[keep],
        resolving_power=resolving,
        frame=frame,
        barycentric_velocity_km_s=z_b,
        scale_exponent=samples.scale_exponent,
        unit=str(root.get("unit", "")),
        gain_e_per_unit=gain,
        telluric_corrected=_flag(overrides.telluric_corrected, root, "telluric_corrected"),
        starlight_removed=_flag(overrides.starlight_removed, root, "starlight_removed"),
        celestial_header=celestial,
        header=_group(file, "header"),
        source=path.name,
        sha256=sha256_of_file(path),
        planes=used,
        notes=(*notes, *frame_notes, *velocity_notes, *r_notes, *samples.notes),
    )


def _names(file: Any) -> str:
    """What the file holds, for messages."""
    return ", ".join(str(name) for name in file)[:80] or "nothing"


def _values(file: Any, name: str, dtype: Any = np.float64) -> NDArray[Any]:
    """A small numeric dataset, whole."""
    import h5py

    item = file[name]
    if not isinstance(item, h5py.Dataset) or item.dtype.kind not in "iuf":
        raise InputError(
            f"{name} must be a dataset of numbers", type(item).__name__, "see docs/file-formats.md"
        )
    return np.asarray(item[()], dtype=dtype)


def _order(file: Any, n_wave: int, name: str) -> NDArray[np.int16]:
    if "order" not in file:
        return np.zeros(n_wave, np.int16)
    order = _values(file, "order", np.int64)
    if order.shape != (n_wave,) or order.dtype.kind not in "iu":
        got = f"{order.dtype} {order.shape}"
        raise InputError(
            f"{name}: dataset order must hold one whole number per channel", got, "mend the file"
        )
    return order.astype(np.int16)


def _number(root: Mapping[str, Any], key: str) -> float | None:
    """A numeric root attribute; absent: None."""
    value = root.get(key)
    if value is None:
        return None
    if isinstance(value, bool) or not isinstance(value, int | float) or not abs(value) < 1e6:
        raise InputError(f"HDF5 attribute {key} must be a number", repr(value)[:40], "mend the file")
    return float(value)


def _flag(override: bool | None, root: Mapping[str, Any], name: str) -> bool:
    return bool(root.get(name, False)) if override is None else override


def _group(file: Any, name: str) -> dict[str, Any]:
    return _attributes(file[name]) if name in file else {}


def _position(celestial: Mapping[str, Any] | None) -> tuple[float, float] | None:
    needed = {f"{key}{i}" for key in ("CTYPE", "CRVAL") for i in (1, 2)}
    return field_position(celestial) if celestial is not None and needed <= set(celestial) else None


def _frame(root: Mapping[str, Any], overrides: Overrides) -> tuple[str, list[Any]]:
    words = {"observatory": "TOPOCENT", "barycentric": "BARYCENT", "heliocentric": "HELIOCEN"}
    stated = str(root.get("frame", ""))
    return spectral_frame({"SPECSYS": words.get(stated, stated)}, overrides)


def _wavelength(
    file: Any, path: Path, root: Mapping[str, Any], overrides: Overrides
) -> tuple[NDArray[np.float64], str, str, list[Any]]:
    if "wavelength" not in file:
        raise InputError(f"{path.name} has no dataset wavelength", _names(file), "see docs/file-formats.md")
    attributes = _attributes(file["wavelength"])
    unit = overrides.wavelength_unit or str(attributes.get("unit") or attributes.get("units") or "")
    if not unit:
        raise InputError(
            f"{path.name}: unit of the wavelengths unknown", "no attribute unit", "set wavelength_unit"
        )
    parsed = spectral_unit(unit)
    if parsed.kind != "length":
        raise InputError(f"{path.name}: wavelengths must be lengths", repr(unit), "convert them")
    stated = {"MEDIUM": attributes.get("medium") or root.get("medium") or ""}
    medium, notes = decide_medium(overrides.medium, "", stated, path.name)
    values = _values(file, "wavelength") * (parsed.to_si * 1e6)
    if not np.all(np.isfinite(values)) or values.size == 0 or values.min() < 0.01 or values.max() > 1000:
        raise InputError(
            f"{path.name}: wavelengths not finite or outside 0.01-1000 um", unit, "check the unit"
        )
    return to_vacuum(values, medium, overrides.air_formula), medium, unit, notes


def _kept(
    wavelength: NDArray[np.float64], order: NDArray[np.int16], overrides: Overrides
) -> slice | NDArray[np.intp]:
    """Channels inside the range and the orders asked for; a slice wherever they are contiguous."""
    keep = np.ones(wavelength.size, bool)
    if overrides.wavelength_range_um is not None:
        low, high = overrides.wavelength_range_um
        keep &= (wavelength >= low) & (wavelength <= high)
    if overrides.orders is not None:
        keep &= np.isin(order, list(overrides.orders))
    index = np.flatnonzero(keep)
    if index.size == 0:
        raise CoverageError("wavelength_range_um and orders leave no channel", "none", "mend them")
    if index[-1] - index[0] + 1 == index.size:
        return slice(int(index[0]), int(index[-1]) + 1)
    return index


def _chunks(
    dataset: Any, keep: slice | NDArray[np.intp], shape: tuple[int, int, int]
) -> Iterator[tuple[tuple[slice, ...], NDArray[Any]]]:
    index = np.arange(dataset.shape[0])[keep]
    for start in range(0, index.size, _BLOCK):
        part = index[start : start + _BLOCK]
        whole = dataset[int(part[0]) : int(part[-1]) + 1]
        values = np.asarray(whole)[part - part[0]]
        yield (
            (slice(start, start + part.size), slice(None), slice(None)),
            values.reshape(part.size, *shape[1:]),
        )


def _samples(
    file: Any,
    science: tuple[str, Any],
    keep: slice | NDArray[np.intp],
    wavelength: NDArray[np.float64],
    overrides: Overrides,
    root: Mapping[str, Any],
) -> tuple[Samples, dict[str, str]]:
    name, data = science
    shape = (wavelength.size, data.shape[1], data.shape[2]) if data.ndim == 3 else (wavelength.size, 1, 1)
    used = {"science": name}
    exponent = round(_number(root, "scale_exponent") or 0)
    samples = read_data(shape, _chunks(data, keep, shape), stored_exponent=exponent)
    quality = _dataset(file, _QUALITY, "quality", overrides.quality_extension)
    if quality is not None:
        _same_shape(quality, data)
        rule = read_quality(
            samples, _chunks(quality[1], keep, shape), overrides.quality_bad_bits, overrides.quality_good_bits
        )
        used["quality"] = f"{quality[0]}: {rule}"
    error = _dataset(file, _ERRORS, "error", overrides.error_extension)
    if error is not None:
        _same_shape(error, data)
        kind = overrides.error_kind or _ERRORS.get(error[0], "")
        if not kind:
            raise InputError(f"meaning of dataset {error[0]} unknown", "no telling name", "set error_kind")
        read_errors(samples, _chunks(error[1], keep, shape), kind, error[0], stored_exponent=exponent)
        used["error"] = f"{error[0]}: {kind}"
    settle(samples, wavelength, overrides)
    used |= {f"masked {cause}": str(count) for cause, count in samples.masked.items()}
    return samples, used


def _same_shape(named: tuple[str, Any], data: Any) -> None:
    if named[1].shape != data.shape:
        raise InputError(
            f"dataset {named[0]} has another shape", f"{named[1].shape} for {data.shape}", "mend the file"
        )


def _resolving(
    file: Any,
    keep: slice | NDArray[np.intp],
    wavelength: NDArray[np.float64],
    cards: Mapping[str, Any],
    shape: tuple[int, ...],
    overrides: Overrides,
) -> tuple[NDArray[np.float64] | None, list[Any]]:
    if overrides.resolving_power is None and "resolving_power" in file:
        values = _values(file, "resolving_power")
        if values.ndim == 0:
            return np.full(wavelength.size, float(values)), []
        n_wave = file["wavelength"].shape[0]
        if values.shape != (n_wave,) and values.shape != (n_wave, *shape[1:]):
            raise InputError(
                "dataset resolving_power has the wrong shape", f"{values.shape}", "one per channel"
            )
        return np.ascontiguousarray(values[keep]), []
    return resolving_power(overrides.resolving_power, cards, wavelength, (shape[0], shape[1], shape[2]))
