"""Coarse start, Gauss-Newton with the splines eliminated, and robust weights."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.ndimage import median_filter
from scipy.optimize import least_squares

from xcorr.spectral.continuum import MAD_TO_SIGMA, tukey_weights
from xcorr.tellurics.model import (
    AIRMASS_RANGE,
    SCALE_RANGE,
    VELOCITY_REACH_KM_S,
    WATER_RANGE,
    Depths,
    Star,
    model_and_slopes,
    operator_at,
)
from xcorr.tellurics.types import Array, FitParameters
from xcorr.units import LIGHT_KM_S

SEARCH_KM_S = 120.0
"""Coarse search: beyond the 82 km/s of a wrong medium."""
MIN_MODEL_ERROR = 1e-3
"""No transmission is better than this; without it a channel of no variance would rule the fit."""
RUNNING_CHANNELS = 101
"""Window of the running model error."""
TYPICAL_AIRMASS = 1.3
# Weak priors on (ln water, ln airmass, v/c, ln R scale), for ranges that do not show one of them.
PRIOR_CENTRE = np.array([0.0, np.log(TYPICAL_AIRMASS), 0.0, 0.0])
PRIOR_WIDTH = np.array([3.0, 0.3, 1e-3, 0.1])


@dataclass(frozen=True)
class Solution:
    """Where the fit ended."""

    parameters: FitParameters
    covariance: Array  # (4, 4)
    coefficients: Array  # (n_spline,)
    robust: Array  # (n,)
    model_error: Array  # (n,)
    chi2: float
    chi2_without: float  # of the splines alone, same weights


def coarse_start(star: Star, depths: Depths, root_weight: Array) -> FitParameters:
    """Best of a grid of velocities and water columns, by the mean absolute residual (robust to lines).

    One operator serves all: here the transmission moves, by whole samples of its grid.
    """
    native_km_s = LIGHT_KM_S * float(np.median(np.diff(np.log(depths.wavelength))))
    n_side = int(np.ceil(3.0 * SEARCH_KM_S / LIGHT_KM_S * float(np.median(star.resolving))))
    samples = np.rint(np.linspace(-SEARCH_KM_S, SEARCH_KM_S, 2 * n_side + 1) / native_km_s).astype(int)
    waters = np.exp(np.linspace(np.log(0.1), np.log(10.0), 7))
    still = np.stack([depths.transmission(water, TYPICAL_AIRMASS) for water in waters])
    moved = np.concatenate([np.roll(still, n, axis=1) for n in samples])
    trials = [(velocity, water) for velocity in samples * native_km_s for water in waters]
    white = star.flux * root_weight
    best, start = np.inf, PRIOR_CENTRE
    for (velocity, water), value in zip(
        trials, operator_at(star, depths, 0.0, 1.0).apply(moved), strict=True
    ):
        _, basis = star.splines.solve(star.flux, root_weight, value)
        cost = float(np.mean(np.abs(white - basis @ (basis.T @ white))))
        if cost < best:
            best, start = cost, np.array([np.log(water), PRIOR_CENTRE[1], velocity / LIGHT_KM_S, 0.0])
    return FitParameters(start)


def gauss_newton(
    star: Star, depths: Depths, root_weight: Array, start: FitParameters
) -> tuple[FitParameters, Array, Array]:
    """Best parameters for frozen weights; LSF (x) T (n,) and the whitened Jacobian (n, 4) there."""
    last: dict[str, Any] = {"x": np.full(4, np.nan)}
    white = star.flux * root_weight

    def evaluate(x: Array) -> None:
        if np.array_equal(last["x"], x):
            return
        value, slopes = model_and_slopes(star, depths, FitParameters(x))
        coefficients, basis = star.splines.solve(star.flux, root_weight, value)
        # Kaufman's (1975) Jacobian of the variable projection: the splines re-fit each slope.
        raw = slopes.T * (star.splines.columns @ coefficients * root_weight)[:, None]
        last["x"], last["value"] = x.copy(), value
        last["residual"] = white - basis @ (basis.T @ white)
        last["jacobian"] = -(raw - basis @ (basis.T @ raw))

    def residuals(x: Array) -> Array:
        evaluate(x)
        return np.concatenate([last["residual"], (x - PRIOR_CENTRE) / PRIOR_WIDTH])

    def jacobian(x: Array) -> Array:
        evaluate(x)
        return np.concatenate([last["jacobian"], np.diag(1.0 / PRIOR_WIDTH)])

    beta = VELOCITY_REACH_KM_S / LIGHT_KM_S
    low = [np.log(WATER_RANGE[0]), np.log(AIRMASS_RANGE[0]), -beta, np.log(SCALE_RANGE[0])]
    high = [np.log(WATER_RANGE[1]), np.log(AIRMASS_RANGE[1]), beta, np.log(SCALE_RANGE[1])]
    found = least_squares(
        residuals,
        start.values,
        jac=jacobian,
        bounds=(low, high),
        x_scale=[0.1, 0.1, 1e-5, 0.1],
        xtol=1e-7,
        ftol=1e-9,
    )
    evaluate(found.x)
    return FitParameters(found.x), last["value"], last["jacobian"]


def _weights(star: Star, model: Array, continuum: Array) -> tuple[Array, Array]:
    """Robust weights of the channels, and the model error as a fraction of the continuum, both (n,).

    The error is a running one: the bands of a cool star spoil some stretches and leave others clean.
    """
    relative = (star.flux - model) / continuum
    noise = star.variance / continuum**2
    size = min(RUNNING_CHANNELS, relative.size // 4)
    running = median_filter(np.abs(relative), size=size, mode="nearest")
    scatter = MAD_TO_SIGMA * np.maximum(running, 0.5 * np.median(np.abs(relative)))
    typical = median_filter(noise, size=size, mode="nearest")
    model_error = np.sqrt(np.maximum(MIN_MODEL_ERROR**2, scatter**2 - typical))
    return tukey_weights(relative, np.sqrt(noise + model_error**2)), model_error


def _correlation_factor(residual: Array) -> float:
    """Variance inflation of a fitted parameter by residuals correlated over neighbouring channels."""
    power = float(residual @ residual)
    return max(1.0, 1.0 + 2.0 * sum(float(residual[k:] @ residual[:-k]) / power for k in range(1, 6)))


def solve(star: Star, depths: Depths) -> Solution:
    """Coarse start, then Gauss-Newton and robust weights in turn until the weights settle."""
    level = float(np.median(star.flux))
    robust, model_error = np.ones(star.flux.size), np.full(star.flux.size, 0.02)
    root = np.sqrt(robust / (star.variance + (model_error * level) ** 2))
    parameters = coarse_start(star, depths, root)
    for _ in range(8):
        parameters, value, jacobian = gauss_newton(star, depths, root, parameters)
        coefficients, _ = star.splines.solve(star.flux, root, value)
        continuum = np.maximum(star.splines.columns @ coefficients, 0.01 * level)
        previous = robust
        robust, model_error = _weights(star, continuum * value, continuum)
        root = np.sqrt(robust / (star.variance + (model_error * continuum) ** 2))
        if np.max(np.abs(robust - previous)) < 0.02:
            break
    white = star.flux * root
    coefficients, basis = star.splines.solve(star.flux, root, value)
    _, without = star.splines.solve(star.flux, root)
    residual = white - basis @ (basis.T @ white)
    plain = white - without @ (without.T @ white)
    chi2 = float(residual @ residual)
    freedom = max(1.0, float(robust.sum()) - coefficients.size - 4)
    scale = max(1.0, chi2 / freedom) * _correlation_factor(residual)
    covariance = np.linalg.inv(jacobian.T @ jacobian + np.diag(PRIOR_WIDTH**-2)) * scale
    return Solution(parameters, covariance, coefficients, robust, model_error, chi2, float(plain @ plain))
