"""A companion added to a real cube, with the simulator's own code."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import map_coordinates

from xcorr.cube import Cube
from xcorr.errors import CoverageError, InputError, Note
from xcorr.simulate.detector import Correlation
from xcorr.simulate.ideal import SignalModel, information
from xcorr.simulate.image import PointSpread, render
from xcorr.simulate.sources import sample_transmission
from xcorr.simulate.spectra import cell_means, doppler_factor, edges_of, log_grid, to_channels
from xcorr.template import Template
from xcorr.units import to_plain

Array = NDArray[np.float64]
GRID_RESOLVING_POWER = 200_000.0


def inject(
    cube: Cube,
    template: Template,
    *,
    position_xy: Any = None,
    velocity_km_s: Any = 0.0,
    amplitude: float | None = None,
    snr: float | None = None,
    star_flux: Any = 1.0,
    reference: Array | None = None,
    psf: Array | None = None,
    psf_fwhm_pixels: float | None = None,
    transmission: Any = None,
    water: float = 1.0,
    airmass: float = 1.0,
    barycentric_velocity_km_s: Any = None,
    resolving_power: Any = None,
    photon_noise: bool | None = None,
    knots: int = 40,
    companion_knots: int = 6,
    seed: int = 0,
) -> Cube:
    """Add a companion to a cube or extracted spectrum.

    The spectrum is shifted on a grid of R = 200,000, multiplied by the transmission, smoothed by the LSF,
    averaged over the channels, spread over the PSF, and added:

        data += amplitude * star_flux(lambda) * channel{ LSF [ F(v) T ] } * psf

    Parameters
    ----------
    cube : Cube
        Real or simulated; it is not changed.
    template : Template
        F. Its `reference_flux` has mean 1 over the channels at v = 0, before T.
    position_xy : (x, y) or array (n_wave, 2)
        Zero-based position; per channel where refraction moves it. Needed for a cube, unused for a spectrum.
    velocity_km_s : float or Quantity
        Companion in the barycentric frame, relativistic.
    amplitude : float, optional
        Scale of the companion; with `star_flux` 1 it is the companion's mean flux per channel in the file's
        units, summed over the PSF; with the star's flux it is the companion-to-star flux ratio.
    snr : float, optional
        Instead of `amplitude`: the companion's information limit, with the cube's own variance taken as white
        and true, starlight columns made of `reference` and the companion continuum columns.
    star_flux : float or array (n_wave,)
        In the file's units: the star summed over the PSF, divided by its transmission and its own continuum
        shape (the instrument's throughput). 1: the amplitude carries the flux.
    reference : array (n_wave,), optional
        Star spectrum of the columns that `snr` allows for; None: one ("reference none").
    psf : array (k, k) or (n_wave, k, k), optional
        Image of a point source on its own pixel grid, centred on the middle pixel, normalised to the flux
        wanted in each channel; moved by cubic splines.
    psf_fwhm_pixels : float, optional
        Instead of `psf`: Gaussian, FWHM proportional to wavelength, this value in the middle of the range.
    transmission : optional
        Object with `wavelength_um` and ``at(water=, airmass=)``, or a pair (wavelength_um, values), in the
        observatory frame; None: T = 1.
    water, airmass : float
        Passed to the transmission.
    barycentric_velocity_km_s : float or Quantity, optional
        Instead of the cube's own; the value to add to a measured velocity. Used for the companion where the
        cube is in the observatory frame, and for the transmission where it is not.
    resolving_power : float or array (n_wave,), optional
        Instead of the cube's own; of an array per spaxel the spaxel nearest to the companion counts.
    photon_noise : bool, optional
        Add the companion's photon noise to data and variance. None: if the cube knows its gain.
    knots, companion_knots : int
        Columns that `snr` allows for.
    seed : int
        Of the photon noise.

    Returns
    -------
    Cube
        With a note "injected-companion" that states amplitude, velocity and position.

    Raises
    ------
    InputError
        Missing or contradictory arguments, an unknown gain, errors or resolving power.
    CoverageError
        If the template covers fewer than half of the channels, or the position lies outside the field.
    """
    position_xy = _check_arguments(cube, position_xy, amplitude, snr, psf, psf_fwhm_pixels)
    velocity = float(to_plain(velocity_km_s, "km/s"))
    image = _image(cube, position_xy, psf, psf_fwhm_pixels)
    unused = cube.frame != "observatory" and transmission is None
    barycentric = 0.0 if unused else _barycentric(cube, barycentric_velocity_km_s)
    resolving = _resolving_power(cube, resolving_power, position_xy)
    source = _transmission(transmission, water, airmass)
    spectrum, continuum, covered = _spectra(cube, template, velocity, barycentric, resolving, source)
    scale = np.broadcast_to(np.asarray(star_flux, np.float64), spectrum.shape) * 10.0**cube.scale_exponent
    unit = (scale * spectrum).astype(np.float32)[:, None, None] * image
    if amplitude is None:
        model = SignalModel(
            signal=unit,
            variance=cube.variance,
            good=~cube.mask,
            reference=np.ones(spectrum.size) if reference is None else np.asarray(reference, np.float64),
            continuum=(scale * continuum).astype(np.float32)[:, None, None] * image,
            correlation=Correlation(),
        )
        limit = np.sqrt(max(information(model, knots, companion_knots), 0.0))
        if not limit > 0.0:
            raise CoverageError("the companion leaves no signal in the usable samples", "S/N 0", "move it")
        amplitude = float(snr) / limit
    added = unit * np.float32(amplitude)
    added[cube.mask] = 0.0
    noted = Note(
        "injected-companion",
        f"a companion was injected: template {template.name!r}, amplitude {amplitude:.6g}, "
        f"{velocity:.3f} km/s, "
        f"position {np.mean(np.atleast_2d(position_xy), axis=0).round(3).tolist()}, "
        f"{int((~covered).sum())} channels without template",
    )
    return _added(cube, added, noted, photon_noise, seed)


def _check_arguments(cube: Cube, position_xy, amplitude, snr, psf, fwhm) -> Array:
    """Raise where arguments are missing or contradict each other; the position as an array."""
    if (amplitude is None) == (snr is None):
        raise InputError("inject needs either amplitude or snr", f"{amplitude} and {snr}", "give one of them")
    if snr is not None and cube.variance is None:
        raise InputError("an S/N needs the cube's errors", "no variance", "give the amplitude")
    if not cube.is_spectrum and (psf is None) == (fwhm is None):
        raise InputError("inject needs either psf or psf_fwhm_pixels", "both or neither", "give one of them")
    if position_xy is None and not cube.is_spectrum:
        raise InputError("inject needs a position in the cube", "None", "give position_xy")
    return np.asarray((0.0, 0.0) if position_xy is None else position_xy, np.float64)


def _image(cube: Cube, position_xy, psf, fwhm) -> NDArray[np.float32]:
    """Fraction of the flux in each spaxel (n_wave, ny, nx)."""
    n_wave, ny, nx = cube.shape
    if cube.is_spectrum:
        return np.ones((n_wave, 1, 1), np.float32)
    position = np.broadcast_to(np.asarray(position_xy, np.float64), (n_wave, 2))
    x, y = position.mean(axis=0)
    if not (-0.5 <= x <= nx - 0.5 and -0.5 <= y <= ny - 0.5):
        raise CoverageError("the injected companion lies outside the field", f"({x:.2f}, {y:.2f})", "move it")
    if psf is None:
        spread = PointSpread(float(fwhm), float(np.median(cube.wavelength_um)))
        return render(spread, cube.wavelength_um, position, nx, ny)
    planes = np.asarray(psf, np.float64)
    planes = np.broadcast_to(planes, (n_wave, *planes.shape[-2:]))
    rows, columns = np.mgrid[0:ny, 0:nx]
    moved = np.empty((n_wave, ny, nx), np.float32)
    for k in range(n_wave):
        at = (
            rows - position[k, 1] + (planes.shape[1] - 1) / 2.0,
            columns - position[k, 0] + (planes.shape[2] - 1) / 2.0,
        )
        moved[k] = map_coordinates(planes[k], at, order=3, mode="constant")
    return moved


def _barycentric(cube: Cube, given) -> float:
    value = cube.barycentric_velocity_km_s if given is None else float(to_plain(given, "km/s"))
    if value is None:
        raise InputError(
            "the cube's barycentric velocity is unknown", "None", "give barycentric_velocity_km_s"
        )
    return value


def _resolving_power(cube: Cube, given, position_xy) -> float | Array:
    value = cube.resolving_power if given is None else np.asarray(given, np.float64)
    if value is None or np.any(~np.isfinite(value)) or np.any(np.asarray(value) <= 0):
        raise InputError("injection needs a positive resolving power", str(value), "give resolving_power")
    if value.ndim == 3:
        x, y = (
            np.rint(np.mean(np.atleast_2d(position_xy), axis=0)).astype(int)
            if not cube.is_spectrum
            else (0, 0)
        )
        value = value[:, y, x]
    if value.ndim and np.ptp(value) == 0.0:
        return float(value.flat[0])
    return value if value.ndim else float(value)


def _transmission(given, water: float, airmass: float) -> tuple[Array, Array] | None:
    if given is None:
        return None
    if hasattr(given, "at"):
        return sample_transmission(given, water, airmass)
    return np.asarray(given[0], np.float64), np.asarray(given[1], np.float64)


def _spectra(
    cube: Cube, template: Template, velocity: float, barycentric: float, resolving, transmission
) -> tuple[Array, Array, NDArray[np.bool_]]:
    """Companion of unit scale with T, LSF (x) T, and where the template covers it; order by order."""
    observatory = cube.frame == "observatory"
    factor = doppler_factor(velocity, barycentric if observatory else 0.0)
    # Wavelengths of a barycentric-frame cube are (1 + z_B) times those the atmosphere knows.
    stretch = 1.0 if observatory else 1.0 / doppler_factor(0.0, barycentric)
    n_wave = cube.wavelength_um.size
    spectrum, continuum, resting = np.zeros(n_wave), np.ones(n_wave), np.zeros(n_wave)
    flux, reference = _filled(template, template.flux), _filled(template, template.reference_flux)
    for order in np.unique(cube.order):
        part = cube.order == order
        centres = cube.wavelength_um[part]
        edges = edges_of(centres)
        local = resolving[part] if np.ndim(resolving) else resolving
        grid = log_grid(edges[0], edges[-1], max(GRID_RESOLVING_POWER, 20.0 * float(np.max(local))))
        cells = edges_of(grid)
        air = 1.0
        if transmission is not None:
            air = cell_means(transmission[0] * stretch, transmission[1], cells)
            continuum[part] = to_channels(grid, air, edges, local)
        shifted = cell_means(template.wavelength_um * factor, flux, cells)
        spectrum[part] = to_channels(grid, shifted * air, edges, local)
        resting[part] = to_channels(grid, cell_means(template.wavelength_um, reference, cells), edges, local)
    covered = _covered(cube, template, factor, resolving)
    if covered.sum() < 0.5 * n_wave:
        raise CoverageError(
            f"template {template.name!r} covers fewer than half of the channels",
            f"{int(covered.sum())} of {n_wave}",
            "give a longer template or a narrower range",
        )
    norm = resting[covered].mean()
    return np.where(covered, spectrum / norm, 0.0), continuum, covered


def _filled(template: Template, values: Array) -> Array:
    """Straight lines across the samples the template does not define."""
    good = template.covered
    x = template.wavelength_um
    return values if good.all() else np.interp(x, x[good], values[good])


def _covered(cube: Cube, template: Template, factor: float, resolving) -> NDArray[np.bool_]:
    """Channels whose LSF, to three sigma, meets only defined samples of the shifted template."""
    reach = 3.0 * cube.wavelength_um / (2.3548 * np.asarray(resolving))
    low, high = (cube.wavelength_um - reach) / factor, (cube.wavelength_um + reach) / factor
    x = template.wavelength_um
    holes = np.concatenate([[0], np.cumsum(~template.covered)])
    first, last = np.searchsorted(x, low), np.searchsorted(x, high)
    return (low >= x[0]) & (high <= x[-1]) & (holes[last] == holes[first])


def _added(cube: Cube, added: NDArray[np.float32], note: Note, photon_noise: bool | None, seed: int) -> Cube:
    """The cube with the companion, its photon noise and a note."""
    gain = cube.gain_e_per_unit
    wanted = gain is not None if photon_noise is None else photon_noise
    if wanted and gain is None:
        raise InputError("photon noise needs the cube's gain", "gain unknown", "set gain_e_per_unit")
    data = cube.data + added
    variance = cube.variance
    if wanted:
        extra = np.maximum(added, 0.0) / np.float32(gain)
        data += np.sqrt(extra) * np.random.default_rng(seed).standard_normal(added.shape, np.float32)
        if variance is not None:
            variance = variance + extra
    return cube.with_changes(data=data, variance=variance, notes=(*cube.notes, note))
