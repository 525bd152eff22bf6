"""``summary.json`` and ``summary.ecsv``: the answer of a run as text, key by key."""

from __future__ import annotations

import dataclasses
import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from xcorr.errors import InputError, Note
from xcorr.results import SUMMARY_SCHEMA, InputFile, MoleculeResult, NullSummary, RunResult

_MOLECULE_KEYS = tuple(item.name for item in dataclasses.fields(MoleculeResult) if item.name != "extra")
_TEXT_KEYS = ("name", "template", "amplitude_unit", "verdict")
_UNITS = {"velocity_km_s": "km / s", "velocity_err_km_s": "km / s"}


def plain(value: Any) -> Any:
    """A value as strict JSON knows it: no NumPy types, NaN and infinities as null, mappings by text keys."""
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray | list | tuple):
        return [plain(item) for item in value]
    if isinstance(value, np.generic):
        value = value.item()
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {item.name: plain(getattr(value, item.name)) for item in dataclasses.fields(value)}
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    return None if isinstance(value, float) and not math.isfinite(value) else value


def summary_of(result: RunResult) -> dict[str, Any]:
    """The content of ``summary.json``, keys in their documented order, additions last."""
    summary = {
        "schema": SUMMARY_SCHEMA,
        "target": result.target,
        "frame": result.frame,
        "molecules": [_molecule(row) for row in result.molecules],
        "warnings": plain(result.warnings),
        "inputs": plain(result.inputs),
        "settings_sha256": result.settings_sha256,
        "seed": plain(result.seed),
        "versions": plain(result.versions),
    }
    return summary | {key: plain(item) for key, item in result.extra.items() if key not in summary}


def _molecule(row: MoleculeResult) -> dict[str, Any]:
    known = {key: plain(getattr(row, key)) for key in _MOLECULE_KEYS}
    return known | {key: plain(item) for key, item in row.extra.items() if key not in known}


def summary_text(result: RunResult) -> str:
    """``summary.json`` as text."""
    return json.dumps(summary_of(result), indent=2, allow_nan=False, ensure_ascii=False) + "\n"


def result_from_summary(summary: Mapping[str, Any], **arrays: Any) -> RunResult:
    """The inverse of `summary_of`; `arrays` are the remaining fields of `RunResult`.

    Raises
    ------
    InputError
        The summary is of another schema or incomplete.
    """
    if summary.get("schema") != SUMMARY_SCHEMA:
        raise InputError("summary of another schema", repr(summary.get("schema")), f"need {SUMMARY_SCHEMA}")
    known = (
        "schema",
        "target",
        "frame",
        "molecules",
        "warnings",
        "inputs",
        "settings_sha256",
        "seed",
        "versions",
    )
    try:
        return RunResult(
            target=summary["target"],
            frame=summary["frame"],
            molecules=tuple(_molecule_from(row) for row in summary["molecules"]),
            warnings=tuple(Note(**item) for item in summary["warnings"]),
            inputs=tuple(InputFile(**item) for item in summary["inputs"]),
            settings_sha256=summary["settings_sha256"],
            seed=summary["seed"],
            versions=summary["versions"],
            extra={key: item for key, item in summary.items() if key not in known},
            **arrays,
        )
    except (KeyError, TypeError) as error:
        raise InputError("summary is incomplete", str(error), "write it anew with xcorr run") from error


def _molecule_from(row: Mapping[str, Any]) -> MoleculeResult:
    values: dict[str, Any] = {}
    for key in _MOLECULE_KEYS:
        value = row[key]
        if key == "null":
            value = (
                None if value is None else NullSummary(*(_number(value[part]) for part in ("mean", "std")))
            )
        elif key == "position_xy":
            value = None if value is None else (_number(value[0]), _number(value[1]))
        elif key not in _TEXT_KEYS and value is None:
            value = math.nan
        values[key] = value
    return MoleculeResult(
        **values, extra={key: item for key, item in row.items() if key not in _MOLECULE_KEYS}
    )


def _number(value: float | None) -> float:
    return math.nan if value is None else float(value)


def write_ecsv(result: RunResult, path: Path) -> None:
    """``summary.ecsv``: one row per molecule, with units; additions of the rows stay in the JSON."""
    from astropy.table import Table

    rows = []
    for row in result.molecules:
        values = {key: getattr(row, key) for key in _MOLECULE_KEYS if key not in ("null", "position_xy")}
        values["null_mean"] = row.null.mean if row.null else math.nan
        values["null_std"] = row.null.std if row.null else math.nan
        values["x"], values["y"] = row.position_xy or (math.nan, math.nan)
        rows.append(values)
    table = Table(rows=rows, meta={"schema": SUMMARY_SCHEMA, "target": result.target, "frame": result.frame})
    for name, unit in _UNITS.items():
        table[name].unit = unit
    table.write(path, format="ascii.ecsv")
