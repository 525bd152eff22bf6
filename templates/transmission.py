"""The Earth's transmission by absorber, and the cold methane cross section it implies.

The input is a slant path through very humid air. The columns were measured with line lists (README):
CH4 5.3e19 cm-2 and CO 3.7e18 cm-2 make an airmass of 1.4, H2O 3.3e23 cm-2 makes 100 mm of water. We ship
optical depths scaled to airmass 1 and 2 mm of water, so that users scale by factors near one.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from h5write import write_tables
from sources import provenance, read_member, sha256

COLUMNS = ("wavelength", "total", "H2O", "CO2", "O3", "N2O", "CO", "CH4", "O2", "N2", "Rayleigh", "continuum")
SHIPPED = ("H2O", "CO2", "O3", "N2O", "CO", "CH4", "O2", "Rayleigh")
INPUT_AIRMASS = 1.4
INPUT_WATER_MM = 100.0  # along the slant path
SHIPPED_WATER_MM = 2.0  # at zenith
SLANT_METHANE_PER_CM2 = 5.3e19
METHANE_K = 260.0
UNTESTED_DEPTH = 1.5  # the comparison with line lists ends here; unresolved cores above it are lower limits
BLACK_DEPTH = 700.0  # the input prints 0 below the smallest double
SOURCE = "Planetary Spectrum Generator (Villanueva et al. 2018, JQSRT 217, 86), synthesis of 2024-06-05"


def read(folder: Path) -> tuple[dict[str, np.ndarray], bytes]:
    """Columns of the input (wavelength in um, then transmissions) and its bytes."""
    data = read_member("transmission", folder)
    rows = [line.split() for line in data.decode().splitlines() if not line.startswith("#")]
    table = np.array(rows, dtype=float)
    return dict(zip(COLUMNS, table.T, strict=True)), data


def optical_depth(transmission: np.ndarray) -> np.ndarray:
    """-ln T, between 0 and BLACK_DEPTH."""
    return np.minimum(-np.log(np.maximum(transmission, 1e-305)), BLACK_DEPTH) + 0.0


def significant(values: np.ndarray, digits: int = 5) -> np.ndarray:
    """float32, rounded to what the input's six printed digits support."""
    values = np.where(values > 0, values, 0.0)
    scale = 10.0 ** (digits - 1 - np.floor(np.log10(np.where(values > 0, values, 1.0))))
    return (np.round(values * scale) / scale).astype(np.float32)


def build_transmission(columns: dict[str, np.ndarray], data: bytes, out: Path) -> None:
    """Write transmission.h5."""
    depth = {name: optical_depth(columns[name]) / INPUT_AIRMASS for name in SHIPPED}
    # What the input calls CIA follows the water bands: the water continuum of humid air. Its part that goes
    # with the square of the water is scaled linearly with the rest and so is overestimated in dry air.
    dry = SHIPPED_WATER_MM / INPUT_WATER_MM
    continuum = optical_depth(columns["continuum"]) * dry
    depth["H2O"] = optical_depth(columns["H2O"]) * dry + continuum
    tables = {"wavelength_um": (columns["wavelength"], "um", "vacuum wavelength")}
    for name in SHIPPED:
        tables[f"optical_depth/{name}"] = (
            significant(depth[name]),
            "",
            "at airmass 1 and the reference water",
        )
    tables["water_continuum"] = (significant(continuum, 4), "", "its part of optical_depth/H2O")
    attributes = {
        "source": SOURCE,
        "input": provenance("transmission"),
        "input_sha256": sha256(data),
        "airmass": 1.0,
        "water_mm": SHIPPED_WATER_MM,
        "input_airmass": INPUT_AIRMASS,
        "input_water_slant_mm": INPUT_WATER_MM,
        "resolving_power": 1e5,
        "medium": "vacuum (checked on H2O and CO lines)",
        "notes": "scaled from 100 mm of water along airmass 1.4; H2O includes its continuum; lines carry the "
        "pressure shifts of the air (up to -0.4 km/s)",
    }
    write_tables(out / "transmission.h5", attributes, tables)


def build_methane(columns: dict[str, np.ndarray], data: bytes, out: Path) -> None:
    """Write methane_cold.h5."""
    depth = optical_depth(columns["CH4"])[::-1]
    saturated = depth > UNTESTED_DEPTH
    print(f"CH4: {saturated.sum()} of {depth.size} samples saturated, deepest {depth.max():.2f}")
    tables = {
        "wavenumber_per_cm": (np.round(1e4 / columns["wavelength"][::-1], 6), "cm-1", "vacuum wavenumber"),
        "cross_section_cm2": (significant(depth / SLANT_METHANE_PER_CM2), "cm2 molecule-1", "at R = 100,000"),
        "saturated": (saturated.astype(np.int8), "", "1: lower limit"),
    }
    attributes = {
        "source": SOURCE,
        "input": provenance("transmission"),
        "input_sha256": sha256(data),
        "temperature_k": METHANE_K,
        "column_per_cm2": SLANT_METHANE_PER_CM2,
        "resolving_power": 1e5,
        "notes": "cold methane: one temperature (about 260 K), pressure-broadened by air; cores above an "
        "optical depth of 1.5 are lower limits; below 2e-26 cm2 the input's digits end",
    }
    write_tables(out / "methane_cold.h5", attributes, tables)


def build(folder: Path, out: Path) -> None:
    """Write both files."""
    columns, data = read(folder)
    build_transmission(columns, data, out)
    build_methane(columns, data, out)
