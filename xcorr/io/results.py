"""A run's answer to and from its files: ``result.h5``, the maps and the summaries."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.io.summary import plain, result_from_summary, summary_text, write_ecsv
from xcorr.results import RunResult

RESULT_SCHEMA = "xcorr-result-1"
_COMPRESS_FROM_BYTES = 65_536
_SUMMARY, _CELESTIAL = "summary_json", "celestial_header_json"


def write_result(result: RunResult, folder: Path, texts: Mapping[str, str] | None = None) -> None:
    """Write everything of `result` into an existing folder.

    Parameters
    ----------
    result : RunResult
    folder : Path
        From `xcorr.io.output.output_directory`.
    texts : mapping, optional
        Further files by name, e.g. ``{"summary.tex": ..., "run.toml": ...}``.
    """
    (folder / "summary.json").write_text(summary_text(result), encoding="utf-8")
    write_ecsv(result, folder / "summary.ecsv")
    write_hdf5(result, folder / "result.h5")
    write_maps(result, folder / "maps")
    for name, text in (texts or {}).items():
        (folder / name).write_text(text, encoding="utf-8")


# ---------------------------------------------------------------- HDF5


def write_hdf5(result: RunResult, path: Path) -> None:
    """``result.h5``: arrays by path, their attributes, the summary; equal results give equal bytes."""
    import h5py

    arrays = dict(result.arrays)
    arrays.setdefault("molecule", np.array([row.name for row in result.molecules], dtype=object))
    with h5py.File(path, "w") as file:
        file.attrs["schema"] = RESULT_SCHEMA
        for name in sorted(arrays):
            _write_array(file, name, np.asarray(arrays[name]))
        _write_array(file, _SUMMARY, np.array(summary_text(result), dtype=object))
        if result.celestial_header is not None:
            text = json.dumps(plain(dict(result.celestial_header)), sort_keys=True)
            _write_array(file, _CELESTIAL, np.array(text, dtype=object))
        for name in sorted(result.attributes):
            target = (
                file if name in ("", "/") else file.require_group(name) if name not in file else file[name]
            )
            for key in sorted(result.attributes[name]):
                target.attrs[key] = result.attributes[name][key]


def _write_array(file: Any, name: str, values: NDArray[Any]) -> None:
    if values.dtype.kind in "OU":
        values = _as_fixed_text(values)
    large = values.ndim > 0 and values.nbytes >= _COMPRESS_FROM_BYTES
    options: dict[str, Any] = {"compression": "gzip", "compression_opts": 4, "shuffle": True} if large else {}
    file.create_dataset(name, data=values, track_times=False, **options)


def _as_fixed_text(values: NDArray[Any]) -> NDArray[Any]:
    """Text of fixed length in UTF-8: the heap of variable-length text is not reproducible by promise."""
    import h5py

    encoded = [("" if item is None else str(item)).encode("utf-8") for item in values.ravel().tolist()]
    width = max((len(item) for item in encoded), default=1) or 1
    return (
        np.array(encoded, dtype=f"S{width}").reshape(values.shape).astype(h5py.string_dtype("utf-8", width))
    )


def read_result(path: str | Path) -> RunResult:
    """Read back what `write_result` wrote.

    Parameters
    ----------
    path : str or Path
        The output folder, or its ``result.h5``.

    Returns
    -------
    RunResult
        Equal to what was written; text arrays come back as dtype object.

    Raises
    ------
    InputError
        No such file, or not a result of this program.
    """
    path = Path(path)
    path = path / "result.h5" if path.is_dir() else path
    if not path.is_file():
        raise InputError("no result there", str(path), "name the output folder of xcorr run")
    import h5py

    try:
        with h5py.File(path, "r") as file:
            if file.attrs.get("schema") != RESULT_SCHEMA:
                raise InputError(
                    f"{path.name} is not a result of xcorr run", f"schema {file.attrs.get('schema')}", "check"
                )
            arrays, attributes = _read_tree(file)
    except OSError as error:
        raise InputError(f"{path.name} is not a readable HDF5 file", str(error), "run xcorr again") from error
    summary = json.loads(arrays.pop(_SUMMARY).item())
    celestial = arrays.pop(_CELESTIAL, None)
    return result_from_summary(
        summary,
        arrays=arrays,
        attributes=attributes,
        celestial_header=None if celestial is None else json.loads(celestial.item()),
    )


def _read_tree(file: Any) -> tuple[dict[str, NDArray[Any]], dict[str, dict[str, Any]]]:
    import h5py

    arrays: dict[str, NDArray[Any]] = {}
    attributes: dict[str, dict[str, Any]] = {}

    def visit(name: str, item: Any) -> None:
        if isinstance(item, h5py.Dataset):
            values = item.asstr()[()] if h5py.check_string_dtype(item.dtype) else item[()]
            arrays[name] = np.asarray(values, dtype=object) if isinstance(values, str) else np.asarray(values)
        if len(item.attrs):
            attributes[name] = dict(item.attrs)

    file.visititems(visit)
    top = {key: value for key, value in file.attrs.items() if key != "schema"}
    return arrays, attributes | ({"/": top} if top else {})


# ---------------------------------------------------------------- maps


def write_maps(result: RunResult, folder: Path) -> None:
    """``maps/NAME_snr.fits`` and ``maps/NAME_amplitude.fits``: one image each, at one velocity.

    The card VELOCITY (km/s, in the frame of SPECSYS) says which: "map_velocity_km_s" of the arrays where it
    is given, else the velocity of the molecule's maximum.
    """
    velocities = result.arrays.get("map_velocity_km_s")
    stems = file_stems([row.name for row in result.molecules])
    for kind in ("snr", "amplitude"):
        maps = result.arrays.get(f"{kind}_map")
        if maps is None:
            continue
        folder.mkdir(exist_ok=True)
        for index, (row, stem) in enumerate(zip(result.molecules, stems, strict=True)):
            velocity = float(row.velocity_km_s if velocities is None else velocities[index])
            unit = "" if kind == "snr" else row.amplitude_unit
            header = _map_header(result, row.name, velocity, kind, unit)
            _write_image(np.asarray(maps[index]), header, folder / f"{stem}_{kind}.fits")


def _map_header(result: RunResult, name: str, velocity: float, kind: str, unit: str) -> Any:
    from astropy.io import fits

    header = fits.Header()
    for key, value in (result.celestial_header or {}).items():
        header[key] = value
    header["OBJECT"] = (_ascii(result.target), "target of the run")
    header["MOLECULE"] = (_ascii(name), "template of this map")
    header["QUANTITY"] = ("signal-to-noise" if kind == "snr" else "amplitude", "what the pixels hold")
    if unit:
        header["AMPUNIT"] = (_ascii(unit), "what the amplitude is relative to")
    if np.isfinite(velocity):
        header["VELOCITY"] = (velocity, "[km/s] receding positive, of the whole map")
    if result.frame == "barycentric":
        header["SPECSYS"] = ("BARYCENT", "frame of VELOCITY")
    return header


def _write_image(values: NDArray[Any], header: Any, path: Path) -> None:
    from astropy.io import fits

    fits.PrimaryHDU(values.astype(np.float32), header=header).writeto(path, output_verify="exception")


def _ascii(text: str) -> str:
    """Text as a FITS card holds it."""
    return "".join(char if 32 <= ord(char) < 127 else "?" for char in text)[:60]


def file_stems(names: list[str]) -> list[str]:
    """Names as safe, distinct file-name stems, also where the file system ignores case.

    Examples
    --------
    >>> file_stems(["CO", "my CO", "../co", "co"])
    ['CO', 'my_CO', 'co-2', 'co-3']
    """
    stems: list[str] = []
    for name in names:
        base = re.sub(r"[^A-Za-z0-9+_.-]+", "_", name).strip("._")[:60] or "template"
        taken = {stem.lower() for stem in stems}
        stem, number = base, 1
        while stem.lower() in taken:
            number += 1
            stem = f"{base}-{number}"
        stems.append(stem)
    return stems
