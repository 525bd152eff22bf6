"""What was understood of an exposure: axes, sampling, planes, errors, PSF, in numbers."""

from __future__ import annotations

import math
import warnings
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import InputError, Note
from xcorr.psf import N_NODE, find_peak, fit_star_image, node_images
from xcorr.units import LIGHT_KM_S

MATCHING_ERRORS = (0.8, 1.25)
"""Scatter over claimed error that still counts as matching; common practice, no source."""
MAX_SPAXELS = 400
MIN_SAMPLES = 200


@dataclass(frozen=True)
class ErrorCheck:
    """Claimed errors against the scatter between neighbouring channels.

    Attributes
    ----------
    claimed_sigma : float
        Median claimed 1 sigma of the samples compared, physical units; NaN without errors.
    scatter_sigma : float
        Robust scatter of the same samples.
    ratio : float
        Scatter over claimed error, sample by sample: 1 for honest errors of white noise.
    spread_of_claimed : float
        Relative interquartile range of the claimed errors along the channels; 0 is a constant plane.
    n_samples : int
    verdict : str
    """

    claimed_sigma: float
    scatter_sigma: float
    ratio: float
    spread_of_claimed: float
    n_samples: int
    verdict: str


@dataclass(frozen=True)
class SourceImage:
    """The brightest source of the collapsed cube.

    Attributes
    ----------
    xy : (x, y)
        Zero-based pixels.
    fwhm_pixels : float
        NaN where the fit is impossible (the note says why).
    """

    xy: tuple[float, float]
    fwhm_pixels: float


@dataclass(frozen=True)
class Inspection:
    """Everything `inspect_cube` found; the fields are the keys of ``xcorr inspect --json``.

    Wavelengths are vacuum whatever the file's medium; sampling figures are (low, median, high) over channels.
    """

    file: str
    sha256: str
    kind: str
    n_wave: int
    ny: int
    nx: int
    n_orders: int
    wavelength_range_um: tuple[float, float]
    medium_of_file: str
    frame: str
    barycentric_velocity_km_s: float | None
    channel_km_s: tuple[float, float, float]
    resolving_power: tuple[float, float, float] | None
    pixels_per_resolution_element: tuple[float, float, float] | None
    unit: str
    telluric_corrected: bool
    starlight_removed: bool
    masked_fraction: float
    dead_channels: int
    dead_spaxels: int
    has_celestial_wcs: bool
    planes: Mapping[str, str]
    errors: ErrorCheck
    brightest: SourceImage | None
    notes: tuple[Note, ...]


def inspect_cube(cube: Cube) -> Inspection:
    """Describe an exposure.

    Parameters
    ----------
    cube : Cube

    Returns
    -------
    Inspection
    """
    n_wave, ny, nx = cube.shape
    usable = ~cube.mask
    brightest, source_notes = _brightest(cube, usable)
    low, high = float(cube.wavelength_um.min()), float(cube.wavelength_um.max())
    width = channel_widths_km_s(cube)
    resolving = _resolving_per_channel(cube)
    return Inspection(
        file=cube.source,
        sha256=cube.sha256,
        kind="spectrum" if cube.is_spectrum else "cube",
        n_wave=n_wave,
        ny=ny,
        nx=nx,
        n_orders=int(np.unique(cube.order).size),
        wavelength_range_um=(low, high),
        medium_of_file=_medium_of_file(cube),
        frame=cube.frame,
        barycentric_velocity_km_s=cube.barycentric_velocity_km_s,
        channel_km_s=_low_median_high(width),
        resolving_power=None if resolving is None else _low_median_high(resolving),
        pixels_per_resolution_element=(
            None if resolving is None else _low_median_high(LIGHT_KM_S / resolving / width)
        ),
        unit=cube.unit,
        telluric_corrected=cube.telluric_corrected,
        starlight_removed=cube.starlight_removed,
        masked_fraction=float(cube.mask.mean()),
        dead_channels=int(n_wave - usable.any(axis=(1, 2)).sum()),
        dead_spaxels=int(ny * nx - usable.any(axis=0).sum()),
        has_celestial_wcs=cube.celestial_header is not None,
        planes=dict(cube.planes),
        errors=check_errors(cube),
        brightest=brightest,
        notes=(*cube.notes, *source_notes),
    )


def _medium_of_file(cube: Cube) -> str:
    """ "vacuum" or "air" as the reader took the file's wavelengths to be; the reader notes it last."""
    said = cube.planes.get("spectral_axis", "").rsplit(", ", 1)[-1]
    return said if said in ("vacuum", "air") else "vacuum"


def channel_widths_km_s(cube: Cube) -> NDArray[np.float64]:
    """Distance of neighbouring channel centres as a velocity, within orders, (n_step,)."""
    step = np.diff(cube.wavelength_um)
    same = np.diff(cube.order) == 0
    middle = 0.5 * (cube.wavelength_um[1:] + cube.wavelength_um[:-1])
    return (LIGHT_KM_S * step / middle)[same]


def _resolving_per_channel(cube: Cube) -> NDArray[np.float64] | None:
    """R at the places of `channel_widths_km_s`; the mean over spaxels where it varies with them."""
    if cube.resolving_power is None:
        return None
    resolving = cube.resolving_power.reshape(cube.shape[0], -1).mean(axis=1)
    return (0.5 * (resolving[1:] + resolving[:-1]))[np.diff(cube.order) == 0]


def _low_median_high(values: NDArray[np.float64]) -> tuple[float, float, float]:
    if values.size == 0:
        return math.nan, math.nan, math.nan
    return float(values.min()), float(np.median(values)), float(values.max())


def check_errors(cube: Cube) -> ErrorCheck:
    """Do the claimed errors match the scatter?

    The scatter is that of f(i) - [f(i-2) + f(i+2)]/2, which is blind to slopes and to the correlation of
    next neighbours (the DER_SNR estimator of Stoehr et al. 2008, ASP Conf. 394, 505), from the median
    absolute value. Of a cube only its fainter half of spaxels counts: on bright ones spectral lines, not
    noise, make the scatter.
    """
    columns = _faint_spaxels(cube)
    data = cube.data.reshape(cube.shape[0], -1)[:, columns].astype(np.float64)
    usable = ~cube.mask.reshape(cube.shape[0], -1)[:, columns]
    same = cube.order[4:] == cube.order[:-4]
    compared = usable[2:-2] & usable[:-4] & usable[4:] & same[:, None]
    n_samples = int(compared.sum())
    if n_samples < MIN_SAMPLES:
        return ErrorCheck(math.nan, math.nan, math.nan, math.nan, n_samples, "too few samples to tell")
    difference = (data[2:-2] - 0.5 * (data[:-4] + data[4:]))[compared]
    scale = 10.0**-cube.scale_exponent
    scatter = _robust_sigma(difference) / math.sqrt(1.5) * scale
    if cube.variance is None:
        return ErrorCheck(math.nan, scatter, math.nan, math.nan, n_samples, "no errors claimed")
    variance = cube.variance.reshape(cube.shape[0], -1)[:, columns].astype(np.float64)
    expected = np.sqrt((variance[2:-2] + 0.25 * (variance[:-4] + variance[4:]))[compared])
    ratio = _robust_sigma(difference / expected)
    claimed = np.sqrt(variance[2:-2][compared])
    low, middle, high = np.percentile(claimed, [25, 50, 75])
    verdict = _error_verdict(ratio, constant=bool(claimed.min() == claimed.max()))
    return ErrorCheck(float(middle) * scale, scatter, ratio, float((high - low) / middle), n_samples, verdict)


def _faint_spaxels(cube: Cube) -> NDArray[np.int64]:
    """Flat indices of at most `MAX_SPAXELS` spaxels, evenly from the fainter half of the usable ones."""
    count = (~cube.mask).sum(axis=0, dtype=np.int64).ravel()
    total = np.where(cube.mask, 0.0, cube.data).sum(axis=0, dtype=np.float64).ravel()
    alive = np.flatnonzero(count > 0)
    if alive.size == 0:
        return alive
    order = alive[np.argsort(total[alive] / count[alive], kind="stable")]
    faint = order[: max(1, (order.size + 1) // 2)]
    return faint[np.linspace(0, faint.size - 1, min(MAX_SPAXELS, faint.size)).round().astype(np.int64)]


def _robust_sigma(values: NDArray[np.float64]) -> float:
    """Scatter about zero from the median absolute value, 1 sigma of a Gaussian."""
    return float(1.482602218505602 * np.median(np.abs(values)))


def _error_verdict(ratio: float, *, constant: bool) -> str:
    low, high = MATCHING_ERRORS
    tail = "; the error plane is constant" if constant else ""
    if ratio == 0:
        return f"the data do not scatter: smoothed or made up{tail}"
    if ratio > high:
        return f"claimed errors are {ratio:.3g} times smaller than the scatter of noise and lines{tail}"
    if ratio < low:
        return f"claimed errors are {1 / ratio:.3g} times larger than the scatter; correlated noise?{tail}"
    return f"claimed errors match the scatter{tail}"


def _brightest(cube: Cube, usable: NDArray[np.bool_]) -> tuple[SourceImage | None, tuple[Note, ...]]:
    """Position and width of the brightest source; nothing for a spectrum."""
    if cube.is_spectrum or not usable.any():
        return None, ()
    wavelength, images = node_images(cube.data, usable, cube.wavelength_um, min(N_NODE, cube.shape[0]))
    finite = np.isfinite(images)
    count = finite.sum(axis=0)
    mean = np.where(count > 0, np.where(finite, images, 0.0).sum(axis=0) / np.maximum(count, 1), np.nan)
    xy = find_peak(mean)
    try:
        with warnings.catch_warnings():
            # spaxels without any usable sample have no mean
            warnings.filterwarnings("ignore", message="Mean of empty slice", category=RuntimeWarning)
            star = fit_star_image(wavelength, images, xy, ~(count == len(images)))
    except InputError as error:
        return SourceImage(xy, math.nan), (Note("psf-not-measured", str(error)),)
    return SourceImage(star.star_xy, star.psf.fwhm_pixels), ()
