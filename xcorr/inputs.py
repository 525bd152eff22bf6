"""From the run file to exposures, positions and templates: the one place that reads for the chain."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.atmosphere import builtin_template
from xcorr.config import Settings
from xcorr.cube import Cube
from xcorr.errors import InputError, Note, SettingsError
from xcorr.exposure import PreparedExposure, Scenery, StarlightSettings, excluded_spaxels
from xcorr.geometry import field_map, sky_offset_to_pixels
from xcorr.io import read_exposure, read_spectrum, read_template
from xcorr.psf import Psf, Stamps, find_peak, moffat_of_width, sampled_psf
from xcorr.results import InputFile
from xcorr.star import StarSpectrum
from xcorr.template import Template
from xcorr.units import LIGHT_KM_S

READ_KEYS = (
    *("resolving_power", "barycentric_velocity_km_s", "time", "site", "coordinates", "medium", "air_formula"),
    *("wavelength_unit", "spectral_axis", "frame", "wavelength_range_um", "orders", "science_extension"),
    *("error_extension", "error_kind", "quality_extension", "quality_bad_bits", "quality_good_bits"),
    *("gain_e_per_unit", "telluric_corrected", "starlight_removed", "mask_wavelength_um"),
)
RANGE_STEP_UM = 0.02
"""Built-in templates are computed on ranges rounded outwards to this, so that exposures share them."""
CORE_FWHM = 1.0
EDGE_CAPTURED = 0.8
BLIND_KEEP_OUT_FWHM = 2.0


class Exposures:
    """The exposures of a run file, read when asked for, and where things lie in each.

    Parameters
    ----------
    settings : Settings
    cubes : sequence of Cube, optional
        In memory, one for each [[exposure]].
    templates : sequence of Template, optional
        In memory, one for each [[template]].
    """

    def __init__(
        self,
        settings: Settings,
        cubes: Sequence[Cube] | None = None,
        templates: Sequence[Template] | None = None,
    ) -> None:
        if cubes is not None and len(cubes) != len(settings.exposure):
            raise SettingsError(
                "one cube for each [[exposure]] needed", f"{len(cubes)} for {len(settings.exposure)}"
            )
        self.settings = settings
        self.cubes = cubes
        self.user_templates = tuple(_read_templates(settings) if templates is None else templates)
        self.digests: dict[int, InputFile] = {}
        self.extra: list[InputFile] = []
        self.headers: dict[int, Any] = {}
        self.is_spectrum = False
        self.plane_bytes = 0
        self.first_star: tuple[float, float] | None = None
        self.first_target: tuple[float, float] | None = None

    def __len__(self) -> int:
        return len(self.settings.exposure)

    def cube(self, i: int) -> Cube:
        """Read exposure i."""
        entry = self.settings.exposure[i]
        if self.cubes is not None:
            cube = self.cubes[i]
        else:
            given = {key: getattr(entry, key) for key in READ_KEYS if getattr(entry, key) is not None}
            cube = read_exposure(entry.file, **given)
        self.digests[i] = InputFile(cube.source or entry.file.name, cube.sha256)
        self.headers[i] = cube.celestial_header
        if i == 0:
            self.is_spectrum = cube.is_spectrum
            self.plane_bytes = cube.data.nbytes
        elif cube.is_spectrum != self.is_spectrum:
            raise InputError(
                "exposures of one run must be all cubes or all extracted spectra",
                f"{cube.source or entry.file.name} differs from the first",
                "search them in separate runs",
            )
        return cube

    def scenery(self, i: int, cube: Cube) -> Scenery:
        """Companion, star, other sources and PSF of exposure i, before its star is measured."""
        entry, target = self.settings.exposure[i], self.settings.target
        if cube.is_spectrum:
            return Scenery()
        star = entry.star_xy or (target.star_xy if i == 0 else None)
        psf = self._psf(cube)
        guess = star
        if guess is None and self.settings.starlight.reference != "none" and not cube.starlight_removed:
            guess = _bright_peak(cube)
        companion = entry.companion_xy or (target.companion_xy if i == 0 else None)
        if companion is None and target.companion_offset_arcsec is not None:
            companion = self._from_offset(guess, cube.celestial_header)
        mapped = None
        if i > 0:
            mapped = field_map(
                self.headers[0], cube.celestial_header, *self._anchors(guess, entry.companion_xy)
            )
            if companion is None and self.first_target is not None:
                companion = tuple(mapped(np.array([self.first_target]))[0])
        sources = target.mask_sources
        if mapped is not None and sources:
            moved = mapped(np.array([source[:2] for source in sources]))
            sources = tuple((x, y, s[2]) for (x, y), s in zip(moved, sources, strict=True))
        return Scenery(companion, star, tuple(sources), psf)

    def _anchors(
        self, star: tuple[float, float] | None, companion: tuple[float, float] | None
    ) -> tuple[tuple[float, float] | None, tuple[float, float] | None]:
        """The same source in exposure 1 and in this one."""
        if companion is not None and self.first_target is not None:
            return self.first_target, companion
        if star is not None and self.first_star is not None:
            return self.first_star, star
        return None, None

    def _from_offset(self, star: tuple[float, float] | None, header: Any) -> tuple[float, float]:
        offset = self.settings.target.companion_offset_arcsec
        assert offset is not None  # callers check
        x, y = sky_offset_to_pixels(offset, header)
        if star is None:
            raise SettingsError(
                "[target].companion_offset_arcsec is counted from the star, whose position is not known",
                "no star_xy and no star in the field",
                "give [target].star_xy or companion_xy",
            )
        return star[0] + x, star[1] + y

    def _psf(self, cube: Cube) -> Psf | None:
        entry = self.settings.psf
        if entry.file is not None:
            image = read_exposure_image(entry.file)
            self._note_file(entry.file)
            return sampled_psf(image, cube.wavelength_um)
        if entry.fwhm_pixels is not None:
            return moffat_of_width(entry.fwhm_pixels, cube.wavelength_um)
        return None

    def _note_file(self, path: Path) -> None:
        from xcorr.provenance import sha256_of_file

        record = InputFile(path.name, sha256_of_file(path))
        if record not in self.extra:
            self.extra.append(record)

    def starlight(self, cube: Cube) -> StarlightSettings:
        """Settings of the nuisance model; a reference file becomes a spectrum on the cube's channels."""
        entry = self.settings.starlight
        reference: str | StarSpectrum
        if isinstance(entry.reference, Path):
            self._note_file(entry.reference)
            reference = _star_from_file(entry.reference, cube)
        else:
            reference = entry.reference
        return StarlightSettings(
            reference=reference,
            knots=entry.knots,
            background_knots=entry.background_knots,
            companion_knots=entry.companion_knots,
            star_t_eff=entry.star_t_eff,
        )

    def templates(self, cube: Cube, reach_km_s: float) -> tuple[Template, ...]:
        """Built-in templates on the cube's range, shifted by up to `reach_km_s`, then the user's."""
        search = self.settings.search
        # built-in templates are padded by themselves up to 1500 km/s, LSF wings included
        more = 1.0 + max(0.0, reach_km_s - 1000.0) / LIGHT_KM_S
        low = np.floor(cube.wavelength_um.min() / more / RANGE_STEP_UM) * RANGE_STEP_UM
        high = np.ceil(cube.wavelength_um.max() * more / RANGE_STEP_UM) * RANGE_STEP_UM
        built = [
            builtin_template(
                name,
                wavelength_range_um=(float(low), float(high)),
                t_eff=search.t_eff,
                log_g=search.log_g,
            )
            for name in search.molecules
        ]
        return (*built, *self.user_templates)

    def position(self, i: int, exposure: PreparedExposure) -> tuple[float, float] | None:
        """The companion's position in exposure i where the run file gives it; None: mapped, or blind."""
        entry, target = self.settings.exposure[i], self.settings.target
        given = entry.companion_xy or (target.companion_xy if i == 0 else None)
        if given is None and target.companion_offset_arcsec is not None and not self.is_spectrum:
            given = self._from_offset(exposure.star_xy, self.headers[i])
        if given is not None:
            _check_inside(given, exposure.shape, i)
        return given

    def to_exposure(self, i: int, exposure: PreparedExposure, positions_xy: NDArray) -> NDArray[np.float64]:
        """Positions (n, 2) of exposure 1 in exposure i."""
        positions = np.atleast_2d(np.asarray(positions_xy, float))
        if i == 0:
            return positions
        anchors = self._anchors(exposure.star_xy, self.settings.exposure[i].companion_xy)
        return field_map(self.headers[0], self.headers[i], *anchors)(positions)

    def inputs(self, templates: Sequence[Template]) -> tuple[InputFile, ...]:
        """Every file that was read, in run-file order."""
        files = [self.digests[i] for i in sorted(self.digests)] + self.extra
        user = templates[len(self.settings.search.molecules) :]
        for entry, template in zip(self.settings.template, user, strict=True):
            files.append(InputFile(entry.file.name, template.sha256))
        return tuple(dict.fromkeys(files))


def _bright_peak(cube: Cube) -> tuple[float, float]:
    """Brightest place of the mean image."""
    usable = ~cube.mask
    count = usable.sum(axis=0)
    total = np.sum(cube.data, axis=0, dtype=np.float64, where=usable)
    return find_peak(np.divide(total, count, out=np.full(count.shape, np.nan), where=count > 0))


def _check_inside(position: tuple[float, float], shape: tuple[int, int], i: int) -> None:
    ny, nx = shape
    if not (-0.5 <= position[0] <= nx - 0.5 and -0.5 <= position[1] <= ny - 0.5):
        raise SettingsError(
            f"the companion lies outside the field of exposure {i + 1}",
            f"({position[0]:.2f}, {position[1]:.2f}) in {nx} x {ny} pixels",
            "check companion_xy (zero-based x, y) or the offset",
        )


def _read_templates(settings: Settings) -> list[Template]:
    found = []
    for entry in settings.template:
        given = {
            key: getattr(entry, key)
            for key in ("medium", "air_formula", "wavelength_unit", "resolving_power")
            if getattr(entry, key) is not None
        }
        found.append(read_template(entry.file, name=entry.name, **given))
    return found


def _star_from_file(path: Path, cube: Cube) -> StarSpectrum:
    """The star's spectrum from a file, by cubic interpolation where its channels differ."""
    from scipy.interpolate import CubicSpline

    star = read_spectrum(path)
    good = ~star.mask[:, 0, 0]
    wavelength, flux = star.wavelength_um[good], star.data[good, 0, 0].astype(np.float64)
    ascending = np.argsort(wavelength)
    wavelength, flux = wavelength[ascending], flux[ascending]
    inside = (cube.wavelength_um >= wavelength[0]) & (cube.wavelength_um <= wavelength[-1])
    if inside.mean() < 0.5:
        raise InputError(
            f"the star's spectrum {path.name} covers too few channels",
            f"{100 * inside.mean():.0f} per cent",
            "give one that covers the cube",
        )
    keep = np.concatenate([[True], np.diff(wavelength) > 0])
    values = np.where(inside, CubicSpline(wavelength[keep], flux[keep])(cube.wavelength_um), 0.0)
    values = np.where(values > 0, values, 0.0)
    mean = float(values[values > 0].mean())
    variance = np.full(values.size, (1e-3) ** 2)
    if star.variance is not None:
        own = star.variance[good, 0, 0].astype(np.float64)[ascending][keep]
        variance = np.interp(cube.wavelength_um, wavelength[keep], own) / mean**2
    scale = mean * 10.0 ** (cube.scale_exponent - star.scale_exponent)
    return StarSpectrum(values / mean, variance, scale, np.zeros(0, np.int64))


def read_exposure_image(path: Path) -> NDArray[np.float64]:
    """A PSF image (y, x) or stack (n, y, x) from a FITS file's first image."""
    from astropy.io import fits
    from astropy.io.fits.verify import VerifyError

    try:
        with fits.open(path) as hdus:
            for hdu in hdus:
                if hdu.data is not None and getattr(hdu.data, "ndim", 0) in (2, 3):
                    return np.asarray(hdu.data, dtype=np.float64)
    except (VerifyError, TypeError, ValueError) as error:
        raise InputError(
            f"{path.name} is not a readable FITS image", str(error), "give another file"
        ) from error
    raise InputError(f"{path.name} holds no image of two or three axes", "none", "give a PSF image")


def describe_position(
    position: tuple[float, float], exposure: PreparedExposure, stamps: Stamps, notes: list[Note]
) -> None:
    """Notes on an awkward place: at the edge, in the star's core, in its own reference.

    Raises
    ------
    SettingsError
        If no usable spaxel lies under the companion.
    """
    assert exposure.psf is not None  # cubes always have one
    if not np.any(stamps.spaxels >= 0):
        raise SettingsError(
            "no usable spaxel under the companion",
            f"({position[0]:.2f}, {position[1]:.2f})",
            "check [target].companion_xy and the quality plane",
        )
    captured = float(stamps.captured[0])
    ideal = stamps.whole(exposure.psf)
    if captured < EDGE_CAPTURED * ideal:
        notes.append(
            Note(
                "companion-at-edge",
                f"only {100 * captured / ideal:.0f} per cent of the companion's PSF is on usable spaxels",
            )
        )
    if exposure.star_xy is not None and exposure.star_image is not None:
        separation = float(np.hypot(position[0] - exposure.star_xy[0], position[1] - exposure.star_xy[1]))
        if separation < CORE_FWHM * exposure.psf.fwhm_pixels:
            notes.append(
                Note(
                    "companion-in-core",
                    f"the companion lies {separation:.1f} pixels from the star, inside its core: amplitude and "
                    "significance are doubtful",
                )
            )
    shared = np.intersect1d(exposure.star.spaxels, stamps.spaxels)
    if shared.size:
        excluded = excluded_spaxels(exposure.shape, Scenery(companion_xy=position), exposure.psf.fwhm_pixels)
        inside = int(np.count_nonzero(excluded.ravel()[shared]))
        notes.append(
            Note(
                "companion-near-reference",
                f"{shared.size} spaxels of the star's reference touch the companion's PSF ({inside} within 1.5 FWHM)",
            )
        )
