"""`fit_transmission`: from a star's spectrum to a line-by-line transmission, or to a declared fallback."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import PchipInterpolator

from xcorr.errors import InputError, Note
from xcorr.parallel import single_thread
from xcorr.spectral import channel_edges, doppler_factor, log_grid
from xcorr.spectral.continuum import smooth_basis, upper_envelope
from xcorr.tellurics.model import SCALE_RANGE, Depths, Star, operator_at, optical_depths
from xcorr.tellurics.solve import Solution, solve
from xcorr.tellurics.types import Array, TelluricFit, TransmissionTable
from xcorr.units import LIGHT_KM_S, to_plain

KNOT_SPACING = 0.02
"""Spacing of the continuum splines in ln(wavelength): 6000 km/s, wider than the hydrogen lines of A stars."""
FINE_GRID_R = 300_000.0
"""Sampling of the transmission handed on (the rule for line-by-line work is 200,000 or more)."""
VELOCITY_NOTE_KM_S = 10.0
MEDIUM_KM_S = 81.8  # c (n - 1) of air near 2 um, Ciddor 1996
# Between telluric-free M giants (up to 0.11) and M giants behind dry air in the H band (from 0.22); R = 2000.
MIN_EXPLAINED = 0.17
MIN_IMPROVEMENT = 60.0
MIN_CHANNELS = 50


def fit_transmission(
    star_flux: ArrayLike,
    star_variance: ArrayLike | None,
    mask: ArrayLike | None,
    wavelength_um: Any,
    order: ArrayLike | None,
    resolving_power: Any,
    transmission: TransmissionTable,
    *,
    frame_velocity_km_s: float = 0.0,
    knots: int | None = None,
    wavelength_hi_um: Any = None,
) -> TelluricFit:
    """Fit the Earth's transmission, line by line, to the spectrum of a star.

    Parameters
    ----------
    star_flux : array_like (n_wave,)
        The star's observed spectrum, tellurics included, any unit.
    star_variance : array_like (n_wave,) or None
        Its variance; None counts the scatter alone.
    mask : array_like of bool (n_wave,) or None
        True = unusable.
    wavelength_um : array_like or Quantity (n_wave,)
        Vacuum channel centres in the frame of the cube, ascending within each order.
    order : array_like of int (n_wave,) or None
        Order index.
    resolving_power : float or array_like (n_wave,)
        R = lambda / FWHM; a common factor to it is fitted (0.6 to 1.6).
    transmission : TransmissionTable
        By molecule, see `xcorr.atmosphere.load_transmission`.
    frame_velocity_km_s : float
        Where the tellurics are expected: 0 in the observatory frame, z_B * c in a barycentric one.
    knots : int, optional
        Number of continuum splines in all; by default one per 0.02 in ln(wavelength).
    wavelength_hi_um : array_like (n_hi,), optional
        Grid of the transmission to hand on; by default constant in ln(wavelength) at R = 300,000 over the
        channels and beyond them by 0.5 % or eight FWHM.

    Returns
    -------
    TelluricFit
        `usable` is False, with a note, where used channels lie outside the table ("telluric-range"), it is
        sampled too coarsely for R ("telluric-resolution"), or the star shows no telluric structure
        ("telluric-absent"). A velocity beyond 10 km/s is noted ("telluric-velocity").

    Raises
    ------
    InputError
        Arrays of different lengths, or fewer than 50 usable channels.
    """
    star, used = _star(star_flux, star_variance, mask, wavelength_um, order, resolving_power, knots)
    frame = 1.0 + float(to_plain(frame_velocity_km_s, "km/s")) / LIGHT_KM_S
    if wavelength_hi_um is None:
        beyond = 1.0 + max(0.005, 8.0 / float(star.resolving.min()))
        grid = log_grid(star.wavelength.min() / beyond, star.wavelength.max() * beyond, FINE_GRID_R)
    else:
        grid = np.array(to_plain(wavelength_hi_um, "um"))
    scale = float(np.median(star.flux[used]))  # fluxes of 1e-18 have variances of 1e-40
    at_rest = Star(
        np.where(used, star.flux / scale, 0.0),
        np.where(used, star.variance / scale**2, 1.0),
        star.wavelength / frame,
        star.edges / frame,
        star.resolving,
        star.splines,
    )
    fitted = at_rest.subset(used)
    refusal = _refusal(fitted, transmission)
    if refusal is not None:
        return _fallback(at_rest, used, scale, grid, refusal)
    depths = optical_depths(transmission, at_rest)
    with single_thread():  # small matrices: two BLAS threads are slower, and give other bits
        solution = solve(fitted, depths)
    explained = 1.0 - solution.chi2 / solution.chi2_without
    improvement = solution.chi2_without - solution.chi2
    if explained < MIN_EXPLAINED or improvement < MIN_IMPROVEMENT:
        message = (
            f"the transmission explains {100 * max(explained, 0.0):.0f} % of the star's structure "
            f"(chi2 changes by {-improvement:+.0f}): no telluric lines recognised"
        )
        return _fallback(at_rest, used, scale, grid, Note("telluric-absent", message))
    return _result(at_rest, used, scale, depths, solution, grid, frame)


def _star(
    flux: Any, variance: Any, mask: Any, wavelength_um: Any, order: Any, resolving: Any, knots: int | None
) -> tuple[Star, NDArray[np.bool_]]:
    """The checked star with all its channels, and which of them may be used."""
    wavelength = np.asarray(to_plain(wavelength_um, "um"))
    n = wavelength.size
    flux = np.asarray(flux, dtype=np.float64)
    variance = np.zeros(n) if variance is None else np.asarray(variance, dtype=np.float64)
    bad = np.zeros(n, bool) if mask is None else np.asarray(mask, dtype=bool)
    blocks = np.zeros(n, np.int64) if order is None else np.asarray(order, dtype=np.int64)
    resolving = to_plain(resolving, "")
    if not (flux.shape == variance.shape == bad.shape == blocks.shape == (n,)) or resolving.shape not in (
        (),
        (n,),
    ):
        raise InputError(
            "star, variance, mask, order and R need one value per channel", f"{flux.shape} for {n} channels"
        )
    used = ~bad & np.isfinite(flux) & np.isfinite(variance) & (variance >= 0.0)
    if np.count_nonzero(used) < MIN_CHANNELS or not np.median(flux[used]) > 0.0:
        raise InputError(
            "the star's spectrum cannot be fitted",
            f"{np.count_nonzero(used)} usable channels",
            f"at least {MIN_CHANNELS} with a positive median are needed",
        )
    edges = channel_edges(wavelength, order)
    splines = smooth_basis(wavelength, blocks, KNOT_SPACING, knots)
    return Star(flux, variance, wavelength, edges, np.broadcast_to(resolving, (n,)).copy(), splines), used


def _refusal(star: Star, table: TransmissionTable) -> Note | None:
    """Why no line-by-line transmission can be had for these channels; None if it can."""
    low, high = table.wavelength_um[0], table.wavelength_um[-1]
    outside = (star.edges[:, 0] < low) | (star.edges[:, 1] > high)
    if np.any(outside):
        return Note(
            "telluric-range",
            f"{np.count_nonzero(outside)} of {outside.size} used channels lie outside the transmission's "
            f"{low:.3f}-{high:.3f} um",
        )
    sampling = 1.0 / float(np.median(np.diff(np.log(table.wavelength_um))))
    if star.resolving.max() * SCALE_RANGE[1] * 2.0 > 0.98 * sampling:
        return Note(
            "telluric-resolution",
            f"R = {star.resolving.max():.0f} is too high for a transmission sampled at {sampling:.0f}",
        )
    return None


def _fallback(star: Star, used: NDArray[np.bool_], scale: float, grid: Array, note: Note) -> TelluricFit:
    """No line-by-line transmission: the star over its own smooth upper envelope stands in, after the LSF."""
    nan = float("nan")
    continuum = np.maximum(upper_envelope(star.splines, star.flux, used), 0.01)
    return TelluricFit(
        water=nan,
        airmass=nan,
        velocity_km_s=nan,
        velocity_err_km_s=nan,
        resolving_power_scale=1.0,
        wavelength_hi_um=grid,
        transmission_hi=np.ones(grid.size),
        transmission_channels=np.where(used, star.flux / continuum, 0.0),
        continuum=continuum * scale,
        weights=used.astype(np.float64),
        chi2=nan,
        n_used=int(np.count_nonzero(used)),
        explained=nan,
        model_error=nan,
        usable=False,
        notes=(note,),
    )


def _velocity_notes(velocity: float, error: float) -> tuple[Note, ...]:
    if abs(velocity) <= max(VELOCITY_NOTE_KM_S, 4.0 * error):
        return ()
    message = f"tellurics lie at {velocity:+.1f} +- {error:.1f} km/s from where they should"
    if abs(abs(velocity) - MEDIUM_KM_S) < max(8.0, 4.0 * error):
        if velocity < 0:
            message += "; that is the shift of air wavelengths read as vacuum ones"
        else:
            message += "; that is the shift of vacuum wavelengths converted as if they were air ones"
    return (Note("telluric-velocity", message),)


def _result(
    star: Star,
    used: NDArray[np.bool_],
    scale: float,
    depths: Depths,
    solution: Solution,
    grid: Array,
    frame: float,
) -> TelluricFit:
    """Everything handed on, over all channels and on the fine grid."""
    found = solution.parameters
    velocity = found.beta * LIGHT_KM_S
    error = float(np.sqrt(solution.covariance[2, 2])) * LIGHT_KM_S
    native = depths.transmission(found.water, found.airmass)
    place = grid / (frame * float(doppler_factor(velocity)))
    inside = np.clip(place, depths.wavelength[0], depths.wavelength[-1])
    operator = operator_at(star, depths, found.beta, found.scale)
    weights = np.zeros(star.flux.size)
    weights[used] = solution.robust
    return TelluricFit(
        water=found.water,
        airmass=found.airmass,
        velocity_km_s=velocity,
        velocity_err_km_s=error,
        resolving_power_scale=found.scale,
        wavelength_hi_um=grid,
        # monotone between samples: a cubic would leave 0..1 beside saturated lines
        transmission_hi=PchipInterpolator(depths.wavelength, native)(inside),
        transmission_channels=np.where(operator.covered, operator.apply(native), 1.0),
        continuum=star.splines.columns @ solution.coefficients * scale,
        weights=weights,
        chi2=solution.chi2,
        n_used=int(np.count_nonzero(solution.robust > 0.5)),
        explained=1.0 - solution.chi2 / solution.chi2_without,
        model_error=float(np.median(solution.model_error)),
        usable=True,
        notes=_velocity_notes(velocity, error),
    )
