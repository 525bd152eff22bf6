"""The Voigt function H(a, u) = Re w(u + ia), by quadrature near the origin and a continued fraction beyond.

Relative error against `scipy.special.wofz` over 1e-9 < a < 1e3, 0 <= u < 1e3: below 3e-8.

References
----------
Chiarella & Reichel 1968, Math. Comp. 22, 137; Matta & Reichel 1971, Math. Comp. 25, 339: trapezoidal rule
for the plasma dispersion integral with the residue of its pole. Al Azah & Chandler-Wilde 2021, SIAM J.
Numer. Anal. 59, 2346: the choice between its two node sets that keeps the *relative* error small.
Abramowitz & Stegun 7.1.15: Laplace's continued fraction; Humlicek 1982, JQSRT 27, 437 splits the plane
in the same way.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xcorr.errors import InputError
from xcorr.kernels.jit import jit

INV_SQRT_PI = 1.0 / math.sqrt(math.pi)
_STEP = 0.55  # node spacing: truncation exp(-pi^2 / h^2) = 7e-15
_NODES = 9  # the first node left out has exp(-t^2) = 2e-11
_POLE_LIMIT = math.pi / _STEP  # above this height the pole's residue is below the truncation error
_FRACTION_RADIUS2 = 49.0  # |z| >= 7: five levels of the continued fraction give 2e-8
_GAUSS_HALF = np.exp(-(((np.arange(_NODES) + 0.5) * _STEP) ** 2))
_GAUSS_WHOLE = np.exp(-((np.arange(_NODES) * _STEP) ** 2)) * np.where(np.arange(_NODES) == 0, 0.5, 1.0)
_TINY_DAMPING = 1e-9  # below it exp(-u^2) is no longer negligible beside a / (sqrt(pi) u^2) at |z| = 7


@jit
def _quadrature(a: float, u: float) -> float:
    """H for |z| < 7: every term of the sum is positive, so nothing cancels."""
    fraction = u / _STEP - math.floor(u / _STEP)
    use_half = fraction < 0.25 or fraction > 0.75  # nodes at (k + 1/2) h are the far ones
    u2, a2 = u * u, a * a
    total = 0.0
    for k in range(_NODES):
        if use_half:
            node, gauss = (k + 0.5) * _STEP, _GAUSS_HALF[k]
        else:
            node, gauss = k * _STEP, _GAUSS_WHOLE[k]
        t2 = node * node
        real = u2 - a2 - t2
        total += gauss * (u2 + a2 + t2) / (real * real + 4.0 * u2 * a2)
    total *= 2.0 * a * _STEP / math.pi
    if a < _POLE_LIMIT:
        # residue 2 exp(-z^2) / (1 +- exp(-2 pi i z / h))
        grow = math.exp(2.0 * math.pi * a / _STEP)
        if not use_half:
            grow = -grow
        phase = 2.0 * math.pi * u / _STEP
        low_re, low_im = 1.0 + grow * math.cos(phase), -grow * math.sin(phase)
        size = 2.0 * math.exp(a2 - u2) / (low_re * low_re + low_im * low_im)
        angle = 2.0 * u * a
        total += size * (math.cos(angle) * low_re - math.sin(angle) * low_im)
    return total


@jit
def voigt_scalar(a: float, u: float) -> float:
    """H(a, u) of two floats, a >= 0; for use inside other kernels."""
    u = abs(u)
    if not u * u + a * a >= _FRACTION_RADIUS2:  # NaN goes this way too, and stays NaN
        return _quadrature(a, u)
    z = complex(u, a)
    f = z - 2.5 / z
    f = z - 2.0 / f
    f = z - 1.5 / f
    f = z - 1.0 / f
    f = z - 0.5 / f
    value = INV_SQRT_PI * f.imag / (f.real * f.real + f.imag * f.imag)
    if a < _TINY_DAMPING:
        value += math.exp(-u * u)
    return value


@jit
def _voigt_arrays(
    a,  # (n,)
    u,  # (n,)
    out,  # (n,)
):
    for i in range(out.size):
        out[i] = voigt_scalar(a[i], u[i])


def voigt(a: ArrayLike, u: ArrayLike) -> NDArray[np.float64]:
    """Voigt function H(a, u) = Re w(u + ia), w the Faddeeva function.

    Parameters
    ----------
    a : array_like
        Damping: Lorentz HWHM over Doppler 1/e half-width, >= 0. Broadcast against `u`.
    u : array_like
        Distance from the line centre in Doppler 1/e half-widths.

    Returns
    -------
    float64 array
        H, dimensionless; the line profile is H / (sqrt(pi) * Doppler 1/e half-width).

    Raises
    ------
    InputError
        If a damping is negative.
    """
    damping, distance = np.broadcast_arrays(np.asarray(a, np.float64), np.asarray(u, np.float64))
    if np.any(damping < 0):
        raise InputError("the Voigt damping must not be negative", f"{np.min(damping):g}", "give a >= 0")
    out = np.empty(damping.shape)
    _voigt_arrays(
        np.ascontiguousarray(damping).ravel(), np.ascontiguousarray(distance).ravel(), out.reshape(-1)
    )
    return out
