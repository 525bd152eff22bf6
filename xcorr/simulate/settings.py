"""What a simulated scene consists of."""

from __future__ import annotations

from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

from xcorr.errors import SettingsError
from xcorr.simulate.detector import Correlation

STAR_KINDS = ("A", "M")
TRANSMISSIONS = ("shipped", "synthetic", "none")
ERROR_PLANES = ("true", "noisy", "none")
PHOTON_STATISTICS = ("gaussian", "poisson")


@dataclass(frozen=True)
class SceneSettings:
    """A scene: star, companion, atmosphere, optics, detector. Every random draw follows from `seed`.

    Positions are zero-based pixels (x, y), velocities km/s in the barycentric frame, spectra F_lambda.

    Attributes
    ----------
    wavelength_range_um : (float, float)
        First and last channel centre, vacuum; the `n_wave` channels are equally wide.
    n_wave, nx, ny : int
        Size of a cube.
    resolving_power : float
        R = lambda / FWHM of the Gaussian LSF.
    grid_resolving_power : float
        Of the grid on which spectra meet the atmosphere, before the LSF; at least 100,000.
    frame : str
        "observatory" or "barycentric": frame of the written wavelengths.
    star : str
        "A": Planck curve with a broad Brackett-gamma line. "M": Planck curve with hot CO and H2O absorption.
    star_temperature_k : float or None
        None: 9000 (A) or 3500 (M).
    star_velocity_km_s, star_vsini_km_s : float
    star_electrons : float
        Mean electrons per channel and exposure of the star, outside the atmosphere, summed over the PSF.
    star_xy : (float, float) or None
        At the central wavelength, without dither; None: the middle of the field plus (0.3, -0.4). It may lie
        outside the field.
    companion_offset_xy : (float, float)
        Companion minus star at rotation 0.
    companion_velocity_km_s, companion_vsini_km_s : float
    contrast : float or None
        Companion-to-star flux ratio in the band (means over the channels, outside the atmosphere).
    ideal_snr : float or None
        Instead of `contrast`: the contrast is solved for so that the information limit of all exposures
        together is this.
    psf_fwhm_pixels, halo_fraction, halo_fwhm_pixels, halo_beta : float
        At the central wavelength; see `xcorr.simulate.image`.
    n_speckles : int
    speckle_peak : float
        Mean ratio of a speckle's peak to the star's peak.
    speckle_radius_pixels : (float, float)
    transmission : str
        "shipped" (the project's transmission by molecule), "synthetic" (random lines) or "none".
    water, airmass : float
        Scale of the water column and airmass of the transmission.
    throughput_slope : float
        Relative change of the instrument's throughput over the range (mean 1).
    drift_xy_pixels : (float, float)
        Shift of every source from the first to the last channel (refraction).
    n_exposures : int
    barycentric_velocity_km_s, rotation_deg : tuple of float
        Per exposure; one value serves all. The rotation turns the companion about the star from x to y, while
        speckles stay.
    dither_xy_pixels : tuple of (float, float)
        Per exposure; one value serves all.
    gain : float
        Electrons per data unit.
    background_electrons, read_noise_electrons : float
        Per sample; the background is subtracted, its noise stays.
    photon_statistics : str
        "gaussian" or "poisson".
    correlation : Correlation
        Of the noise, in wavelength and between spaxels.
    bad_fraction_flagged, bad_fraction_unflagged : float
        Share of samples that hold a wild value and are, or are not, in the mask.
    saturation_electrons : float or None
        Level at which a sample clips.
    saturation_flagged : bool
    error_plane : str
        "true": variance of the noise model. "noisy": the same from the noisy data. "none".
    seed : int
        Of noise and bad pixels. `optics_seed` fixes speckles and synthetic lines.
    """

    wavelength_range_um: tuple[float, float] = (1.97, 2.45)
    n_wave: int = 1640
    nx: int = 24
    ny: int = 24
    resolving_power: float = 4000.0
    grid_resolving_power: float = 200_000.0
    frame: str = "observatory"
    star: str = "A"
    star_temperature_k: float | None = None
    star_velocity_km_s: float = 0.0
    star_vsini_km_s: float = 0.0
    star_electrons: float = 1.0e6
    star_xy: tuple[float, float] | None = None
    companion_offset_xy: tuple[float, float] = (5.7, -3.4)
    companion_velocity_km_s: float = 0.0
    companion_vsini_km_s: float = 0.0
    contrast: float | None = None
    ideal_snr: float | None = None
    psf_fwhm_pixels: float = 2.4
    halo_fraction: float = 0.4
    halo_fwhm_pixels: float = 12.0
    halo_beta: float = 2.5
    n_speckles: int = 12
    speckle_peak: float = 0.004
    speckle_radius_pixels: tuple[float, float] = (3.0, 11.0)
    transmission: str = "shipped"
    water: float = 1.0
    airmass: float = 1.2
    throughput_slope: float = 0.0
    drift_xy_pixels: tuple[float, float] = (0.25, -0.15)
    n_exposures: int = 1
    barycentric_velocity_km_s: tuple[float, ...] = (0.0,)
    rotation_deg: tuple[float, ...] = (0.0,)
    dither_xy_pixels: tuple[tuple[float, float], ...] = ((0.0, 0.0),)
    gain: float = 1.0
    background_electrons: float = 60.0
    read_noise_electrons: float = 6.0
    photon_statistics: str = "gaussian"
    correlation: Correlation = field(default_factory=Correlation)
    bad_fraction_flagged: float = 0.0
    bad_fraction_unflagged: float = 0.0
    saturation_electrons: float | None = None
    saturation_flagged: bool = True
    error_plane: str = "true"
    seed: int = 0
    optics_seed: int = 7

    def __post_init__(self) -> None:
        _require(self.wavelength_range_um[0] > 0, "wavelengths must be positive", self.wavelength_range_um)
        _require(
            self.wavelength_range_um[1] > self.wavelength_range_um[0], "empty range", self.wavelength_range_um
        )
        for name, low in _AT_LEAST.items():
            value = getattr(self, name)
            _require(np.isfinite(value) and value >= low, f"{name} must be at least {low}", value)
        for name, allowed in _CHOICES.items():
            value = getattr(self, name)
            _require(value in allowed, f"{name} must be one of {', '.join(allowed)}", value)
        for name in ("barycentric_velocity_km_s", "rotation_deg", "dither_xy_pixels"):
            count = len(getattr(self, name))
            _require(count in (1, self.n_exposures), f"{name} needs one value or one per exposure", count)
        both = (self.contrast is None) == (self.ideal_snr is None)
        _require(not both, "give either contrast or ideal_snr", (self.contrast, self.ideal_snr))
        floor = self.background_electrons + self.read_noise_electrons
        _require(floor > 0.0, "background and read noise must not both be zero", floor)
        _require(0.0 <= self.halo_fraction < 1.0, "halo_fraction must be in [0, 1)", self.halo_fraction)
        _require(self.halo_beta > 1.0, "halo_beta must exceed 1", self.halo_beta)
        rhos = (self.correlation.rho_channel, self.correlation.rho_y, self.correlation.rho_x)
        _require(all(-1.0 < rho < 1.0 for rho in rhos), "correlations must lie inside (-1, 1)", rhos)

    def of_exposure(self, name: str, exposure: int) -> Any:
        """A per-exposure value: the only one, or that of the exposure."""
        values = getattr(self, name)
        return values[0] if len(values) == 1 else values[exposure]

    @property
    def centre_um(self) -> float:
        """Middle of the wavelength range."""
        return 0.5 * (self.wavelength_range_um[0] + self.wavelength_range_um[1])

    @property
    def temperature_k(self) -> float:
        """Temperature of the star's Planck curve."""
        default = 9000.0 if self.star == "A" else 3500.0
        return default if self.star_temperature_k is None else self.star_temperature_k

    @property
    def star_position_xy(self) -> tuple[float, float]:
        """Position of the star at the central wavelength without dither."""
        middle = (0.5 * (self.nx - 1) + 0.3, 0.5 * (self.ny - 1) - 0.4)
        return middle if self.star_xy is None else self.star_xy

    def spectral_key(self) -> tuple[Any, ...]:
        """Everything the star's spectrum and images depend on: what may not change between draws."""
        return tuple(repr(getattr(self, item.name)) for item in fields(self) if item.name not in FREE)


# What may change from draw to draw without a new rendering of the star.
FREE = frozenset(
    {
        "companion_offset_xy",
        "companion_velocity_km_s",
        "contrast",
        "ideal_snr",
        "star_electrons",
        "gain",
        "background_electrons",
        "read_noise_electrons",
        "photon_statistics",
        "correlation",
        "bad_fraction_flagged",
        "bad_fraction_unflagged",
        "saturation_electrons",
        "saturation_flagged",
        "error_plane",
        "seed",
    }
)

_AT_LEAST = {
    "n_wave": 16,
    "nx": 1,
    "ny": 1,
    "n_exposures": 1,
    "resolving_power": 10.0,
    "grid_resolving_power": 1.0e5,
    "star_electrons": 0.0,
    "psf_fwhm_pixels": 0.1,
    "halo_fwhm_pixels": 0.1,
    "n_speckles": 0,
    "speckle_peak": 0.0,
    "water": 0.0,
    "airmass": 0.0,
    "gain": 1e-30,
    "background_electrons": 0.0,
    "read_noise_electrons": 0.0,
    "bad_fraction_flagged": 0.0,
    "bad_fraction_unflagged": 0.0,
}
_CHOICES = {
    "star": STAR_KINDS,
    "transmission": TRANSMISSIONS,
    "error_plane": ERROR_PLANES,
    "photon_statistics": PHOTON_STATISTICS,
    "frame": ("observatory", "barycentric"),
}


def _require(condition: bool, what: str, got: Any) -> None:
    if not condition:
        raise SettingsError(f"scene: {what}", str(got))
