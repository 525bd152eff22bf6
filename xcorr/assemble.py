"""Everything a redraw needs, as named arrays: the content of ``result.h5``."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.answer import Curves, Evidence
from xcorr.results import MoleculeResult

Arrays = dict[str, NDArray[Any]]


def curve_arrays(evidence: Evidence, curves: Curves, molecules: Sequence[MoleculeResult]) -> Arrays:
    """Velocity grid, curves, expected autocorrelation and the null sample."""
    window = evidence.searched
    best = [int(np.nanargmax(curve[window])) + (window.start or 0) for curve in curves.solo]
    arrays: Arrays = {
        "velocity_km_s": evidence.searched_km_s,
        "molecule": np.array(evidence.names, dtype=object),
        "snr_curve": curves.solo[:, window],
        "snr_raw_curve": curves.raw[:, window],
        "conditional_curve": curves.conditional[:, window],
        "conditional_raw_curve": curves.raw_conditional[:, window],
        "null/signal_free_raw_curve": curves.signal_free,
        "null/velocity_km_s": evidence.velocity_km_s,
        "autocorrelation": np.stack([evidence.correlation(m)[window, i] for m, i in enumerate(best)]),
        "target/num": evidence.target.num[0][:, window],
        "target/info": evidence.target.info[0][:, window],
        "target/joint_info": evidence.target.joint.info[0][:, window],
        "target/joint_num": evidence.target.joint.num[0][:, window],
        "null/maxima": curves.null_maxima,
        "null/mean": np.array([law.mean for law in curves.laws]),
        "null/std": np.array([law.std for law in curves.laws]),
        "null/scale": np.array([law.scale for law in curves.laws]),
        "null/nu_eff": np.array([law.nu_eff for law in curves.laws]),
        "null/family": np.array([law.family for law in curves.laws], dtype=object),
    }
    if evidence.nulls is not None:
        arrays |= {
            "null/snr_raw": np.moveaxis(evidence.nulls.snr(), 0, 1),
            "null/num": np.moveaxis(evidence.nulls.num, 0, 1),
            "null/info": np.moveaxis(evidence.nulls.info, 0, 1),
            "null/position_correlation": evidence.position_correlation,
        }
    return arrays


def map_arrays(
    num: NDArray,
    info: NDArray,
    positions_xy: NDArray,
    shape: tuple[int, int],
    velocity_km_s: NDArray,
    curves: Curves,
    molecules: Sequence[MoleculeResult],
) -> Arrays:
    """Calibrated S/N and amplitude at each molecule's own velocity, NaN where nothing can be said."""
    snr = np.full((len(molecules), *shape), np.nan)
    amplitude = np.full_like(snr, np.nan)
    velocities = np.empty(len(molecules))
    x, y = positions_xy.T
    for m, (molecule, law) in enumerate(zip(molecules, curves.laws, strict=True)):
        v = int(np.argmin(np.abs(velocity_km_s - molecule.velocity_km_s)))
        velocities[m] = velocity_km_s[v]
        own = info[:, m, v].astype(float)
        with np.errstate(invalid="ignore", divide="ignore"):
            snr[m, y, x] = law.snr(np.where(own > 0, num[:, m, v] / np.sqrt(own), np.nan))
            amplitude[m, y, x] = np.where(own > 0, num[:, m, v] / own, np.nan)
    return {"snr_map": snr, "amplitude_map": amplitude, "map_velocity_km_s": velocities}


def exposure_arrays(
    i: int, record: Mapping[str, Any], molecules: Sequence[MoleculeResult], evidence: Evidence
) -> Arrays:
    """One exposure: its spectrum at the companion, fitted templates, star, transmission and sums."""
    exposure, templates = record["exposure"], record["templates"]
    at = [int(np.argmin(np.abs(evidence.velocity_km_s - molecule.velocity_km_s))) for molecule in molecules]
    window = evidence.searched
    base = f"exposure/{i}"
    nan = float("nan")
    arrays: Arrays = {
        f"{base}/wavelength_um": exposure.wavelength_um,
        f"{base}/order": exposure.order,
        f"{base}/residual_spectrum": record["flux"],
        f"{base}/residual_variance": record["variance"],
        f"{base}/template": np.stack([templates.columns[m, v] for m, v in enumerate(at)]),
        f"{base}/star_spectrum": exposure.star.flux,
        f"{base}/transmission": exposure.transmission,
        f"{base}/throughput": exposure.throughput,
        f"{base}/mean_weights": exposure.mean_weights,
        f"{base}/white_image": exposure.white_image,
        f"{base}/companion_xy": np.array(record["position_xy"], float),
        f"{base}/star_xy": np.array(exposure.star_xy or (nan, nan), float),
        f"{base}/psf_fwhm_pixels": np.array(nan if exposure.psf is None else exposure.psf.fwhm_pixels),
        f"{base}/target_num": record["target"].num[0][:, window],
        f"{base}/target_info": record["target"].info[0][:, window],
        f"{base}/noise_audit": np.array(
            [
                exposure.audit.scatter_over_claimed,
                exposure.audit.neighbour_channel,
                exposure.audit.neighbour_spaxel,
                exposure.audit.flagged_fraction,
            ]
        ),
        f"{base}/source": np.array(exposure.source, dtype=object),
    }
    if record["nulls"] is not None:
        arrays[f"{base}/null_num"] = np.moveaxis(record["nulls"].num, 0, 1)
        arrays[f"{base}/null_info"] = np.moveaxis(record["nulls"].info, 0, 1)
    if exposure.telluric is not None:
        fit = exposure.telluric
        arrays[f"{base}/telluric"] = np.array(
            [fit.water, fit.airmass, fit.velocity_km_s, fit.velocity_err_km_s, fit.resolving_power_scale]
        )
    return arrays


ATTRIBUTES: dict[str, dict[str, str]] = {
    "velocity_km_s": {"unit": "km/s", "meaning": "barycentric, positive receding"},
    "snr_map": {"axes": "molecule, y, x", "meaning": "calibrated solo S/N at map_velocity_km_s"},
    "amplitude_map": {"axes": "molecule, y, x", "meaning": "amplitude at map_velocity_km_s"},
    "map_velocity_km_s": {"unit": "km/s"},
    "snr_curve": {"axes": "molecule, velocity", "meaning": "calibrated solo S/N at the target"},
    "snr_raw_curve": {"axes": "molecule, velocity", "meaning": "num / sqrt(info) at the target"},
    "conditional_curve": {"axes": "molecule, velocity", "meaning": "calibrated S/N of the joint fit"},
    "autocorrelation": {"axes": "molecule, velocity", "meaning": "expected shape of the curve, unit peak"},
    "null/snr_raw": {"axes": "molecule, position, velocity"},
    "null/maxima": {"axes": "molecule, position", "meaning": "maximum over velocity, held out, calibrated"},
}
