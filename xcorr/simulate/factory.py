"""Draws scenes: the contrast that gives the wanted S/N, the noise, the cubes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import SettingsError
from xcorr.simulate.detector import photon_noise
from xcorr.simulate.ideal import SignalModel, compact
from xcorr.simulate.rendering import Renderer, companion_position
from xcorr.simulate.scene import Exposure, Scene, information_limit
from xcorr.simulate.settings import SceneSettings
from xcorr.simulate.truth import celestial_header, truth_of

Plane = NDArray[np.float32]


class SceneFactory:
    """Renders a star and its atmosphere once; draws noise, positions, velocities and contrasts many times.

    Parameters
    ----------
    settings : SceneSettings
    companion : Template or (wavelength_um, flux), optional
        Companion spectrum F_lambda, vacuum, rest frame; None leaves it out.
    transmission : object, optional
        Instead of the one `settings.transmission` names: has `wavelength_um` and ``at(water=, airmass=)``.
    star_spectrum : (wavelength_um, flux), optional
        Instead of the built-in star: rest frame, vacuum.
    """

    def __init__(
        self,
        settings: SceneSettings,
        companion: Any = None,
        *,
        transmission: Any = None,
        star_spectrum: Any = None,
    ) -> None:
        self.settings = settings
        self._render = Renderer(settings, companion, transmission, star_spectrum)

    def draw(self, **changes: Any) -> Scene:
        """One scene.

        Parameters
        ----------
        **changes
            Settings to replace, of those that leave the star's rendering alone: seed, companion_offset_xy,
            companion_velocity_km_s, contrast or ideal_snr, star_electrons, noise and bad pixels.

        Returns
        -------
        Scene
            Its `truth` holds the settings, contrast (= amplitude of the true full template), ideal S/N
            in total and per exposure, positions, velocities and the covariance.
        """
        if changes.get("contrast") is not None:
            changes.setdefault("ideal_snr", None)
        if changes.get("ideal_snr") is not None:
            changes.setdefault("contrast", None)
        settings = replace(self.settings, **changes)
        if settings.spectral_key() != self.settings.spectral_key():
            raise SettingsError("this change needs a new SceneFactory", ", ".join(changes), "make one")
        exposures = [self._noiseless(settings, i) for i in range(settings.n_exposures)]
        contrast = _solve_contrast(exposures, settings) if self._render.has_companion else 0.0
        exposures = [_with_contrast(exposure, contrast, settings.gain) for exposure in exposures]
        seeds = np.random.SeedSequence(settings.seed).spawn(settings.n_exposures)
        cubes = []
        for i, (exposure, seed) in enumerate(zip(exposures, seeds, strict=True)):
            cubes.append(self._observe(settings, exposure, i, np.random.default_rng(seed.spawn(1)[0])))
        truth = truth_of(settings, exposures, contrast, self._render)
        return Scene(settings, tuple(cubes), tuple(exposures), truth)

    def _noiseless(self, s: SceneSettings, i: int) -> Exposure:
        """Exposure with a companion of contrast 1 and the variance without it."""
        level = s.star_electrons / s.gain
        star, continuum = self._render.star_spectra[i]
        star_xy, star_psf = self._render.image(s.star_position_xy, i)
        companion_xy, companion_psf = self._render.image(companion_position(s, i), i)
        companion = self._render.companion_spectrum(s.companion_velocity_km_s, i)
        electrons = star_psf * (star * s.star_electrons).astype(np.float32)[:, None, None]
        flagged, unflagged = _bad_samples(s, electrons, i)
        electrons += np.float32(s.background_electrons + s.read_noise_electrons**2)
        electrons *= np.float32(s.gain**-2)
        return Exposure(
            star_spectrum=star * level,
            companion_spectrum=companion * level,
            continuum_spectrum=continuum,
            star_psf=star_psf,
            companion_psf=companion_psf,
            variance=electrons,
            flagged=flagged,
            bad=flagged | unflagged,
            star_xy=star_xy,
            companion_xy=companion_xy,
        )

    def _observe(self, s: SceneSettings, exposure: Exposure, i: int, rng: np.random.Generator) -> Cube:
        """The noisy cube."""
        expected = exposure.star
        expected += exposure.companion
        noise = _unit_noise(s, rng, expected)
        noise *= np.sqrt(exposure.variance)
        data = expected + noise
        flagged, wild = exposure.flagged, exposure.bad & ~exposure.flagged
        if wild.any():
            data[wild] += np.sqrt(exposure.variance[wild]) * rng.uniform(20.0, 200.0, int(wild.sum()))
        if s.saturation_electrons is not None:
            np.minimum(data, np.float32(s.saturation_electrons / s.gain), out=data)
        variance = _error_plane(s, data, exposure.variance)
        data[flagged] = 0.0
        if variance is not None:
            variance[flagged] = 1.0
        return Cube(
            data=data.astype(np.float32),
            variance=variance,
            mask=flagged.copy(),
            wavelength_um=self._render.wavelength_um.copy(),
            resolving_power=np.full(s.n_wave, float(s.resolving_power)),
            frame=s.frame,
            barycentric_velocity_km_s=float(s.of_exposure("barycentric_velocity_km_s", i)),
            unit="electron" if s.gain == 1.0 else "adu",
            gain_e_per_unit=s.gain,
            celestial_header=celestial_header(s, i),
            header={"OBJECT": "simulated scene"},
            source=f"scene-{s.seed}-{i + 1}",
        )


def simulate_scene(
    settings: SceneSettings, companion: Any = None, *, transmission: Any = None, star_spectrum: Any = None
) -> Scene:
    """One scene from scratch; see `SceneFactory` for the parameters and for many scenes."""
    return SceneFactory(settings, companion, transmission=transmission, star_spectrum=star_spectrum).draw()


def _solve_contrast(unit: list[Exposure], s: SceneSettings) -> float:
    """Contrast as asked, or the one that gives the asked ideal S/N (white noise: to 5e-4).

    The companion's own photons add to the variance, so that S/N grows like contrast**0.5 to contrast**1. The
    loop is run on the spaxels that matter and on white noise; correlated noise then changes the target once,
    by a ratio that hardly depends on the contrast. The truth holds the value computed afterwards.
    """
    if s.contrast is not None:
        return float(s.contrast)
    if not s.ideal_snr > 0.0:
        return 0.0
    rows = [compact(exposure.signal_model(s.correlation)) for exposure in unit]

    def white_snr(contrast: float) -> float:
        return information_limit([_scaled(row, contrast, s.gain) for row in rows])

    contrast = _solve_monotonic(white_snr, s.ideal_snr, 0.0)
    if s.correlation.is_white:
        return contrast
    whole = [_with_contrast(exposure, contrast, s.gain).signal_model(s.correlation) for exposure in unit]
    return _solve_monotonic(white_snr, s.ideal_snr**2 / information_limit(whole), contrast)


def _solve_monotonic(snr: Callable[[float], float], wanted: float, start: float) -> float:
    """Contrast at which the S/N is `wanted`, by secants in logarithms; `start` 0 means none is known."""
    if start <= 0.0:
        faint = 1.0e-9
        reached = snr(faint)
        if not reached > 0.0:
            raise SettingsError(
                "no contrast gives the wanted ideal S/N", "a companion without signal in the field"
            )
        start = faint * wanted / reached
    x, power = np.log(start), 1.0
    off = np.log(snr(start) / wanted)
    for _ in range(30):
        if abs(off) < 2e-5:
            break
        step = -off / power
        before, x = off, x + step
        off = np.log(snr(np.exp(x)) / wanted)
        power = float(np.clip((off - before) / step, 0.4, 1.1))
    # Eight digits: the last bits depend on the linear-algebra library.
    return float(f"{np.exp(x):.8g}")


def _scaled(unit: SignalModel, contrast: float, gain: float) -> SignalModel:
    """A unit-contrast model at another contrast, with the companion's photons."""
    signal = unit.signal * np.float32(contrast)
    return replace(unit, signal=signal, variance=unit.variance + signal / np.float32(gain))


def _with_contrast(unit: Exposure, contrast: float, gain: float) -> Exposure:
    """Scale the companion of a unit-contrast exposure and add its photons to the variance."""
    scaled = replace(unit, companion_spectrum=unit.companion_spectrum * contrast)
    return replace(scaled, variance=unit.variance + scaled.companion / np.float32(gain))


def _bad_samples(
    s: SceneSettings, star_electrons: Plane, exposure: int
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Flagged and unflagged bad samples, the same whenever asked for the same seed and exposure."""
    shape = star_electrons.shape
    flagged, unflagged = np.zeros(shape, bool), np.zeros(shape, bool)
    if s.bad_fraction_flagged or s.bad_fraction_unflagged:
        seed = np.random.SeedSequence(s.seed).spawn(s.n_exposures)[exposure].spawn(2)[1]
        uniform = np.random.default_rng(seed).random(shape, np.float32)
        flagged = uniform < s.bad_fraction_flagged
        unflagged = (uniform >= s.bad_fraction_flagged) & (
            uniform < s.bad_fraction_flagged + s.bad_fraction_unflagged
        )
    if s.saturation_electrons is not None:
        saturated = star_electrons + s.background_electrons > s.saturation_electrons
        if s.saturation_flagged:
            flagged |= saturated
        else:
            unflagged |= saturated
    return flagged, unflagged


def _unit_noise(s: SceneSettings, rng: np.random.Generator, expected: Plane) -> Plane:
    """Noise of unit variance with the asked statistics or correlation."""
    if s.photon_statistics == "gaussian":
        return s.correlation.draw(rng, expected.shape)
    if not s.correlation.is_white:
        raise SettingsError("Poisson noise is drawn uncorrelated only", str(s.correlation), "use 'gaussian'")
    electrons = expected * np.float32(s.gain) + np.float32(s.background_electrons)
    return photon_noise(rng, electrons, s.read_noise_electrons)


def _error_plane(s: SceneSettings, data: Plane, true: Plane) -> Plane | None:
    """The variance plane an observer is given."""
    if s.error_plane == "none":
        return None
    if s.error_plane == "true":
        return true.copy()
    electrons = (
        np.maximum(data * np.float32(s.gain) + s.background_electrons, 0.0) + s.read_noise_electrons**2
    )
    return np.maximum(electrons / s.gain**2, 1e-6).astype(np.float32)
