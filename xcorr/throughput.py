"""What turns a companion's spectrum into data units: transmission, throughput, line-spread function."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xcorr.atmosphere import load_transmission
from xcorr.cube import Cube
from xcorr.errors import CoverageError, Note
from xcorr.psf import StarImage
from xcorr.spectral import LsfOperator, log_grid
from xcorr.spectral.continuum import smooth_basis, upper_envelope
from xcorr.star import StarSpectrum
from xcorr.tellurics import TelluricFit, fit_transmission
from xcorr.units import BOLTZMANN_J_K, LIGHT_M_S, PLANCK_J_S

DEFAULT_STAR_T_EFF = 6000.0
FINE_GRID_R = 250_000.0
ENVELOPE_SPACING = 0.02
"""Spacing of the envelope's splines in ln(wavelength): wider than any stellar line."""


def fit_tellurics(
    cube: Cube, star: StarSpectrum, resolving: NDArray, no_star: bool, notes: list[Note]
) -> TelluricFit | None:
    """Transmission fitted to the star; None where T = 1 by declaration."""
    if cube.telluric_corrected:
        return None
    if no_star:
        notes.append(Note("transmission-one", "no star to fit the Earth's transmission to: taken as one"))
        return None
    middle = float(np.median(cube.wavelength_um))
    try:
        transmission = load_transmission(
            (float(cube.wavelength_um.min()) * 0.995, float(cube.wavelength_um.max()) * 1.005)
        )
    except CoverageError:
        notes.append(
            Note(
                "transmission-fallback",
                f"no line-by-line transmission is shipped for {middle:.2f} um: the observed one multiplies after "
                "the line-spread function (measured: S/N 0.97, amplitude -5 to -8 per cent)",
            )
        )
        return _fallback_fit(cube, star)
    frame = 0.0 if cube.frame == "observatory" else (cube.barycentric_velocity_km_s or 0.0)
    fit = fit_transmission(
        star.flux,
        np.where(star.known, star.variance, 1.0),
        ~star.known,
        cube.wavelength_um,
        cube.order,
        resolving,
        transmission,
        frame_velocity_km_s=frame,
    )
    notes.extend(fit.notes)
    return fit


def _envelope(cube: Cube, star: StarSpectrum) -> NDArray[np.float64]:
    """Smooth upper envelope of the star, (n_wave,)."""
    basis = smooth_basis(cube.wavelength_um, cube.order, ENVELOPE_SPACING)
    envelope = upper_envelope(basis, star.flux, star.known)
    return np.maximum(envelope, 0.01 * float(np.median(star.flux[star.known])))


def _fallback_fit(cube: Cube, star: StarSpectrum) -> TelluricFit:
    """Observed transmission where none is shipped: the star over its smooth upper envelope."""
    continuum = _envelope(cube, star)
    nothing = np.zeros(0)
    return TelluricFit(
        water=np.nan,
        airmass=np.nan,
        velocity_km_s=np.nan,
        velocity_err_km_s=np.nan,
        resolving_power_scale=1.0,
        wavelength_hi_um=nothing,
        transmission_hi=nothing.copy(),
        transmission_channels=np.where(star.known, star.flux / continuum, 0.0),
        continuum=continuum,
        weights=star.known.astype(np.float64),
        chi2=np.nan,
        n_used=int(star.known.sum()),
        explained=np.nan,
        model_error=np.nan,
        usable=False,
    )


def planck_shape(wavelength_um: NDArray, temperature_k: float) -> NDArray[np.float64]:
    """Planck B_lambda over its mean: the slope of a star's continuum."""
    x = PLANCK_J_S * LIGHT_M_S / (wavelength_um * 1e-6 * BOLTZMANN_J_K * temperature_k)
    shape = wavelength_um**-5.0 / np.expm1(x)
    return shape / shape.mean()


def star_throughput(
    cube: Cube,
    star_t_eff: float | None,
    star: StarSpectrum,
    star_image: StarImage | None,
    telluric: TelluricFit | None,
    no_star: bool,
    white: NDArray,
    notes: list[Note],
) -> tuple[NDArray[np.float64], bool]:
    """c: data units of a companion of amplitude one and a flat spectrum of mean one, without T."""
    n_wave = cube.wavelength_um.size
    if no_star:
        level = float(np.nanmean(white)) if cube.is_spectrum else 10.0**cube.scale_exponent
        return np.full(n_wave, level if level > 0 else 1.0), False
    t_eff = star_t_eff
    if t_eff is None:
        t_eff = DEFAULT_STAR_T_EFF
        notes.append(
            Note(
                "star-temperature-assumed",
                f"the star's continuum slope is that of {t_eff:.0f} K; give [starlight].star_t_eff",
            )
        )
    slope = planck_shape(cube.wavelength_um, t_eff)
    continuum = telluric.continuum if telluric is not None else _envelope(cube, star)
    continuum = continuum * _line_blanketing(star, telluric, continuum)
    if star_image is None:
        return star.scale * continuum / slope, False
    # the star's PSF-integrated flux follows the reference up to a cubic in wavelength
    known = star.known
    ascending = np.argsort(cube.wavelength_um)
    bins = np.array_split(ascending, star_image.wavelength_um.size)
    reference = np.array([star.flux[b][known[b]].mean() if known[b].any() else np.nan for b in bins])
    ratio = star_image.flux / reference
    fine = np.isfinite(ratio) & (ratio > 0)
    if fine.sum() < 2:
        return star.scale * continuum / slope, False
    line = np.polyfit(star_image.wavelength_um[fine], ratio[fine], min(3, int(fine.sum()) - 2))
    return np.polyval(line, cube.wavelength_um) * continuum / slope, True


def _line_blanketing(star: StarSpectrum, telluric: TelluricFit | None, continuum: NDArray) -> float:
    """Mean of the star outside the atmosphere over that of its continuum: amplitudes count the star with its lines."""
    clear = star.known if telluric is None else star.known & (telluric.transmission_channels > 0.3)
    if not clear.any():
        return 1.0
    outside = star.flux if telluric is None else star.flux / np.maximum(telluric.transmission_channels, 0.3)
    return float(outside[clear].mean() / continuum[clear].mean())


def exposure_operator(
    cube: Cube, resolving: NDArray, telluric: TelluricFit | None, star: StarSpectrum
) -> tuple[LsfOperator, NDArray[np.float64] | None, NDArray[np.float64]]:
    """LSF operator with the line-by-line transmission on its grid, and LSF (x) T in the channels."""
    n_wave = cube.wavelength_um.size
    if telluric is not None and telluric.usable:
        grid, transmission_hi = telluric.wavelength_hi_um, telluric.transmission_hi
        scale = telluric.resolving_power_scale
    else:
        pad = 1.0 + 8.0 / float(np.min(resolving))
        grid = log_grid(cube.wavelength_um.min() / pad, cube.wavelength_um.max() * pad, FINE_GRID_R)
        transmission_hi, scale = None, 1.0
    operator = LsfOperator.build(grid, cube.wavelength_um, resolving * scale, order=cube.order)
    if transmission_hi is not None:
        return operator, transmission_hi, operator.apply(transmission_hi)
    observed = np.ones(n_wave) if telluric is None else telluric.transmission_channels
    return operator, None, np.asarray(observed)
