"""The Earth's transmission, line by line, fitted to the star of an exposure.

Model of the star's spectrum, with B-splines c (its continuum times the throughput):

    star = c(lambda) * LSF_R (x) [ T_H2O^water * prod_x T_x^airmass ](v)

c is linear and eliminated (variable projection); water, airmass, velocity and R are found by Gauss-Newton from
a coarse grid start. Stellar lines and bad channels are down-weighted (Tukey biweight).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import BSpline, PchipInterpolator
from scipy.optimize import least_squares

from xcorr.errors import InputError, Note
from xcorr.spectral import LsfOperator, channel_edges, doppler_factor, log_grid
from xcorr.units import LIGHT_KM_S, to_plain

Array = NDArray[np.float64]

KNOT_SPACING = 0.012
"""Default spacing of the continuum splines in ln(wavelength): wider than any stellar line, 3600 km/s."""
FINE_GRID_R = 300_000.0
"""Sampling of the transmission that is handed on (the rule for line-by-line work is 200,000 or more)."""
WATER_RANGE, AIRMASS_RANGE = (0.01, 30.0), (0.2, 6.0)
SCALE_RANGE = (0.6, 1.6)
VELOCITY_REACH_KM_S = 120.0
"""Coarse search: beyond the 82 km/s of a wrong medium."""
# Weak priors on (ln water, ln airmass, v/c, ln R scale), for ranges that do not show one of them.
PRIOR_CENTRE = np.array([0.0, np.log(1.3), 0.0, 0.0])
PRIOR_WIDTH = np.array([3.0, 0.5, 1e-3, 0.3])
VELOCITY_NOTE_KM_S = 10.0
MEDIUM_KM_S = 81.8  # c (n - 1) of air near 2 um, Ciddor 1996
MIN_MODEL_ERROR = 1e-3
"""No transmission is better than this; without it a channel of no variance would rule the fit."""
MIN_EXPLAINED = 0.25
MIN_IMPROVEMENT = 60.0
_TUKEY = 4.685  # 95 % efficiency for normal errors (common practice)
_MAD_TO_SIGMA = 1.4826


class Transmission(Protocol):
    """What a fit needs: transmission by molecule at airmass 1 and a reference water column.

    `wavelength_um` (n,) is vacuum and ascending; `molecules` maps names ("H2O", "CO2", ...) to (n,) in 0..1.
    """

    @property
    def wavelength_um(self) -> Array: ...

    @property
    def molecules(self) -> Any: ...


@dataclass(frozen=True)
class TelluricFit:
    """The transmission of one exposure, and the smooth throughput that remains.

    Attributes
    ----------
    water : float
        Exponent of the reference water transmission: water column times airmass over the reference.
    airmass : float
        Exponent of all other molecules.
    velocity_km_s, velocity_err_km_s : float
        Velocity of the tellurics beyond the expected frame velocity, relativistic; a zero-point error of the
        wavelengths. The error scales with the scatter of the residuals.
    resolving_power_scale : float
        Fitted R over the given one.
    wavelength_hi_um : float64 array (n_hi,)
        Fine grid in the frame of the cube, vacuum micrometre.
    transmission_hi : float64 array (n_hi,)
        Line-by-line transmission on it, shifted by frame and fitted velocity. Ones where not usable.
    transmission_channels : float64 array (n_wave,)
        LSF (x) T in the channels. Where not usable: star / continuum, the fallback to be multiplied after the LSF.
    continuum : float64 array (n_wave,)
        c, the smooth ratio of the star to LSF (x) T, with stellar lines bridged.
    weights : float64 array (n_wave,)
        Final robust weight of each channel, 0 (rejected or masked) to 1.
    chi2 : float
        Weighted sum of squared residuals over the claimed variance plus the fitted model error.
    n_used : int
        Channels with a weight above one half.
    explained : float
        Share of the star's structure beyond the splines that the transmission explains, 0..1.
    model_error : float
        Scatter of star / model beyond the claimed noise, as a fraction of the continuum.
    usable : bool
        False: no line-by-line transmission; the fallback must be declared.
    notes : tuple of Note
    """

    water: float
    airmass: float
    velocity_km_s: float
    velocity_err_km_s: float
    resolving_power_scale: float
    wavelength_hi_um: Array
    transmission_hi: Array
    transmission_channels: Array
    continuum: Array
    weights: Array
    chi2: float
    n_used: int
    explained: float
    model_error: float
    usable: bool
    notes: tuple[Note, ...] = ()

    def __post_init__(self) -> None:
        for array in vars(self).values():
            if isinstance(array, np.ndarray):
                array.flags.writeable = False


@dataclass(frozen=True)
class _Star:
    """The star's channels that may be used, and the linear part of the model."""

    flux: Array  # (n,)
    variance: Array  # (n,)
    wavelength: Array  # (n,) in the frame of the tellurics at v = 0
    edges: Array  # (n, 2)
    resolving: Array  # (n,)
    splines: Array  # (n, n_spline), unit scale


@dataclass(frozen=True)
class _Depths:
    """Optical depths on the transmission's own grid."""

    wavelength: Array  # (n_t,)
    water: Array  # (n_t,)
    others: Array  # (n_t,)

    def transmission(self, water: float, airmass: float) -> Array:
        return np.exp(-(water * self.water + airmass * self.others))


def _spline_columns(wavelength: Array, order: NDArray[np.int64], knots: int | None) -> Array:
    """Cubic B-splines in ln(wavelength), uniform over each order, as a dense matrix (n_wave, n_spline)."""
    x = np.log(wavelength)
    blocks = [order == value for value in np.unique(order)]
    span = sum(float(np.ptp(x[block])) for block in blocks)
    columns = []
    for block in blocks:
        share = float(np.ptp(x[block]))
        n = round(knots * share / span) if knots else 3 + int(np.ceil(share / KNOT_SPACING))
        n = max(4, n)
        inner = np.linspace(x[block][0], x[block][-1], n - 2)
        full = np.concatenate([[inner[0]] * 3, inner, [inner[-1]] * 3])
        part = np.zeros((wavelength.size, n))
        part[block] = BSpline.design_matrix(x[block], full, 3).toarray()
        columns.append(part)
    return np.hstack(columns)


def _solve(columns: Array, target: Array, root_weight: Array) -> tuple[Array, Array]:
    """Weighted least squares: coefficients, and the orthonormal basis of the weighted columns."""
    q, r = np.linalg.qr(columns * root_weight[:, None])
    # A spline without any weighted channel gives a zero pivot; its coefficient is then free and set to zero.
    pivot = np.abs(np.diag(r))
    if pivot.min() < 1e-10 * pivot.max():
        u, s, vt = np.linalg.svd(columns * root_weight[:, None], full_matrices=False)
        keep = s > 1e-10 * s[0]
        u, s, vt = u[:, keep], s[keep], vt[keep]
        return vt.T @ ((u.T @ (target * root_weight)) / s), u
    return np.linalg.solve(r, q.T @ (target * root_weight)), q


def _operator(star: _Star, depths: _Depths, velocity: float, scale: float) -> LsfOperator:
    """Shifting the channels back instead of the transmission forth: exact, no interpolation."""
    factor = float(doppler_factor(velocity))
    return LsfOperator.build(
        depths.wavelength,
        star.wavelength / factor,
        star.resolving * scale,
        edges_um=star.edges / factor,
    )


def _model_and_slopes(star: _Star, depths: _Depths, x: Array) -> tuple[Array, Array]:
    """LSF (x) T (n,), and its derivatives (4, n) by ln water, ln airmass, velocity / c, ln R."""
    water, airmass, velocity, scale = np.exp(x[0]), np.exp(x[1]), x[2] * LIGHT_KM_S, np.exp(x[3])
    operator = _operator(star, depths, velocity, scale)
    t = depths.transmission(water, airmass)
    by_log = np.gradient(t, np.log(depths.wavelength))
    columns = np.stack([t, -t * depths.water * water, -t * depths.others * airmass, -by_log])
    value, *slopes = operator.apply(columns)
    by_scale = replace(operator, weights=operator.slopes).apply(t)
    return value, np.stack([*slopes, by_scale])


def _coarse_start(star: _Star, depths: _Depths, root_weight: Array) -> Array:
    """Best of a grid of velocities and water columns, by the mean absolute residual (stellar lines matter little)."""
    step = LIGHT_KM_S / float(np.median(star.resolving)) / 3.0
    n_side = int(np.ceil(VELOCITY_REACH_KM_S / step))
    trials = np.exp(np.linspace(np.log(0.1), np.log(10.0), 7))
    transmissions = np.stack([depths.transmission(water, 1.3) for water in trials])
    best, start = np.inf, np.zeros(4)
    for velocity in step * np.arange(-n_side, n_side + 1):
        channels = _operator(star, depths, velocity, 1.0).apply(transmissions)
        for water, value in zip(trials, channels, strict=True):
            columns = star.splines * value[:, None]
            fitted = columns @ _solve(columns, star.flux, root_weight)[0]
            cost = float(np.mean(np.abs(star.flux - fitted) * root_weight))
            if cost < best:
                best, start = cost, np.array([np.log(water), np.log(1.3), velocity / LIGHT_KM_S, 0.0])
    return start


def _gauss_newton(star: _Star, depths: _Depths, root_weight: Array, start: Array) -> tuple[Array, Array]:
    """Best (ln water, ln airmass, v/c, ln R scale) for frozen weights, and the whitened Jacobian (n, 4)."""
    last: dict[str, Any] = {}

    def evaluate(x: Array) -> None:
        if "x" in last and np.array_equal(last["x"], x):
            return
        value, slopes = _model_and_slopes(star, depths, x)
        coefficients, q = _solve(star.splines * value[:, None], star.flux, root_weight)
        white = star.flux * root_weight
        residual = white - q @ (q.T @ white)
        # Kaufman's approximation of the variable-projection Jacobian: the splines re-fit each slope.
        raw = slopes.T * (star.splines @ coefficients * root_weight)[:, None]
        last.update(x=x.copy(), residual=residual, jacobian=-(raw - q @ (q.T @ raw)))

    def residuals(x: Array) -> Array:
        evaluate(x)
        return np.concatenate([last["residual"], (x - PRIOR_CENTRE) / PRIOR_WIDTH])

    def jacobian(x: Array) -> Array:
        evaluate(x)
        return np.concatenate([last["jacobian"], np.diag(1.0 / PRIOR_WIDTH)])

    beta = 1.25 * VELOCITY_REACH_KM_S / LIGHT_KM_S
    low = [np.log(WATER_RANGE[0]), np.log(AIRMASS_RANGE[0]), -beta, np.log(SCALE_RANGE[0])]
    high = [np.log(WATER_RANGE[1]), np.log(AIRMASS_RANGE[1]), beta, np.log(SCALE_RANGE[1])]
    found = least_squares(
        residuals,
        start,
        jac=jacobian,
        bounds=(low, high),
        x_scale=[0.1, 0.1, 1e-5, 0.1],
        xtol=1e-7,
        ftol=1e-9,
    )
    evaluate(found.x)
    return found.x, last["jacobian"]


def _robust(star: _Star, model: Array, continuum: Array) -> tuple[Array, float]:
    """Tukey weights of the channels and the model error, a fraction of the continuum."""
    relative = (star.flux - model) / continuum
    noise = star.variance / continuum**2
    scatter = _MAD_TO_SIGMA * float(np.median(np.abs(relative - np.median(relative))))
    model_error = float(np.sqrt(max(MIN_MODEL_ERROR**2, scatter**2 - float(np.median(noise)))))
    u = relative / (_TUKEY * np.sqrt(noise + model_error**2))
    weight = np.where(np.abs(u) < 1.0, (1.0 - u**2) ** 2, 0.0)
    # The wings of a rejected line are suspect as well.
    around = np.minimum(np.roll(weight, 1), np.roll(weight, -1))
    return np.where(around == 0.0, 0.0, weight), model_error


def _root_weight(star: _Star, continuum: Array, robust: Array, model_error: float) -> Array:
    return np.sqrt(robust / (star.variance + (model_error * continuum) ** 2))


@dataclass(frozen=True)
class _Solution:
    x: Array
    covariance: Array
    coefficients: Array
    robust: Array
    model_error: float
    chi2: float
    explained: float
    improvement: float


def _fit(star: _Star, depths: _Depths) -> _Solution:
    """Coarse start, then Gauss-Newton and robust weights in turn until the weights settle."""
    level = np.full(star.flux.size, float(np.median(star.flux)))
    root = _root_weight(star, level, np.ones_like(level), 0.02)
    x = _coarse_start(star, depths, root)
    robust, model_error = np.ones_like(level), 0.02
    for _ in range(8):
        x, jacobian = _gauss_newton(star, depths, root, x)
        value, _ = _model_and_slopes(star, depths, x)
        coefficients, q = _solve(star.splines * value[:, None], star.flux, root)
        continuum = np.maximum(star.splines @ coefficients, 1e-3 * level)
        previous = robust
        robust, model_error = _robust(star, continuum * value, continuum)
        root = _root_weight(star, continuum, robust, model_error)
        if np.max(np.abs(robust - previous)) < 0.02:
            break
    white = star.flux * root
    coefficients, q = _solve(star.splines * value[:, None], star.flux, root)
    residual = white - q @ (q.T @ white)
    _, q_plain = _solve(star.splines, star.flux, root)
    plain = white - q_plain @ (q_plain.T @ white)
    chi2, chi2_plain = float(residual @ residual), float(plain @ plain)
    freedom = max(1.0, float(np.sum(robust)) - star.splines.shape[1] - 4)
    scale = max(1.0, chi2 / freedom) * _correlation_factor(residual)
    covariance = np.linalg.inv(jacobian.T @ jacobian + np.diag(PRIOR_WIDTH**-2)) * scale
    return _Solution(
        x, covariance, coefficients, robust, model_error, chi2, 1.0 - chi2 / chi2_plain, chi2_plain - chi2
    )


def _correlation_factor(residual: Array) -> float:
    """Variance inflation of a fitted parameter by residuals that are correlated over neighbouring channels."""
    power = float(residual @ residual)
    rho = [float(residual[k:] @ residual[:-k]) / power for k in range(1, 6)]
    return max(1.0, 1.0 + 2.0 * sum(rho))


def fit_transmission(
    star_flux: ArrayLike,
    star_variance: ArrayLike | None,
    mask: ArrayLike | None,
    wavelength_um: Any,
    order: ArrayLike | None,
    resolving_power: Any,
    transmission: Transmission,
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
        R = lambda / FWHM; a common factor to it is fitted.
    transmission : Transmission
        By molecule, see `xcorr.atmosphere.load_transmission`.
    frame_velocity_km_s : float
        Where the tellurics are expected: 0 in the observatory frame, z_B * c in a barycentric one.
    knots : int, optional
        Number of continuum splines in all; by default one per 0.012 in ln(wavelength).
    wavelength_hi_um : array_like (n_hi,), optional
        Grid of the transmission to hand on; by default constant in ln(wavelength) at R = 300,000 over the
        channels and 0.5 % beyond.

    Returns
    -------
    TelluricFit
        `usable` is False, with a note, where used channels lie outside the transmission ("telluric-range"), it is
        sampled too coarsely for R ("telluric-resolution"), or the star shows no telluric structure
        ("telluric-absent").

    Raises
    ------
    InputError
        Arrays of different lengths, or fewer than 50 usable channels.
    """
    wavelength = np.asarray(to_plain(wavelength_um, "um"))
    n = wavelength.size
    flux = np.asarray(star_flux, dtype=np.float64)
    variance = np.zeros(n) if star_variance is None else np.asarray(star_variance, dtype=np.float64)
    bad = np.zeros(n, bool) if mask is None else np.asarray(mask, dtype=bool)
    block = np.zeros(n, np.int64) if order is None else np.asarray(order, dtype=np.int64)
    if not (flux.shape == variance.shape == bad.shape == block.shape == (n,)):
        raise InputError("star, variance, mask and order need one value per channel", f"{flux.shape} for {n}")
    used = ~bad & np.isfinite(flux) & np.isfinite(variance) & (variance >= 0)
    if np.count_nonzero(used) < 50 or not np.median(flux[used]) > 0:
        raise InputError(
            "the star's spectrum cannot be fitted",
            f"{np.count_nonzero(used)} usable channels",
            "at least 50 with a positive median are needed",
        )
    frame = 1.0 + float(to_plain(frame_velocity_km_s, "km/s")) / LIGHT_KM_S
    everything = _Star(
        flux,
        variance,
        wavelength / frame,
        channel_edges(wavelength, order) / frame,
        np.broadcast_to(to_plain(resolving_power, ""), (n,)).astype(np.float64),
        _spline_columns(wavelength, block, knots),
    )
    if wavelength_hi_um is None:
        grid = log_grid(0.995 * wavelength.min(), 1.005 * wavelength.max(), FINE_GRID_R)
    else:
        grid = np.array(to_plain(wavelength_hi_um, "um"))
    star = _subset(everything, used)
    refusal = _refusal(star, transmission)
    if refusal is not None:
        return _fallback(everything, used, grid, refusal)
    depths = _depths(transmission, everything)
    solution = _fit(star, depths)
    if solution.explained < MIN_EXPLAINED or solution.improvement < MIN_IMPROVEMENT:
        message = (
            f"the transmission explains {100 * solution.explained:.0f} % of the star's structure "
            f"(chi2 lower by {solution.improvement:.0f}): no telluric lines recognised"
        )
        return _fallback(everything, used, grid, Note("telluric-absent", message))
    return _result(everything, used, depths, solution, grid, frame)


def _subset(star: _Star, used: NDArray[np.bool_]) -> _Star:
    splines = star.splines[used]
    splines = splines[:, np.any(splines > 0, axis=0)]
    return _Star(
        star.flux[used],
        star.variance[used],
        star.wavelength[used],
        star.edges[used],
        star.resolving[used],
        splines,
    )


def _refusal(star: _Star, transmission: Transmission) -> Note | None:
    """Why no line-by-line transmission can be had for these channels, None if it can."""
    low, high = transmission.wavelength_um[0], transmission.wavelength_um[-1]
    outside = (star.edges[:, 0] < low) | (star.edges[:, 1] > high)
    if np.any(outside):
        return Note(
            "telluric-range",
            f"{np.count_nonzero(outside)} of {outside.size} used channels lie outside the transmission's "
            f"{low:.3f}-{high:.3f} um",
        )
    sampling = 1.0 / float(np.median(np.diff(np.log(transmission.wavelength_um))))
    if star.resolving.max() * SCALE_RANGE[1] * 2.0 > 0.98 * sampling:
        return Note(
            "telluric-resolution",
            f"R = {star.resolving.max():.0f} is too high for a transmission sampled at {sampling:.0f}",
        )
    return None


def _depths(transmission: Transmission, star: _Star) -> _Depths:
    """Optical depths over the channels and the reach of their line-spread functions; constant beyond the ends."""
    grid = np.asarray(transmission.wavelength_um, dtype=np.float64)
    reach = (
        5.0 / (2.3548 * SCALE_RANGE[0] * float(star.resolving.min())) + 1.5 * VELOCITY_REACH_KM_S / LIGHT_KM_S
    )
    reach += 2.0 * float(np.max(np.ptp(star.edges, axis=1) / star.wavelength))
    first = max(0, int(np.searchsorted(grid, star.wavelength.min() * (1.0 - reach))) - 1)
    last = min(grid.size, int(np.searchsorted(grid, star.wavelength.max() * (1.0 + reach))) + 1)
    inside = slice(first, last)
    n_pad = int(np.ceil(reach / np.median(np.diff(np.log(grid[inside])))))
    step = np.log(grid[1] / grid[0])
    before = grid[first] * np.exp(step * np.arange(-n_pad, 0))
    after = grid[last - 1] * np.exp(step * np.arange(1, n_pad + 1))
    water, others = np.zeros(grid.size), np.zeros(grid.size)
    for name, value in transmission.molecules.items():
        depth = -np.log(np.clip(value, 1e-30, 1.0))
        if name == "H2O":
            water += depth
        else:
            others += depth
    return _Depths(
        np.concatenate([before, grid[inside], after]),
        np.pad(water[inside], n_pad, mode="edge"),
        np.pad(others[inside], n_pad, mode="edge"),
    )


def _fallback(star: _Star, used: NDArray[np.bool_], grid: Array, note: Note) -> TelluricFit:
    """No line-by-line transmission: the star over its own smooth continuum stands in, after the LSF."""
    nan = float("nan")
    level = np.where(used, star.flux, np.median(star.flux[used]))
    weight = used.astype(np.float64)
    for _ in range(10):  # an upper envelope: channels in absorption count less
        continuum = star.splines @ _solve(star.splines, level, np.sqrt(weight))[0]
        scatter = _MAD_TO_SIGMA * np.median(np.abs(level - continuum)[used])
        weight = used * np.where(level < continuum - scatter, 0.05, 1.0)
    continuum = np.maximum(continuum, 1e-3 * np.median(level))
    return TelluricFit(
        water=nan,
        airmass=nan,
        velocity_km_s=nan,
        velocity_err_km_s=nan,
        resolving_power_scale=nan,
        wavelength_hi_um=grid,
        transmission_hi=np.ones(grid.size),
        transmission_channels=np.where(used, star.flux / continuum, 0.0),
        continuum=continuum,
        weights=weight,
        chi2=nan,
        n_used=int(np.count_nonzero(used)),
        explained=0.0,
        model_error=nan,
        usable=False,
        notes=(note,),
    )


def _velocity_notes(velocity: float, error: float) -> tuple[Note, ...]:
    if abs(velocity) <= max(VELOCITY_NOTE_KM_S, 4.0 * error):
        return ()
    message = f"tellurics lie at {velocity:+.1f} +- {error:.1f} km/s from where they should"
    if abs(abs(velocity) - MEDIUM_KM_S) < max(8.0, 4.0 * error):
        message += (
            "; that is the shift of air wavelengths read as vacuum ones"
            if velocity < 0
            else ("; that is the shift of vacuum wavelengths converted as if they were air ones")
        )
    return (Note("telluric-velocity", message),)


def _result(
    star: _Star, used: NDArray[np.bool_], depths: _Depths, solution: _Solution, grid: Array, frame: float
) -> TelluricFit:
    """Everything handed on, evaluated over all channels and on the fine grid."""
    water, airmass, scale = (float(np.exp(solution.x[k])) for k in (0, 1, 3))
    velocity = float(solution.x[2]) * LIGHT_KM_S
    error = float(np.sqrt(solution.covariance[2, 2])) * LIGHT_KM_S
    factor = frame * float(doppler_factor(velocity))
    native = depths.transmission(water, airmass)
    place = np.clip(grid / factor, depths.wavelength[0], depths.wavelength[-1])
    operator = _operator(star, depths, velocity, scale)
    channels = np.where(operator.covered, operator.apply(native), 1.0)
    full = np.zeros(star.splines.shape[1])
    full[np.any(star.splines[used] > 0, axis=0)] = solution.coefficients
    weights = np.zeros(star.flux.size)
    weights[used] = solution.robust
    return TelluricFit(
        water=water,
        airmass=airmass,
        velocity_km_s=velocity,
        velocity_err_km_s=error,
        resolving_power_scale=scale,
        wavelength_hi_um=grid,
        transmission_hi=PchipInterpolator(depths.wavelength, native)(place),
        transmission_channels=channels,
        continuum=star.splines @ full,
        weights=weights,
        chi2=solution.chi2,
        n_used=int(np.count_nonzero(solution.robust > 0.5)),
        explained=solution.explained,
        model_error=solution.model_error,
        usable=True,
        notes=_velocity_notes(velocity, error),
    )
