"""What a run returns: everything that is written, and everything a redraw needs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note

VERDICTS = ("detected", "evidence", "ambiguous", "not detected")
SUMMARY_SCHEMA = "xcorr-summary-1"


@dataclass(frozen=True)
class NullSummary:
    """Raw S/N of the null sample before calibration."""

    mean: float
    std: float


@dataclass(frozen=True)
class MoleculeResult:
    """One row of the answer; the fields are the keys of ``summary.json``.

    NaN marks what does not apply (it becomes null in JSON).
    """

    name: str
    template: str
    snr: float
    snr_raw: float
    snr_conditional: float
    snr_at_systemic: float
    velocity_km_s: float
    velocity_err_km_s: float
    amplitude: float
    amplitude_err: float
    amplitude_unit: str
    p_local: float
    p_global: float
    p_global_is_extrapolated: bool
    n_null: int
    nu_eff: float
    null: NullSummary | None
    efficiency: float
    masked_fraction: float
    verdict: str
    position_xy: tuple[float, float] | None
    extra: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if self.verdict not in VERDICTS:
            raise InputError("unknown verdict", self.verdict, f"use one of {', '.join(VERDICTS)}")


@dataclass(frozen=True)
class InputFile:
    """A file the result depends on."""

    file: str
    sha256: str


@dataclass(frozen=True)
class RunResult:
    """The whole answer of one run.

    Attributes
    ----------
    arrays : mapping of str to array
        Everything of ``result.h5`` by its HDF5 path, e.g. "velocity_km_s" (n_velocity,),
        "snr_map" and "amplitude_map" (n_molecule, ny, nx), "snr_curve", "snr_raw_curve",
        "conditional_curve" (n_molecule, n_velocity), "null/...", "exposure/0/...".
        Strings are arrays of dtype object or str.
    attributes : mapping of str to mapping
        HDF5 attributes (units, meanings) by path.
    celestial_header : mapping or None
        Celestial WCS cards of exposure 1, for the maps.
    """

    target: str
    frame: str
    molecules: tuple[MoleculeResult, ...]
    warnings: tuple[Note, ...]
    inputs: tuple[InputFile, ...]
    settings_sha256: str
    seed: int
    versions: Mapping[str, str]
    arrays: Mapping[str, NDArray[Any]]
    attributes: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    celestial_header: Mapping[str, Any] | None = None
    extra: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for array in self.arrays.values():
            if isinstance(array, np.ndarray):
                array.flags.writeable = False
