"""Verdicts on real spectra of known kinds of objects; needs the reference data (XCORR_REFERENCE_DATA)."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

from tests.studies.common import ROOT, main
from xcorr.config import parse_settings
from xcorr.errors import InputError
from xcorr.pipeline import run

# file, R, T_eff, log g, orders
OBJECTS = {
    "L4": ("L4_R2699_orders.fits", 2699, 1600, 5.0, "orders = [0]"),
    "L5": ("L5_2MASSJ1507-1627.fits", 2000, 1600, 5.0, ""),
    "T5": ("T5_R2699_orders.fits", 2699, 1000, 5.0, "orders = [0]"),
    "T4.5": ("T4.5_2MASSJ0559-1404.fits", 2000, 1000, 5.0, ""),
    "M0V": ("M0V_HD19305.fits", 2000, 1600, 5.0, ""),
    "M5III": ("M5III_HD175865.fits", 2000, 1600, 3.0, ""),
    "M8III": ("M8III_IRAS01037+1219.fits", 2000, 1600, 3.0, ""),
}
KNOTS = (40, 60, 80)


def search(folder: Path, name: str, knots: int, reach: int) -> dict[str, Any]:
    """One object with one number of knots, searched within `reach` km/s."""
    file, resolving_power, t_eff, log_g, orders = OBJECTS[name]
    settings = parse_settings(
        f"""
        [[exposure]]
        file = "{folder / file}"
        resolving_power = {resolving_power}
        medium = "vacuum"
        frame = "barycentric"
        telluric_corrected = true
        wavelength_range_um = [1.95, 2.42]
        {orders}
        [starlight]
        reference = "none"
        knots = {knots}
        [search]
        molecules = ["CO", "H2O", "CH4"]
        velocity_km_s = [{-reach}, {reach}, 5]
        t_eff = {t_eff}
        log_g = {log_g}
        """
    )
    return {
        row.name: {
            "verdict": row.verdict,
            "snr": round(row.snr, 2),
            "snr_raw": round(row.snr_raw, 1),
            "snr_conditional": round(row.snr_conditional, 2),
            "velocity_km_s": round(row.velocity_km_s, 1),
            "velocity_err_km_s": round(row.velocity_err_km_s, 1),
            "p_global": float(f"{row.p_global:.2g}"),
            "nu_eff": round(row.nu_eff, 1),
        }
        for row in run(settings).molecules
    }


def study(n: int, seed: int, jobs: int) -> dict[str, Any]:
    """All objects, all numbers of knots, both velocity ranges; nothing is random."""
    folder = Path(os.environ.get("XCORR_REFERENCE_DATA", ROOT.parent / "shared" / "data")) / "spectra"
    if not folder.is_dir():
        raise InputError("reference data absent", str(folder), "set XCORR_REFERENCE_DATA")
    return {
        f"{name}, {knots} knots, {reach} km/s": search(folder, name, knots, reach)
        for name in OBJECTS
        for knots in KNOTS
        for reach in ((500, 1000) if knots == 60 else (500,))
    }


if __name__ == "__main__":
    main(study, "Real spectra in the K band", 1)
