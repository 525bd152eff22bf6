"""What a simulated scene is: cubes, and the noiseless parts they were made of."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.simulate.detector import Correlation
from xcorr.simulate.ideal import SignalModel, information
from xcorr.simulate.settings import SceneSettings

Array = NDArray[np.float64]
Plane = NDArray[np.float32]


@dataclass(frozen=True)
class Exposure:
    """The noiseless parts of one exposure, in data units (electrons / gain).

    Attributes
    ----------
    star_spectrum, companion_spectrum : arrays (n_wave,)
        Summed over the PSF, with the atmosphere, at the detector.
    continuum_spectrum : array (n_wave,)
        Throughput times LSF (x) T: a featureless source of mean 1 outside the atmosphere.
    star_psf, companion_psf : float32 arrays (n_wave, ny, nx)
        Fraction of the source's flux in each spaxel.
    variance : float32 array (n_wave, ny, nx)
        True variance of every sample.
    flagged, bad : bool arrays (n_wave, ny, nx)
        Samples that the cube's mask holds, and those that are unusable in truth, flagged or not.
    star_xy, companion_xy : arrays (n_wave, 2)
        Position in each channel.
    """

    star_spectrum: Array
    companion_spectrum: Array
    continuum_spectrum: Array
    star_psf: Plane
    companion_psf: Plane
    variance: Plane
    flagged: NDArray[np.bool_]
    bad: NDArray[np.bool_]
    star_xy: Array
    companion_xy: Array

    @property
    def star(self) -> Plane:
        """Noiseless star (n_wave, ny, nx)."""
        return self.star_psf * self.star_spectrum.astype(np.float32)[:, None, None]

    @property
    def companion(self) -> Plane:
        """Noiseless companion (n_wave, ny, nx)."""
        return self.companion_psf * self.companion_spectrum.astype(np.float32)[:, None, None]

    def signal_model(self, correlation: Correlation) -> SignalModel:
        """What the information limit needs."""
        return SignalModel(
            signal=self.companion,
            variance=self.variance,
            good=~self.bad,
            reference=self.star_spectrum,
            continuum=self.companion_psf * self.continuum_spectrum.astype(np.float32)[:, None, None],
            correlation=correlation,
        )


@dataclass(frozen=True)
class Scene:
    """Cubes and their truth.

    Attributes
    ----------
    settings : SceneSettings
    cubes : tuple of Cube
        What an observer would be given.
    exposures : tuple of Exposure
        The noiseless parts, one per cube.
    truth : dict
        JSON-able; see `SceneFactory.draw`. The pipeline must never read it.
    """

    settings: SceneSettings
    cubes: tuple[Cube, ...]
    exposures: tuple[Exposure, ...]
    truth: dict[str, Any]

    @property
    def noiseless_companion(self) -> list[Plane]:
        """One array (n_wave, ny, nx) per exposure, data units."""
        return [exposure.companion for exposure in self.exposures]


def ideal_snr(scene: Scene, knots: int = 40, companion_knots: int = 6) -> float:
    """The scene's information limit; see `xcorr.simulate.ideal`."""
    correlation = scene.settings.correlation
    return information_limit([e.signal_model(correlation) for e in scene.exposures], knots, companion_knots)


def information_limit(models: list[SignalModel], knots: int = 40, companion_knots: int = 6) -> float:
    """Ideal S/N of several exposures together."""
    return float(np.sqrt(max(sum(information(model, knots, companion_knots) for model in models), 0.0)))
