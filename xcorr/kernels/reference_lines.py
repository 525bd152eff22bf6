"""Slow, obvious twins of the line and transfer kernels: equality with them is a test."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import wofz


def voigt(a: NDArray, u: NDArray) -> NDArray[np.float64]:
    """H(a, u) from scipy's Faddeeva function."""
    return wofz(np.asarray(u) + 1j * np.asarray(a)).real


def sum_of_lines(nu, centre, strength, width, hwhm, wing) -> NDArray[np.float64]:
    """Cross section, cm2 / molecule: one line after the other, full Voigt everywhere inside the wing."""
    out = np.zeros(nu.size)
    for line in range(centre.size):
        near = np.abs(nu - centre[line]) <= wing
        profile = voigt(hwhm[line] / width[line], (nu[near] - centre[line]) / width[line])
        out[near] += strength[line] * profile / (np.sqrt(np.pi) * width[line])
    return out


def emergent_flux(optical_depth, source, mu, weight, n_step: int = 400) -> NDArray[np.float64]:
    """Flux: Int S exp(-tau/mu) dtau/mu by Gauss quadrature inside each layer, plus the diffusive floor."""
    node, gauss = np.polynomial.legendre.leggauss(n_step)
    place = 0.5 * (node + 1.0)[:, None]
    flux = np.zeros(optical_depth.shape[1])
    top = np.vstack([np.zeros(flux.size), np.cumsum(optical_depth, axis=0)])
    for cosine, share in zip(mu, weight, strict=True):
        intensity = np.zeros(flux.size)
        for layer, step in enumerate(optical_depth):
            inside = source[layer] + (source[layer + 1] - source[layer]) * place
            decay = np.exp(-(top[layer] + step * place) / cosine) * step / cosine
            intensity += 0.5 * np.sum(gauss[:, None] * inside * decay, axis=0)
        slope = (source[-1] - source[-2]) / optical_depth[-1]
        intensity += (source[-1] + cosine * slope) * np.exp(-top[-1] / cosine)
        flux += share * intensity
    return flux
