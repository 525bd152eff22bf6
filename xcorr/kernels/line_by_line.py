"""Sum of Voigt lines on a wavenumber grid: threads own pieces of it, so the bits never depend on them."""

from __future__ import annotations

import numba
import numpy as np

from xcorr.kernels.jit import jit
from xcorr.kernels.voigt import INV_SQRT_PI, voigt_scalar

FAR_RADIUS = 30.0  # |z| >= 30: one level of the continued fraction, relative error 3e-6
_PIECE = 256  # grid points per task; part of the definition of the result's bits only through the grid


@jit(inline="always")
def _add_far(
    nu,  # (n,)
    first,
    last,
    centre,
    amplitude,  # strength * a / (pi * width)
    inverse_width,
    damping,
    out,  # (n,), added to
):
    """Far wing: H = a / sqrt(pi) * (r + 1/2) / (r^2 - u^2 + a^2 + 1/4), r = u^2 + a^2."""
    a2 = damping * damping
    for i in range(first, last):
        u = (nu[i] - centre) * inverse_width
        u2 = u * u
        r = u2 + a2
        out[i] += amplitude * (r + 0.5) / (r * r - u2 + a2 + 0.25)


@jit(inline="always")
def _first_at_or_above(
    values,  # (n,), ascending
    low,
    high,
    target,
):
    """Smallest index in [low, high] with values[index] >= target."""
    while low < high:
        middle = (low + high) // 2
        if values[middle] < target:
            low = middle + 1
        else:
            high = middle
    return low


@jit
def _fill_piece(
    nu,  # (n,)
    first,
    last,
    centre,  # (m,)
    strength,  # (m,)
    width,  # (m,)
    hwhm,  # (m,)
    wing,
    out,  # (n,), set on [first, last)
):
    """All lines whose window reaches the grid points [first, last), in the order of the list."""
    for i in range(first, last):
        out[i] = 0.0
    line = _first_at_or_above(centre, 0, centre.size, nu[first] - wing)
    while line < centre.size and centre[line] <= nu[last - 1] + wing:
        middle = centre[line]
        begin, end = first, last
        if middle - wing > nu[first]:
            begin = _first_at_or_above(nu, first, last, middle - wing)
        if middle + wing < nu[last - 1]:
            end = _first_at_or_above(nu, first, last, middle + wing)
        inverse = 1.0 / width[line]
        damping = hwhm[line] * inverse
        far_amplitude = strength[line] * damping * inverse * INV_SQRT_PI * INV_SQRT_PI
        reach = FAR_RADIUS * width[line]
        if damping >= FAR_RADIUS or middle + reach < nu[begin] or middle - reach > nu[end - 1]:
            _add_far(nu, begin, end, middle, far_amplitude, inverse, damping, out)
        else:
            left = _first_at_or_above(nu, begin, end, middle - reach)
            right = _first_at_or_above(nu, left, end, middle + reach)
            _add_far(nu, begin, left, middle, far_amplitude, inverse, damping, out)
            amplitude = strength[line] * inverse * INV_SQRT_PI
            for i in range(left, right):
                out[i] += amplitude * voigt_scalar(damping, (nu[i] - middle) * inverse)
            _add_far(nu, right, end, middle, far_amplitude, inverse, damping, out)
        line += 1


@jit(parallel=True)
def sum_of_lines(
    nu,  # (n,), wavenumber, cm-1, ascending
    centre,  # (m,), line positions, cm-1, ascending
    strength,  # (m,), cm / molecule
    width,  # (m,), Doppler 1/e half-width, cm-1, > 0
    hwhm,  # (m,), Lorentz HWHM, cm-1
    wing,  # cm-1: a line is zero where |nu - centre| > wing
    out,  # (n,), cm2 / molecule, overwritten
):
    """Cross section: sum over lines of strength times the normalised Voigt profile.

    The wing is cut, not renormalised. Threads take disjoint pieces of the grid and add lines in list
    order: the result is the same bit for bit whatever the number of threads.
    """
    pieces = (nu.size + _PIECE - 1) // _PIECE
    for piece in numba.prange(pieces):
        first = piece * _PIECE
        last = min(first + _PIECE, nu.size)
        _fill_piece(nu, first, last, centre, strength, width, hwhm, wing, out)


def doppler_width(centre: np.ndarray, temperature_k: float, mass_u: np.ndarray) -> np.ndarray:
    """Doppler 1/e half-width, cm-1: nu sqrt(2 k T / (m c^2)); HWHM is sqrt(ln 2) times it.

    Parameters
    ----------
    centre : float64 array (m,)
        Line positions, cm-1.
    temperature_k : float
        Kelvin.
    mass_u : float64 array (m,)
        Mass of the molecule, atomic mass units.
    """
    # HWHM / nu = 3.581163e-7 sqrt(T / M) (CODATA 2018)
    return centre * (3.581163e-7 / np.sqrt(np.log(2.0))) * np.sqrt(temperature_k / mass_u)
