"""The expensive part of a scene, done once: spectra through the atmosphere, and images."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.simulate.image import PointSpread, random_speckles, render
from xcorr.simulate.settings import SceneSettings
from xcorr.simulate.sources import (
    sample_transmission,
    shipped_transmission,
    star_flux,
    synthetic_transmission,
)
from xcorr.simulate.spectra import (
    check_spectrum,
    doppler_factor,
    edges_of,
    log_grid,
    place,
    rotate,
    to_channels,
)

Array = NDArray[np.float64]
Plane = NDArray[np.float32]


class Renderer:
    """Noiseless spectra and images of one scene, each computed on first use and kept.

    Parameters
    ----------
    settings : SceneSettings
    companion : Template or (wavelength_um, flux) or None
    transmission, star_spectrum
        See `xcorr.simulate.SceneFactory`.
    """

    def __init__(
        self, settings: SceneSettings, companion: Any, transmission: Any, star_spectrum: Any
    ) -> None:
        self.settings = settings
        self._companion = _as_spectrum(companion)
        self.companion_description = str(getattr(companion, "description", ""))
        self._given_transmission = transmission
        self._given_star = star_spectrum
        self._companion_cache: dict[tuple[float, float], Array] = {}
        self._image_cache: dict[tuple[float, ...], tuple[Array, Plane]] = {}

    @property
    def has_companion(self) -> bool:
        """False for a scene of the star alone."""
        return self._companion is not None

    @property
    def star_is_given(self) -> bool:
        """True if the star's spectrum came from the caller."""
        return self._given_star is not None

    @cached_property
    def wavelength_um(self) -> Array:
        """Channel centres in the frame of the cubes."""
        return np.linspace(*self.settings.wavelength_range_um, self.settings.n_wave)

    @cached_property
    def _grid(self) -> Array:
        edges = edges_of(self.wavelength_um)
        return log_grid(edges[0], edges[-1], self.settings.grid_resolving_power)

    @cached_property
    def _transmission(self) -> Array:
        """T on the high-resolution grid, observatory frame."""
        s = self.settings
        if self._given_transmission is not None:
            source = sample_transmission(self._given_transmission, s.water, s.airmass)
        elif s.transmission == "shipped":
            source = shipped_transmission(s.water, s.airmass)
        elif s.transmission == "synthetic":
            return synthetic_transmission(self._grid, s.water, s.airmass, s.optics_seed)
        else:
            return np.ones(self._grid.size)
        return place(*source, self._grid, needed_um=s.wavelength_range_um)

    @cached_property
    def _throughput(self) -> Array:
        low, high = self.settings.wavelength_range_um
        return 1.0 + self.settings.throughput_slope * (self.wavelength_um - self.settings.centre_um) / (
            high - low
        )

    @cached_property
    def _star_rest(self) -> Array:
        s = self.settings
        if self._given_star is None:
            return star_flux(s.star, self._grid, s.temperature_k, s.star_vsini_km_s)
        wavelength, flux = (np.asarray(part, np.float64) for part in self._given_star)
        check_spectrum(wavelength, flux, "star spectrum")
        resampled = place(wavelength, flux, self._grid, needed_um=s.wavelength_range_um)
        return rotate(self._grid, resampled, s.star_vsini_km_s)

    def _channels(self, flux: Array, exposure: int) -> Array:
        """A high-resolution spectrum in the observatory frame, on the channels of an exposure."""
        s = self.settings
        edges = edges_of(self.wavelength_um)
        if s.frame == "barycentric":
            # Written wavelengths are (1 + z_B) times the observed ones.
            edges = edges * doppler_factor(0.0, s.of_exposure("barycentric_velocity_km_s", exposure))
        return to_channels(self._grid, flux, edges, s.resolving_power)

    @cached_property
    def star_spectra(self) -> list[tuple[Array, Array]]:
        """Star of mean 1 outside the atmosphere, and continuum column, per exposure."""
        s, spectra = self.settings, []
        for i in range(s.n_exposures):
            factor = doppler_factor(s.star_velocity_km_s, s.of_exposure("barycentric_velocity_km_s", i))
            shifted = place(self._grid, self._star_rest, self._grid, factor)
            norm = np.mean(self._throughput * self._channels(shifted, i))
            star = self._throughput * self._channels(shifted * self._transmission, i) / norm
            spectra.append((star, self._throughput * self._channels(self._transmission, i)))
        return spectra

    def companion_spectrum(self, velocity: float, exposure: int) -> Array:
        """Companion of mean 1 over the channels at rest outside the atmosphere; with the atmosphere here.

        Zero where there is no companion.
        """
        s = self.settings
        if self._companion is None:
            return np.zeros(s.n_wave)
        barycentric = s.of_exposure("barycentric_velocity_km_s", exposure)
        key = (velocity, barycentric)
        if key not in self._companion_cache:
            factor = doppler_factor(velocity, barycentric)
            shifted = self._companion_on_grid(self._companion[1], factor)
            column = self._throughput * self._channels(shifted * self._transmission, exposure)
            self._companion_cache[key] = column / self._companion_norm
        return self._companion_cache[key]

    def _companion_on_grid(self, flux: Array, factor: float) -> Array:
        source, needed = self._companion[0], self.settings.wavelength_range_um
        if self.settings.companion_vsini_km_s <= 0:
            return place(source, flux, self._grid, factor, needed_um=needed)
        resting = rotate(self._grid, place(source, flux, self._grid), self.settings.companion_vsini_km_s)
        return place(self._grid, resting, self._grid, factor)

    @cached_property
    def _companion_norm(self) -> float:
        edges = edges_of(self.wavelength_um)
        resting = self._companion_on_grid(self._companion[2], 1.0)
        return float(np.mean(to_channels(self._grid, resting, edges, self.settings.resolving_power)))

    @cached_property
    def point_spread(self) -> PointSpread:
        """The optics, the same for star and companion."""
        s = self.settings
        speckle_xy, speckle_flux = random_speckles(
            s.n_speckles, s.speckle_peak, s.speckle_radius_pixels, 1.0 - s.halo_fraction, s.optics_seed
        )
        return PointSpread(
            s.psf_fwhm_pixels,
            s.centre_um,
            s.halo_fraction,
            s.halo_fwhm_pixels,
            s.halo_beta,
            speckle_xy,
            speckle_flux,
        )

    def _positions(self, mean_xy: NDArray[np.floating], exposure: int) -> Array:
        """Positions (n_wave, 2) with dither and refraction."""
        s = self.settings
        low, high = s.wavelength_range_um
        along = (self.wavelength_um - s.centre_um) / (high - low)
        dithered = np.asarray(mean_xy, float) + s.of_exposure("dither_xy_pixels", exposure)
        return dithered + along[:, None] * np.asarray(s.drift_xy_pixels)

    def image(self, mean_xy: Any, exposure: int) -> tuple[Array, Plane]:
        """Positions and PSF planes; the star's are kept."""
        key = (*map(float, mean_xy), *map(float, self.settings.of_exposure("dither_xy_pixels", exposure)))
        if key not in self._image_cache:
            positions = self._positions(mean_xy, exposure)
            planes = render(
                self.point_spread, self.wavelength_um, positions, self.settings.nx, self.settings.ny
            )
            star = tuple(map(float, mean_xy)) == tuple(map(float, self.settings.star_position_xy))
            if not star:
                return positions, planes
            self._image_cache[key] = positions, planes
        return self._image_cache[key]


def _as_spectrum(companion: Any) -> tuple[Array, Array, Array] | None:
    """(wavelength_um, flux, flux that sets the scale) of a Template or a pair."""
    if companion is None:
        return None
    if hasattr(companion, "flux"):
        good = companion.covered
        parts = (companion.wavelength_um[good], companion.flux[good], companion.reference_flux[good])
    else:
        parts = (companion[0], companion[1], companion[1])
    wavelength, flux, reference = (np.asarray(part, np.float64) for part in parts)
    check_spectrum(wavelength, flux, "companion spectrum")
    return wavelength, flux, reference


def companion_position(s: SceneSettings, exposure: int) -> tuple[float, float]:
    """Companion at the central wavelength without dither: the offset turned from x to y."""
    angle = np.deg2rad(s.of_exposure("rotation_deg", exposure))
    dx, dy = s.companion_offset_xy
    x, y = s.star_position_xy
    return (
        float(x + np.cos(angle) * dx - np.sin(angle) * dy),
        float(y + np.sin(angle) * dx + np.cos(angle) * dy),
    )
