"""One exposure made ready for the search: star, PSF, tellurics, weights, residuals and template columns."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import InputError, Note
from xcorr.noise import (
    MIN_SPAXELS,
    OUTLIER_SIGMA,
    NoiseAudit,
    audit,
    excess_scatter,
    flag_outliers,
    like_their_ring,
    running_variance,
)
from xcorr.psf import (
    Psf,
    StarImage,
    find_peak,
    fit_star_image,
    moffat_of_width,
    node_images,
)
from xcorr.spectral import LsfOperator
from xcorr.star import StarSpectrum, choose_spaxels, extract_star
from xcorr.starlight import Nuisance, StarlightFit, fit_spaxels, mean_weights, nuisance_model
from xcorr.tellurics import TelluricFit
from xcorr.throughput import exposure_operator, fit_tellurics, star_throughput
from xcorr.units import LIGHT_KM_S
from xcorr.weights import audit_notes, first_weights, model_weights, with_common_residual

DEFAULT_FWHM_PIXELS = 2.5


EXCLUSION_FWHM = 1.5
SCATTER_CHANNELS = 101


@dataclass(frozen=True)
class StarlightSettings:
    """What the nuisance model of an exposure consists of (run file, [starlight])."""

    reference: str | StarSpectrum = "brightest"
    knots: int = 40
    background_knots: int = 0
    companion_knots: int = 6
    star_t_eff: float | None = None


@dataclass(frozen=True)
class Scenery:
    """Where things are in one exposure, zero-based pixels (x, y).

    Attributes
    ----------
    companion_xy : (x, y) or None
    star_xy : (x, y) or None
        None: found.
    sources : tuple of (x, y, radius)
        Other sources: kept out of reference and PSF.
    psf : Psf or None
        Given PSF; None: from the star's image.
    """

    companion_xy: tuple[float, float] | None = None
    star_xy: tuple[float, float] | None = None
    sources: tuple[tuple[float, float, float], ...] = ()
    psf: Psf | None = None


@dataclass(frozen=True)
class PreparedExposure:
    """An exposure after starlight removal.

    Attributes
    ----------
    wavelength_um, order : arrays (n_wave,)
    shape : (ny, nx)
    weights, residual : float32 arrays (n_spaxel, n_wave)
        1 / variance (zero where unusable) and data minus starlight.
    fit, nuisance : StarlightFit, Nuisance
    star : StarSpectrum
    star_image : StarImage or None
    psf : Psf or None
        None for an extracted spectrum.
    star_xy : (x, y) or None
    throughput : float64 array (n_wave,)
        c of the method: data units per unit of a template of mean one and amplitude one.
    transmission : float64 array (n_wave,)
        LSF (x) T.
    operator : LsfOperator
    transmission_hi : float64 array (n_hi,) or None
        Line-by-line transmission on the operator's fine grid; None: `transmission` multiplies after the LSF.
    telluric : TelluricFit or None
    template_frame_km_s : float
        Barycentric velocity still to be taken out of the template's: 0 for barycentric wavelengths.
    amplitude_in_star_units : bool
    resolution_km_s : float
        FWHM of the LSF at mid-range.
    audit : NoiseAudit
    notes : tuple of Note
    """

    wavelength_um: NDArray[np.float64]
    order: NDArray[np.int16]
    shape: tuple[int, int]
    weights: NDArray[np.float32]
    residual: NDArray[np.float32]
    fit: StarlightFit
    nuisance: Nuisance
    star: StarSpectrum
    star_image: StarImage | None
    psf: Psf | None
    star_xy: tuple[float, float] | None
    throughput: NDArray[np.float64]
    transmission: NDArray[np.float64]
    operator: LsfOperator
    transmission_hi: NDArray[np.float64] | None
    telluric: TelluricFit | None
    template_frame_km_s: float
    amplitude_in_star_units: bool
    resolution_km_s: float
    audit: NoiseAudit
    white_image: NDArray[np.float64]
    usable: NDArray[np.bool_]
    mean_weights: NDArray[np.float64]
    companion_knots: int
    source: str = ""
    notes: tuple[Note, ...] = field(default=())
    claimed_weights: NDArray[np.float32] | None = None

    def restricted(self, covered: NDArray[np.bool_]) -> PreparedExposure:
        """The same exposure with other channels taken out, its starlight fitted again.

        Parameters
        ----------
        covered : bool array (n_wave,)
        """
        if np.all(covered | (self.mean_weights == 0)):
            return self
        weights = np.where(covered, self.weights, np.float32(0.0))
        fit = fit_spaxels(self.residual, weights, self.nuisance)
        return replace(
            self, weights=weights, residual=fit.residual, fit=fit, mean_weights=mean_weights(weights)
        )

    def reweighted(self, signal: NDArray[np.float64]) -> PreparedExposure:
        """An extracted spectrum with weights from its own scatter once the fitted signal is taken out.

        Lines that no template knows, not noise, limit bright spectra: the running scatter of what remains takes
        the place of claimed variances below it, and single samples far off it are dropped.

        Parameters
        ----------
        signal : array (n_wave,)
            Fitted template columns, projected.
        """
        good = self.weights[0] > 0
        remaining = np.where(good, self.residual[0] - signal, 0.0)
        scatter = running_variance(remaining, good, SCATTER_CHANNELS)
        outlier = good & (np.abs(remaining) > OUTLIER_SIGMA * np.sqrt(scatter))
        variance = np.maximum(scatter, np.divide(1.0, self.claimed, out=np.zeros_like(scatter), where=good))
        weights = np.where(good & ~outlier, 1.0 / variance, 0.0).astype(np.float32)[None]
        fit = fit_spaxels(self.residual, weights, self.nuisance)
        return replace(
            self,
            weights=weights,
            residual=fit.residual,
            fit=fit,
            mean_weights=mean_weights(weights),
            audit=replace(self.audit, flagged_fraction=float(outlier.sum() / max(1, good.sum()))),
        )

    @property
    def claimed(self) -> NDArray[np.float32]:
        """Weights (n_wave,) of an extracted spectrum as the file claims them."""
        return self.weights[0] if self.claimed_weights is None else self.claimed_weights


def prepare(cube: Cube, scenery: Scenery, settings: StarlightSettings) -> PreparedExposure:
    """Star, PSF, weights, starlight and tellurics of one exposure.

    Raises
    ------
    InputError
        No resolving power, no usable star, or a background that cannot be told from starlight.
    """
    notes = list(cube.notes)
    n_wave, ny, nx = cube.shape
    resolving = _resolving_power(cube)
    no_star = settings.reference == "none" or cube.starlight_removed
    usable = ~cube.mask
    share = usable.mean(axis=0)
    white = _white_image(cube, usable)
    star_image, psf, star_xy = _star_and_psf(cube, usable, white, scenery, no_star, notes)
    spectra = np.array(cube.data.reshape(n_wave, -1).T, order="C")
    good = np.array(usable.reshape(n_wave, -1).T, order="C")
    claimed = None if cube.variance is None else np.array(cube.variance.reshape(n_wave, -1).T, order="C")
    weights = first_weights(spectra, good, claimed)
    del good
    star = _star(cube, settings, spectra, weights, white, share, scenery, psf, no_star)
    weights[:, ~star.known] = 0.0
    nuisance = nuisance_model(
        cube.wavelength_um,
        cube.order,
        star.flux,
        knots=settings.knots,
        background_knots=settings.background_knots,
    )
    kept = ~excluded_spaxels((ny, nx), scenery, DEFAULT_FWHM_PIXELS if psf is None else psf.fwhm_pixels)
    fit, weights, nuisance, audited = _remove_starlight(
        cube, spectra, weights, claimed, nuisance, kept, star_xy, no_star, notes
    )
    del claimed
    telluric = fit_tellurics(cube, star, resolving, no_star, notes)
    throughput, in_star_units = star_throughput(
        cube, settings.star_t_eff, star, star_image, telluric, no_star, white, notes
    )
    operator, transmission_hi, transmission = exposure_operator(cube, resolving, telluric, star)
    middle = n_wave // 2
    return PreparedExposure(
        wavelength_um=cube.wavelength_um,
        order=cube.order,
        shape=(ny, nx),
        weights=weights,
        residual=fit.residual,
        fit=fit,
        nuisance=nuisance,
        star=star,
        star_image=star_image,
        psf=psf,
        star_xy=star_xy,
        throughput=throughput,
        transmission=transmission,
        operator=operator,
        transmission_hi=transmission_hi,
        telluric=telluric,
        template_frame_km_s=_template_frame(cube, notes),
        amplitude_in_star_units=in_star_units,
        resolution_km_s=LIGHT_KM_S / float(resolving[middle]),
        audit=audited,
        white_image=white,
        usable=(share > 0.5),
        mean_weights=mean_weights(weights),
        companion_knots=settings.companion_knots,
        source=cube.source,
        notes=tuple(notes),
        claimed_weights=weights[0].copy() if cube.is_spectrum else None,
    )


def _remove_starlight(
    cube: Cube,
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    claimed: NDArray[np.float32] | None,
    nuisance: Nuisance,
    kept: NDArray[np.bool_],
    star_xy: tuple[float, float] | None,
    no_star: bool,
    notes: list[Note],
) -> tuple[StarlightFit, NDArray[np.float32], Nuisance, NoiseAudit]:
    """Final weights and residuals; `spectra` is overwritten, `kept` (ny, nx) leaves the companion out."""
    weights = model_weights(spectra, weights, claimed, nuisance)
    if no_star and len(spectra) >= MIN_SPAXELS:
        nuisance = with_common_residual(spectra, weights, nuisance, kept.ravel(), notes)
    fit = fit_spaxels(spectra, weights, nuisance, in_place=True)
    if len(weights) >= MIN_SPAXELS:
        in_channel, in_spaxel = excess_scatter(fit.residual, weights)
        in_spaxel = like_their_ring(in_spaxel, kept, star_xy)
        weights /= in_channel**2
        weights /= in_spaxel[:, None] ** 2
    outlier, scale = flag_outliers(fit.residual, weights)
    flagged = float(outlier.sum()) / max(1, int((weights > 0).sum()))
    if cube.is_spectrum:
        # its outliers are judged later, once the templates are fitted
        flagged = 0.0
    else:
        weights[outlier] = 0.0
        fit = fit_spaxels(fit.residual, weights, nuisance, in_place=True)
    audited = audit(fit.residual, weights, kept.shape, scale, flagged)
    notes += audit_notes(audited, cube)
    return fit, weights, nuisance, audited


def _resolving_power(cube: Cube) -> NDArray[np.float64]:
    """R per channel; spaxel-dependent R is taken at its median for now, which costs amplitude, not S/N."""
    if cube.resolving_power is None:
        raise InputError(
            f"the resolving power of {cube.source or 'the cube'} is not known",
            "none in the file or the run file",
            "give [[exposure]].resolving_power",
        )
    if cube.resolving_power.ndim == 3:
        return np.median(cube.resolving_power, axis=(1, 2))
    return np.asarray(cube.resolving_power)


def _white_image(cube: Cube, usable: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Mean of the usable samples, NaN where none."""
    count = usable.sum(axis=0)
    total = np.sum(cube.data, axis=0, dtype=np.float64, where=usable)
    return np.divide(total, count, out=np.full(count.shape, np.nan), where=count > 0)


def excluded_spaxels(shape: tuple[int, int], scenery: Scenery, fwhm: float) -> NDArray[np.bool_]:
    """Spaxels of the companion (1.5 FWHM) and of other sources, (ny, nx)."""
    rows, columns = np.indices(shape)
    out = np.zeros(shape, bool)
    if scenery.companion_xy is not None:
        x, y = scenery.companion_xy
        out |= np.hypot(columns - x, rows - y) <= EXCLUSION_FWHM * fwhm
    for x, y, radius in scenery.sources:
        out |= np.hypot(columns - x, rows - y) <= radius
    return out


def _star_and_psf(
    cube: Cube,
    usable: NDArray[np.bool_],
    white: NDArray,
    scenery: Scenery,
    no_star: bool,
    notes: list[Note],
) -> tuple[StarImage | None, Psf | None, tuple[float, float] | None]:
    """The star's place and image where there is one, and the PSF to use."""
    _, ny, nx = cube.shape
    if cube.is_spectrum:
        return None, None, None
    fallback = scenery.psf
    if no_star:
        if fallback is None:
            fallback = moffat_of_width(DEFAULT_FWHM_PIXELS, cube.wavelength_um)
            notes.append(
                Note(
                    "psf-assumed", f"no star and no [psf]: a FWHM of {DEFAULT_FWHM_PIXELS} pixels is assumed"
                )
            )
        return None, fallback, scenery.star_xy
    guess_fwhm = fallback.fwhm_pixels if fallback is not None else DEFAULT_FWHM_PIXELS
    star_xy, excluded = _find_star(white, scenery, guess_fwhm)
    inside = -0.5 <= star_xy[0] <= nx - 0.5 and -0.5 <= star_xy[1] <= ny - 0.5
    if not inside and fallback is None:
        raise InputError(
            "the star lies outside the field, so its image gives no PSF",
            f"star at ({star_xy[0]:.1f}, {star_xy[1]:.1f}) in {nx} x {ny}",
            "give [psf].fwhm_pixels or [psf].file",
        )
    if not inside:
        notes.append(Note("star-off-field", "the star lies outside the field: amplitudes are relative"))
        return None, fallback, star_xy
    nodes, images = node_images(cube.data, usable, cube.wavelength_um)
    try:
        image = fit_star_image(nodes, images, star_xy, excluded, guess_fwhm=guess_fwhm)
    except InputError as error:
        if fallback is None:
            raise
        notes.append(Note("psf-given", f"the star's image could not be fitted ({error.what})"))
        return None, fallback, star_xy
    if fallback is not None:
        return image, fallback, image.star_xy
    return image, image.psf, image.star_xy


def _find_star(
    white: NDArray, scenery: Scenery, fwhm: float
) -> tuple[tuple[float, float], NDArray[np.bool_]]:
    """Position (x, y) of the star and the spaxels (ny, nx) to leave out of its image.

    A companion in the star's core must not hide the star, and one brighter than a masked star must not pose as it.
    """
    excluded = excluded_spaxels(white.shape, scenery, fwhm)
    others = excluded_spaxels(white.shape, replace(scenery, companion_xy=None), fwhm)
    star_xy, companion = scenery.star_xy, scenery.companion_xy
    if star_xy is None:
        star_xy = find_peak(np.where(others, np.nan, white))
        if companion is not None and np.hypot(*np.subtract(star_xy, companion)) < 1.0:
            star_xy = find_peak(np.where(excluded, np.nan, white))
    if companion is not None and np.hypot(*np.subtract(star_xy, companion)) < EXCLUSION_FWHM * fwhm:
        excluded = others
    return star_xy, excluded


def _star(
    cube: Cube,
    settings: StarlightSettings,
    spectra: NDArray,
    weights: NDArray,
    white: NDArray,
    share: NDArray,
    scenery: Scenery,
    psf: Psf | None,
    no_star: bool,
) -> StarSpectrum:
    """The reference spectrum, by the rule of the run file."""
    n_wave = cube.wavelength_um.size
    if isinstance(settings.reference, StarSpectrum):
        return settings.reference
    if no_star:
        return StarSpectrum(np.ones(n_wave), np.zeros(n_wave), 1.0, np.zeros(0, np.int64))
    if cube.is_spectrum:
        raise InputError(
            "an extracted spectrum has no spaxels to take the star from",
            f"reference = {settings.reference!r}",
            'set [starlight].reference to "none", or to the file of the star\'s spectrum',
        )
    fwhm = psf.fwhm_pixels if psf is not None else DEFAULT_FWHM_PIXELS
    chosen = choose_spaxels(white, share, excluded_spaxels(white.shape, scenery, fwhm))
    return extract_star(
        spectra, weights, cube.wavelength_um, cube.order, chosen, knots=max(12, settings.knots)
    )


def _template_frame(cube: Cube, notes: list[Note]) -> float:
    """Barycentric velocity that still separates the wavelengths from the barycentric frame."""
    if cube.frame == "barycentric":
        return 0.0
    if cube.frame == "heliocentric":
        notes.append(
            Note("frame-heliocentric", "heliocentric wavelengths are taken as barycentric (within 15 m/s)")
        )
        return 0.0
    if cube.barycentric_velocity_km_s is None:
        notes.append(
            Note(
                "barycentric-unknown",
                f"{cube.source or 'an exposure'} has no barycentric velocity: velocities are in its own frame; "
                "give [[exposure]].barycentric_velocity_km_s",
            )
        )
        return 0.0
    return cube.barycentric_velocity_km_s
