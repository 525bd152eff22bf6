"""One exposure made ready for the search: star, PSF, tellurics, weights, residuals and template columns."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from xcorr.atmosphere import load_transmission
from xcorr.cube import Cube
from xcorr.errors import CoverageError, InputError, Note
from xcorr.kernels.reference import project
from xcorr.noise import (
    MIN_SPAXELS,
    OUTLIER_SIGMA,
    NoiseAudit,
    audit,
    excess_scatter,
    flag_outliers,
    model_variance,
    running_variance,
    scatter_variance,
)
from xcorr.psf import (
    Psf,
    StarImage,
    find_peak,
    fit_star_image,
    moffat_of_width,
    node_images,
)
from xcorr.search import ProjectedTemplates, project_templates
from xcorr.spectral import LsfOperator, covered_channels, log_grid, observed_velocity, shifted_columns
from xcorr.star import StarSpectrum, choose_spaxels, extract_star
from xcorr.starlight import Nuisance, StarlightFit, fit_spaxels, mean_weights, nuisance_model, spline_basis
from xcorr.tellurics import TelluricFit, fit_transmission
from xcorr.template import Template
from xcorr.units import BOLTZMANN_J_K, LIGHT_KM_S, LIGHT_M_S, PLANCK_J_S

DEFAULT_FWHM_PIXELS = 2.5
DEFAULT_STAR_T_EFF = 6000.0
FINE_GRID_R = 250_000.0
EXCLUSION_FWHM = 1.5
SCATTER_CHANNELS = 101
COMMON_SPREAD = 1.3
"""Scatter of sums over the field, in units of independent errors, from which a common residual is fitted."""


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
    weights = _first_weights(spectra, good, claimed)
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
    weights = _model_weights(spectra, weights, claimed, nuisance)
    if no_star and len(spectra) >= MIN_SPAXELS:
        kept = ~excluded_spaxels((ny, nx), scenery, DEFAULT_FWHM_PIXELS).ravel()
        nuisance = _with_common_residual(spectra, weights, nuisance, kept, notes)
    del claimed
    fit = fit_spaxels(spectra, weights, nuisance, in_place=True)
    if len(weights) >= MIN_SPAXELS:
        in_channel, in_spaxel = excess_scatter(fit.residual, weights)
        weights /= in_channel**2
        weights /= in_spaxel[:, None] ** 2
    outlier, scale = flag_outliers(fit.residual, weights)
    flagged = float(outlier.sum()) / max(1, int((weights > 0).sum()))
    if not cube.is_spectrum:
        weights[outlier] = 0.0
        fit = fit_spaxels(fit.residual, weights, nuisance, in_place=True)
    audited = audit(fit.residual, weights, (ny, nx), scale, 0.0 if cube.is_spectrum else flagged)
    notes += _audit_notes(audited, cube)
    telluric = _tellurics(cube, star, resolving, no_star, notes)
    throughput, in_star_units = _throughput(cube, settings, star, star_image, telluric, no_star, white, notes)
    operator, transmission_hi, transmission = _operator(cube, resolving, telluric, star)
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


def _first_weights(
    spectra: NDArray[np.float32], good: NDArray[np.bool_], claimed: NDArray[np.float32] | None
) -> NDArray[np.float32]:
    """Weights to begin with: claimed variances, or one level a spaxel from channel-to-channel differences."""
    if claimed is not None:
        return np.where(good, 1.0 / np.maximum(claimed, np.float32(1e-30)), np.float32(0.0))
    weights = np.zeros(spectra.shape, np.float32)
    for p, (row, ok) in enumerate(zip(spectra, good, strict=True)):
        if ok.sum() > 20:
            step = np.diff(row[ok].astype(np.float64))
            level = 1.4826 * np.median(np.abs(step)) / np.sqrt(2.0)
            weights[p, ok] = 1.0 / max(level**2, 1e-30)
    return weights


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


def _model_weights(
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    claimed: NDArray[np.float32] | None,
    nuisance: Nuisance,
) -> NDArray[np.float32]:
    """One iteration: weights from the fitted model instead of from the noisy data."""
    good = weights > 0
    if claimed is not None and len(spectra) < MIN_SPAXELS:
        return weights
    residual = fit_spaxels(spectra, weights, nuisance).residual
    bad = ~good
    if claimed is None:
        model = spectra - residual
        model[bad] = 0.0
        variance = scatter_variance(residual, good, model)
    else:
        # planes are reused here and below: this is where the memory peaks
        model = np.subtract(spectra, residual, out=residual)
        model[bad] = 0.0
        variance = model_variance(claimed, good, model)
    np.maximum(variance, np.float32(1e-30), out=variance)
    np.divide(np.float32(1.0), variance, out=variance)
    variance[bad] = 0.0
    return variance


def _with_common_residual(
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    nuisance: Nuisance,
    kept: NDArray[np.bool_],
    notes: list[Note],
) -> Nuisance:
    """The residual spectrum that all spaxels share, as one more column, where it is there.

    Without a star that carries it, what the sky subtraction left is common to the field and adds up in a PSF sum.
    A median over companion-free spaxels: a companion that nobody told of is a small minority.
    """
    residual = fit_spaxels(spectra, weights, nuisance).residual
    good = (weights > 0) & kept[:, None]
    count = good.sum(axis=0)
    enough = count >= MIN_SPAXELS
    if not enough.any():
        return nuisance
    normalised = np.where(good, residual * np.sqrt(weights), np.nan)[:, enough]
    spread = np.sqrt(np.nanmean(np.square(np.nansum(normalised, axis=0)) / count[enough]))
    if spread < COMMON_SPREAD:
        return nuisance
    common = np.zeros(spectra.shape[1])
    common[enough] = np.nanmedian(np.where(good, residual, np.nan)[:, enough], axis=0)
    notes.append(
        Note(
            "common-residual",
            f"the field shares a residual spectrum (sums over spaxels scatter {spread:.1f} times their error); it is "
            "fitted in every spaxel",
        )
    )
    return replace(nuisance, extras=np.vstack([nuisance.extras, common]))


def _audit_notes(audited: NoiseAudit, cube: Cube) -> list[Note]:
    notes = []
    ratio = audited.scatter_over_claimed
    if cube.variance is not None and not 0.8 <= ratio <= 1.25:
        notes.append(
            Note(
                "errors-differ",
                f"residuals of {cube.source or 'the exposure'} scatter {ratio:.2f} times the claimed errors; "
                "significance is calibrated on nulls, not on the claim",
            )
        )
    if audited.neighbour_channel > 0.1 or audited.neighbour_spaxel > 0.1:
        notes.append(
            Note(
                "noise-correlated",
                f"residuals correlate by {audited.neighbour_channel:.2f} with the next channel and "
                f"{audited.neighbour_spaxel:.2f} with the next spaxel; the null calibration takes this up",
            )
        )
    return notes


def _tellurics(
    cube: Cube, star: StarSpectrum, resolving: NDArray, no_star: bool, notes: list[Note]
) -> TelluricFit | None:
    """Transmission fitted to the star; None where T = 1 by declaration."""
    if cube.telluric_corrected:
        return None
    if no_star:
        notes.append(Note("transmission-one", "no star to fit the Earth's transmission to: taken as one"))
        return None
    middle = float(np.median(cube.wavelength_um))
    try:
        transmission = load_transmission(
            (float(cube.wavelength_um.min()) * 0.995, float(cube.wavelength_um.max()) * 1.005)
        )
    except CoverageError:
        notes.append(
            Note(
                "transmission-fallback",
                f"no line-by-line transmission is shipped for {middle:.2f} um: the observed one multiplies after "
                "the line-spread function (measured: S/N 0.97, amplitude -5 to -8 per cent)",
            )
        )
        return _fallback_fit(cube, star)
    frame = 0.0 if cube.frame == "observatory" else (cube.barycentric_velocity_km_s or 0.0)
    fit = fit_transmission(
        star.flux,
        np.where(star.known, star.variance, 1.0),
        ~star.known,
        cube.wavelength_um,
        cube.order,
        resolving,
        transmission,
        frame_velocity_km_s=frame,
    )
    notes.extend(fit.notes)
    return fit


def _fallback_fit(cube: Cube, star: StarSpectrum) -> TelluricFit:
    """Observed transmission: the star over its smooth upper continuum."""
    known = star.known
    dense = spline_basis(cube.wavelength_um, cube.order, 20).dense()
    weight = known.astype(np.float64)
    for _ in range(10):
        fitted = star.flux - project(star.flux, dense, weight)
        # an asymmetric weight follows the upper envelope: absorption lies below the continuum
        weight = np.where(known, np.where(star.flux < fitted, 0.2, 1.0), 0.0)
    continuum = np.where(fitted > 0, fitted, 1.0)
    observed = np.where(known, star.flux / continuum, 0.0)
    n_wave = observed.size
    nothing = np.zeros(0)
    return TelluricFit(
        water=np.nan,
        airmass=np.nan,
        velocity_km_s=np.nan,
        velocity_err_km_s=np.nan,
        resolving_power_scale=1.0,
        wavelength_hi_um=nothing,
        transmission_hi=nothing.copy(),
        transmission_channels=observed,
        continuum=continuum,
        weights=weight,
        chi2=np.nan,
        n_used=n_wave,
        explained=np.nan,
        model_error=np.nan,
        usable=False,
    )


def planck_shape(wavelength_um: NDArray, temperature_k: float) -> NDArray[np.float64]:
    """Planck B_lambda over its mean: the slope of a star's continuum."""
    x = PLANCK_J_S * LIGHT_M_S / (wavelength_um * 1e-6 * BOLTZMANN_J_K * temperature_k)
    shape = wavelength_um**-5.0 / np.expm1(x)
    return shape / shape.mean()


def _throughput(
    cube: Cube,
    settings: StarlightSettings,
    star: StarSpectrum,
    star_image: StarImage | None,
    telluric: TelluricFit | None,
    no_star: bool,
    white: NDArray,
    notes: list[Note],
) -> tuple[NDArray[np.float64], bool]:
    """c: data units of a companion of amplitude one and a flat spectrum of mean one, without T."""
    n_wave = cube.wavelength_um.size
    if no_star:
        level = float(np.nanmean(white)) if cube.is_spectrum else 10.0**cube.scale_exponent
        return np.full(n_wave, level if level > 0 else 1.0), False
    t_eff = settings.star_t_eff
    if t_eff is None:
        t_eff = DEFAULT_STAR_T_EFF
        notes.append(
            Note(
                "star-temperature-assumed",
                f"the star's continuum slope is that of {t_eff:.0f} K; give [starlight].star_t_eff",
            )
        )
    slope = planck_shape(cube.wavelength_um, t_eff)
    continuum = telluric.continuum if telluric is not None else _smooth_continuum(cube, star)
    continuum = continuum * _line_blanketing(star, telluric, continuum)
    if star_image is None:
        return star.scale * continuum / slope, False
    # the star's PSF-integrated flux follows the reference up to a cubic in wavelength
    known = star.known
    ascending = np.argsort(cube.wavelength_um)
    bins = np.array_split(ascending, star_image.wavelength_um.size)
    reference = np.array([star.flux[b][known[b]].mean() if known[b].any() else np.nan for b in bins])
    ratio = star_image.flux / reference
    fine = np.isfinite(ratio) & (ratio > 0)
    if fine.sum() < 2:
        return star.scale * continuum / slope, False
    line = np.polyfit(star_image.wavelength_um[fine], ratio[fine], min(3, int(fine.sum()) - 2))
    return np.polyval(line, cube.wavelength_um) * continuum / slope, True


def _line_blanketing(star: StarSpectrum, telluric: TelluricFit | None, continuum: NDArray) -> float:
    """Mean of the star outside the atmosphere over that of its continuum: amplitudes count the star with its lines."""
    clear = star.known if telluric is None else star.known & (telluric.transmission_channels > 0.3)
    if not clear.any():
        return 1.0
    outside = star.flux if telluric is None else star.flux / np.maximum(telluric.transmission_channels, 0.3)
    return float(outside[clear].mean() / continuum[clear].mean())


def _smooth_continuum(cube: Cube, star: StarSpectrum) -> NDArray[np.float64]:
    """Smooth star of telluric-corrected data."""
    dense = spline_basis(cube.wavelength_um, cube.order, 20).dense()
    return star.flux - project(star.flux, dense, star.known.astype(np.float64))


def _operator(
    cube: Cube, resolving: NDArray, telluric: TelluricFit | None, star: StarSpectrum
) -> tuple[LsfOperator, NDArray[np.float64] | None, NDArray[np.float64]]:
    """LSF operator with the line-by-line transmission on its grid, and LSF (x) T in the channels."""
    n_wave = cube.wavelength_um.size
    if telluric is not None and telluric.usable:
        grid, transmission_hi = telluric.wavelength_hi_um, telluric.transmission_hi
        scale = telluric.resolving_power_scale
    else:
        pad = 1.0 + 8.0 / float(np.min(resolving))
        grid = log_grid(cube.wavelength_um.min() / pad, cube.wavelength_um.max() * pad, FINE_GRID_R)
        transmission_hi, scale = None, 1.0
    operator = LsfOperator.build(grid, cube.wavelength_um, resolving * scale, order=cube.order)
    if transmission_hi is not None:
        return operator, transmission_hi, operator.apply(transmission_hi)
    observed = np.ones(n_wave) if telluric is None else telluric.transmission_channels
    return operator, None, np.asarray(observed)


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


@dataclass(frozen=True)
class TemplateColumns:
    """Template columns of one exposure, before projection.

    Attributes
    ----------
    columns : float64 array (n_molecule, n_velocity, n_wave)
        t(v) in data units for amplitude one, without the PSF; 0 where not covered.
    continuum : float64 array (n_continuum, n_wave)
    covered : bool array (n_molecule, n_wave)
        Channels that each template defines at every searched velocity.
    kinds : tuple of str
        `Template.kind` of each.
    """

    columns: NDArray[np.float64]
    continuum: NDArray[np.float64]
    covered: NDArray[np.bool_]
    kinds: tuple[str, ...]

    def project(self, exposure: PreparedExposure, molecules: Sequence[int]) -> ProjectedTemplates:
        """Project some of the molecules with the exposure's mean weights."""
        return project_templates(
            self.columns[list(molecules)], self.continuum, exposure.mean_weights, exposure.nuisance
        )


def template_columns(
    exposure: PreparedExposure,
    templates: Sequence[Template],
    velocity_km_s: NDArray,
    searched: slice = slice(None),
) -> TemplateColumns:
    """Columns t(v) = c * channel{ LSF (x) [F(v) T] } of every template, and the companion continuum.

    Parameters
    ----------
    exposure : PreparedExposure
    templates : sequence of Template
    velocity_km_s : array (n_velocity,)
        Barycentric.
    searched : slice
        Velocities at which the templates must cover a channel; beyond (null velocities) an end value is held.

    Raises
    ------
    CoverageError
        If a template covers fewer than half of the usable channels at every searched velocity.
    """
    shifts = observed_velocity(velocity_km_s, exposure.template_frame_km_s)
    used = exposure.mean_weights > 0
    n_wave = exposure.wavelength_um.size
    columns = np.zeros((len(templates), velocity_km_s.size, n_wave))
    covered = np.zeros((len(templates), n_wave), bool)
    for m, template in enumerate(templates):
        operator = _operator_for(exposure, template)
        covered[m] = covered_channels(operator, template.wavelength_um, shifts[searched], template.covered)
        if covered[m][used].mean() < 0.5:
            raise CoverageError(
                f"template {template.name!r} covers too few channels of {exposure.source or 'the exposure'}",
                f"{100 * covered[m][used].mean():.0f} per cent of {int(used.sum())} at every searched velocity",
                "give a template of wider range, or restrict [[exposure]].wavelength_range_um or the velocities",
            )
        columns[m] = _one_template(exposure, operator, template, shifts, used & covered[m])
        columns[m][:, ~covered[m]] = 0.0
    smooth = spline_basis(exposure.wavelength_um, exposure.order, exposure.companion_knots).dense().T \
        if exposure.companion_knots else np.zeros((0, n_wave))  # fmt: skip
    continuum = smooth * exposure.transmission * exposure.throughput
    return TemplateColumns(columns, continuum, covered, tuple(template.kind for template in templates))


def _operator_for(exposure: PreparedExposure, template: Template) -> LsfOperator:
    """The exposure's operator, or for a template of finite resolution the LSF that is still missing."""
    own = template.resolving_power
    operator = exposure.operator
    if own is None or own > 10.0 * operator.resolving_power.max():
        return operator
    missing = 1.0 / operator.resolving_power**2 - 1.0 / own**2
    # a template not sharper than the data gets the pixel only; one tenth of the LSF keeps the kernel sampled
    resolving = 1.0 / np.sqrt(np.maximum(missing, 0.01 / operator.resolving_power**2))
    return LsfOperator.build(
        operator.wavelength_hi_um, operator.wavelength_um, resolving, edges_um=operator.edges_um
    )


def _one_template(
    exposure: PreparedExposure,
    operator: LsfOperator,
    template: Template,
    shifts: NDArray,
    used: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """t(v) of one template, normalised by the mean of its reference over the used channels at v = 0."""
    flux = np.where(template.covered, template.flux, 0.0)
    reference = np.where(template.covered, template.reference_flux, 0.0)
    at_rest = shifted_columns(operator, template.wavelength_um, reference, np.zeros(1))[0]
    level = at_rest[used].mean()
    if not level > 0:
        raise InputError(
            f"template {template.name!r} has no positive mean over the used channels",
            f"{level:.3g}",
            "check its flux column and units",
        )
    columns = shifted_columns(
        operator, template.wavelength_um, flux / level, shifts, multiply=exposure.transmission_hi
    )
    if exposure.transmission_hi is None:
        columns *= exposure.transmission
    return columns * exposure.throughput
