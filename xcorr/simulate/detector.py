"""Detector noise with a covariance known exactly, and bad pixels.

Noise = sqrt(variance) * z with z of unit variance and the covariance K_wave (x) K_y (x) K_x.
Along y and x, K is first-order autoregressive, rho**distance. Along wavelength it is
(1 - f) rho**lag + f exp(-lag / scale): a short and a slow part.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solveh_banded
from scipy.signal import lfilter

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Correlation:
    """Correlation of the noise to the next channel and spaxels.

    Attributes
    ----------
    rho_channel : float
        Of the short part, to the next channel.
    slow_fraction, slow_scale_channels : float
        Share of the variance and e-folding length of the slow part.
    rho_y, rho_x : float
        To the next spaxel along each axis.
    """

    rho_channel: float = 0.0
    slow_fraction: float = 0.0
    slow_scale_channels: float = 8.0
    rho_y: float = 0.0
    rho_x: float = 0.0

    @property
    def is_white(self) -> bool:
        """True if every sample is independent."""
        return self.rho_channel == self.slow_fraction == self.rho_y == self.rho_x == 0.0

    @property
    def rho_slow(self) -> float:
        """Correlation to the next channel of the slow part."""
        return float(np.exp(-1.0 / self.slow_scale_channels))

    def along_wave(self, lag: Array) -> Array:
        """Autocorrelation at a lag in channels."""
        short, slow = self.rho_channel ** np.abs(lag), self.rho_slow ** np.abs(lag)
        return (1.0 - self.slow_fraction) * short + self.slow_fraction * slow

    def between_spaxels(self, y: Array, x: Array) -> Array:
        """Correlation matrix (p, p) of the spaxels at integer positions (y, x)."""
        dy, dx = np.abs(y[:, None] - y[None, :]), np.abs(x[:, None] - x[None, :])
        return self.rho_y**dy * self.rho_x**dx

    def draw(self, rng: np.random.Generator, shape: tuple[int, int, int]) -> NDArray[np.float32]:
        """A field (n_wave, ny, nx) of zero mean and unit variance."""
        z = _autoregressive(rng.standard_normal(shape, np.float32), self.rho_channel, 0)
        if self.slow_fraction:
            slow = _autoregressive(rng.standard_normal(shape, np.float32), self.rho_slow, 0)
            z = (
                np.float32(np.sqrt(1.0 - self.slow_fraction)) * z
                + np.float32(np.sqrt(self.slow_fraction)) * slow
            )
        return _autoregressive(_autoregressive(z, self.rho_y, 1), self.rho_x, 2)

    def solve_wave(self, values: Array) -> Array:
        """K_wave**-1 times values (n_wave, m).

        Each part has a tridiagonal inverse T; (1-f) T1^-1 + f T2^-1 inverts to
        T2 [(1-f) T2 + f T1]^-1 T1, so everything stays banded.
        """
        short = _precision_bands(values.shape[0], self.rho_channel)
        if not self.slow_fraction:
            return _tridiagonal(short, values)
        slow = _precision_bands(values.shape[0], self.rho_slow)
        middle = (1.0 - self.slow_fraction) * slow + self.slow_fraction * short
        return _tridiagonal(slow, solveh_banded(middle, _tridiagonal(short, values)))


def _autoregressive(white: NDArray[np.float32], rho: float, axis: int) -> NDArray[np.float32]:
    """Stationary first-order recursion of white noise along one axis, unit variance kept."""
    if rho == 0.0:
        return white
    driven = white * np.float32(np.sqrt(1.0 - rho * rho))
    first = [slice(None)] * white.ndim
    first[axis] = slice(0, 1)
    driven[tuple(first)] = white[tuple(first)]
    return lfilter(np.ones(1, np.float32), np.array([1.0, -rho], np.float32), driven, axis=axis)


def _precision_bands(n: int, rho: float) -> Array:
    """Inverse of the matrix rho**|i-j| as the upper form of `solveh_banded` (2, n)."""
    bands = np.full((2, n), 1.0 + rho * rho)
    bands[1, [0, -1]] = 1.0
    bands[0] = -rho
    bands[0, 0] = 0.0
    return bands / (1.0 - rho * rho)


def _tridiagonal(bands: Array, values: Array) -> Array:
    """Symmetric tridiagonal matrix (upper bands) times values (n, m)."""
    product = bands[1][:, None] * values
    product[:-1] += bands[0, 1:, None] * values[1:]
    product[1:] += bands[0, 1:, None] * values[:-1]
    return product


def photon_noise(
    rng: np.random.Generator, electrons: NDArray[np.float32], read_noise: float
) -> NDArray[np.float32]:
    """Unit-variance, uncorrelated noise of Poisson electrons plus Gaussian read noise."""
    noise = rng.poisson(electrons) - electrons + read_noise * rng.standard_normal(electrons.shape, np.float32)
    return (noise / np.sqrt(electrons + read_noise**2)).astype(np.float32)
