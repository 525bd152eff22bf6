"""The simulator's own point-spread function: a core, a halo and speckles, all as sums of Gaussians.

Every part is a Gaussian, or an exact mixture of Gaussians, integrated over the pixels with error
functions; so a plane is normalised to one over the infinite sky by construction and a position may
lie anywhere, outside the field too.

* core: Gaussian, FWHM proportional to wavelength;
* halo: Moffat profile as its Gamma mixture of Gaussians (twelve of them: 1 % out to 1.5 FWHM, fainter
  beyond), FWHM proportional to wavelength**-0.2
  (the law of long-exposure seeing, common practice);
* speckles: copies of the core whose distance from the source is proportional to wavelength.

The share of the halo follows the Marechal law, 1 - exp(-k / wavelength**2) (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, roots_genlaguerre

from xcorr.units import FWHM_PER_SIGMA

Array = NDArray[np.float64]
HALO_NODES = 12


@dataclass(frozen=True)
class PointSpread:
    """Shape of the point-spread function.

    Attributes
    ----------
    fwhm_pixels : float
        FWHM of the core at `wavelength_um`.
    wavelength_um : float
        Where the widths and shares are given.
    halo_fraction, halo_fwhm_pixels, halo_beta : float
        Share of the flux, FWHM and Moffat exponent (> 1) of the halo.
    speckle_xy : array (n_speckle, 2)
        Offsets (x, y) from the source in pixels at `wavelength_um`.
    speckle_flux : array (n_speckle,)
        Flux of each speckle as a fraction of the whole at `wavelength_um`.
    """

    fwhm_pixels: float
    wavelength_um: float
    halo_fraction: float = 0.0
    halo_fwhm_pixels: float = 12.0
    halo_beta: float = 2.5
    speckle_xy: Array | None = None
    speckle_flux: Array | None = None

    def components(self, wavelength_um: Array) -> tuple[Array, Array, Array]:
        """Gaussians per channel: flux (n, k), sigma in pixels (n, k), offset (n, k, 2)."""
        ratio = (wavelength_um / self.wavelength_um)[:, None]
        halo = 1.0 - (1.0 - self.halo_fraction) ** (ratio**-2)
        core_sigma = self.fwhm_pixels / FWHM_PER_SIGMA * ratio
        nodes, node_weights = roots_genlaguerre(HALO_NODES, self.halo_beta - 2.0)
        alpha = 0.5 * self.halo_fwhm_pixels / np.sqrt(2.0 ** (1.0 / self.halo_beta) - 1.0)
        halo_sigma = alpha / np.sqrt(2.0 * nodes) * ratio**-0.2
        halo_flux = halo * node_weights / node_weights.sum()
        speckle_xy = np.zeros((0, 2)) if self.speckle_xy is None else self.speckle_xy
        speckle_flux = np.zeros(0) if self.speckle_flux is None else self.speckle_flux
        coherent = 1.0 - halo
        speckles = coherent * speckle_flux / (1.0 - self.halo_fraction)
        flux = np.hstack([coherent - speckles.sum(axis=1, keepdims=True), halo_flux, speckles])
        sigma = np.hstack([core_sigma, halo_sigma, core_sigma * np.ones(speckle_flux.size)])
        offset = np.zeros((wavelength_um.size, flux.shape[1], 2))
        offset[:, 1 + HALO_NODES :] = ratio[:, :, None] * speckle_xy
        return flux, sigma, offset


def _pixel_integrals(centre: Array, sigma: Array, n_pixel: int) -> Array:
    """Integral of unit Gaussians over pixels 0 .. n - 1: (n_wave, k, n_pixel)."""
    edges = np.arange(n_pixel + 1) - 0.5
    return np.diff(ndtr((edges - centre[..., None]) / sigma[..., None]), axis=-1)


def render(
    spread: PointSpread, wavelength_um: Array, position_xy: Array, nx: int, ny: int
) -> NDArray[np.float32]:
    """Fraction of a source's flux in each pixel.

    Parameters
    ----------
    spread : PointSpread
    wavelength_um : array (n_wave,)
    position_xy : array (n_wave, 2)
        Zero-based position of the source in each channel.
    nx, ny : int

    Returns
    -------
    float32 array (n_wave, ny, nx)
        Sums to one over an infinite field.
    """
    flux, sigma, offset = spread.components(wavelength_um)
    centre = position_xy[:, None, :] + offset
    along_x = _pixel_integrals(centre[..., 0], sigma, nx)
    along_y = _pixel_integrals(centre[..., 1], sigma, ny) * flux[..., None]
    return np.matmul(along_y.transpose(0, 2, 1), along_x).astype(np.float32)


def random_speckles(
    n: int, peak: float, radius_pixels: tuple[float, float], core_fraction: float, seed: int
) -> tuple[Array, Array]:
    """Offsets (n, 2) and fluxes (n,) of speckles with exponential brightness.

    Parameters
    ----------
    peak : float
        Mean ratio of a speckle's peak to the core's.
    radius_pixels : (float, float)
        Inner and outer distance; uniform in area.
    """
    rng = np.random.default_rng(seed)
    radius = np.sqrt(rng.uniform(radius_pixels[0] ** 2, radius_pixels[1] ** 2, n))
    angle = rng.uniform(0.0, 2.0 * np.pi, n)
    flux = rng.exponential(peak, n)
    flux *= core_fraction / (1.0 + flux.sum())
    return np.column_stack([radius * np.cos(angle), radius * np.sin(angle)]), flux
