"""FITS images with a spectral axis to `Cube`."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import CoverageError, InputError, Note
from xcorr.io.celestial import celestial_cards, field_position
from xcorr.io.fitsfile import FitsFile, Hdu
from xcorr.io.frames import barycentric_km_s, spectral_frame
from xcorr.io.medium import decide_medium, to_vacuum
from xcorr.io.oddities import drop_absurd_errors, mask_duplicates
from xcorr.io.overrides import Overrides
from xcorr.io.planes import Planes, choose_planes
from xcorr.io.resolving import resolving_power
from xcorr.io.samples import Chunks, Samples, finish, mask_empty, read_data, read_errors, read_quality
from xcorr.io.spectral_axis import SpectralAxis, spectral_axis
from xcorr.provenance import sha256_of_file

KEPT_CARDS = (
    *("OBJECT", "DATE-OBS", "MJD-OBS", "EXPTIME", "TELESCOP", "INSTRUME", "FILTER", "GRATING", "ORIGIN"),
    *("OBSERVER", "RA", "DEC", "EQUINOX", "AIRMASS", "BUNIT", "SPECSYS", "GAIN", "SPTYPE", "RP"),
)


@dataclass(frozen=True)
class Layout:
    """How (wave, y, x) lies in the file.

    Attributes
    ----------
    file_shape : (int, int, int)
        The three axes in numpy order of the file, axes of length one elsewhere dropped.
    order : (int, int, int)
        File axis of wave, y and x.
    axes : (int, int, int)
        FITS axis numbers of wave, y and x (0: the file has no such axis).
    flip : bool
        Wavelengths descend in the file.
    channels : (first, last)
        Channels kept, in ascending wavelength.
    """

    file_shape: tuple[int, ...]
    order: tuple[int, int, int]
    axes: tuple[int, int, int]
    flip: bool
    channels: tuple[int, int]

    @property
    def shape(self) -> tuple[int, int, int]:
        """(n_wave, ny, nx) of the channels kept."""
        first, last = self.channels
        return last - first, self.file_shape[self.order[1]], self.file_shape[self.order[2]]

    def chunks(self, file: FitsFile, hdu: Hdu) -> Iterator[tuple[tuple[slice, ...], NDArray[Any]]]:
        """Parts of a plane of this layout, in (wave, y, x)."""
        wave = self.order[0]
        n, (first, last) = self.file_shape[wave], self.channels
        if self.flip:
            first, last = n - last, n - first
        along_wave = wave == 0
        rows = (first, last) if along_wave else (0, self.file_shape[0])
        split = self.order.index(0)
        for start, slab in file.slabs(hdu, self.file_shape, *rows):
            part = slice(start - rows[0], start - rows[0] + slab.shape[0])
            if not along_wave:
                slab = slab[(slice(None),) * wave + (slice(first, last),)]
            chunk = slab.transpose(self.order)
            if self.flip:
                chunk = chunk[::-1]
                if along_wave:
                    part = slice(last - first - part.stop, last - first - part.start)
            yield tuple(part if i == split else slice(None) for i in range(3)), chunk


def read_fits_cube(file: FitsFile, overrides: Overrides) -> Cube:
    """Read a FITS image with a spectral axis; see `xcorr.io.read_cube`."""
    path = file.path
    planes = choose_planes(file, overrides)
    science = planes.science
    primary = file.hdus[0].cards
    merged: dict[str, Any] = {**primary, **science.cards}
    wcs_cards = science.cards if any(key.startswith("CTYPE") for key in science.cards) else merged
    axis = _axis(file, science, wcs_cards, overrides)
    medium, notes = decide_medium(overrides.medium, axis.medium, merged, path.name)
    vacuum = to_vacuum(axis.wavelength_um, medium, overrides.air_formula)
    flip = vacuum.size > 1 and vacuum[0] > vacuum[-1]
    ascending = vacuum[::-1] if flip else vacuum
    layout = _layout(science, axis, flip, _channels(ascending, overrides))
    wavelength = np.ascontiguousarray(ascending[slice(*layout.channels)])

    samples, used = _samples(file, planes, layout, wavelength, overrides)
    celestial = (
        celestial_cards(wcs_cards, science.naxis, layout.axes[2], layout.axes[1]) if layout.axes[1] else None
    )
    frame, frame_notes = spectral_frame({**merged, **wcs_cards}, overrides)
    z_b, velocity_notes = barycentric_km_s(merged, overrides, field_position(celestial))
    resolving, resolving_notes = resolving_power(overrides.resolving_power, merged, wavelength, layout.shape)
    used |= {
        "spectral_axis": f"{axis.fits_axis}: {axis.ctype or 'no CTYPE'} in {axis.unit or 'SI'}, {medium}"
    }
    return Cube(
        data=samples.data,
        variance=samples.variance,
        mask=samples.mask,
        wavelength_um=wavelength,
        resolving_power=resolving,
        frame=frame,
        barycentric_velocity_km_s=z_b,
        scale_exponent=samples.scale_exponent,
        unit=str(merged.get("BUNIT") or merged.get("YUNITS") or ""),
        gain_e_per_unit=overrides.gain_e_per_unit,
        telluric_corrected=bool(overrides.telluric_corrected),
        starlight_removed=bool(overrides.starlight_removed),
        celestial_header=celestial,
        header=kept_cards(merged),
        source=path.name,
        sha256=sha256_of_file(path),
        planes=used,
        notes=(*planes.notes, *notes, *frame_notes, *velocity_notes, *resolving_notes, *samples.notes),
    )


def kept_cards(cards: Mapping[str, Any]) -> dict[str, Any]:
    """The cards that travel with a cube."""
    return {key: cards[key] for key in KEPT_CARDS if key in cards}


def _axis(file: FitsFile, science: Hdu, cards: Mapping[str, Any], overrides: Overrides) -> SpectralAxis:
    if len(science.naxis) == 2:
        raise InputError(
            "two-dimensional image",
            f"{science.naxis[0]} x {science.naxis[1]} in {file.path.name}",
            "give a cube",
        )
    return spectral_axis(
        cards,
        science.naxis,
        axis=overrides.spectral_axis,
        unit=overrides.wavelength_unit,
        table=file.table_column,
    )


def _channels(ascending: NDArray[np.float64], overrides: Overrides) -> tuple[int, int]:
    """Channels inside wavelength_range_um."""
    if overrides.wavelength_range_um is None:
        return 0, ascending.size
    low, high = overrides.wavelength_range_um
    first, last = (int(i) for i in np.searchsorted(ascending, [low, np.nextafter(high, np.inf)]))
    if last <= first:
        raise CoverageError(
            "wavelength_range_um leaves no channel",
            f"{low}-{high} um; the file covers {ascending[0]:.5f}-{ascending[-1]:.5f} um",
            "mend the range",
        )
    return first, last


def _layout(science: Hdu, axis: SpectralAxis, flip: bool, channels: tuple[int, int]) -> Layout:
    naxis, wave = science.naxis, axis.fits_axis
    others = [i for i in range(1, len(naxis) + 1) if i != wave]
    if len(others) > 2:
        long = [i for i in others if naxis[i - 1] > 1]
        if len(long) > 2:
            raise InputError("image has more than three axes", f"{naxis}", "cut it to one cube")
        others = sorted((long + [i for i in others if naxis[i - 1] == 1])[:2])
    if not others:
        return Layout((naxis[wave - 1], 1, 1), (0, 1, 2), (wave, 0, 0), flip, channels)
    x, y = others
    by_file = sorted((wave, y, x), reverse=True)
    order = (by_file.index(wave), by_file.index(y), by_file.index(x))
    return Layout(tuple(naxis[i - 1] for i in by_file), order, (wave, y, x), flip, channels)


def _samples(
    file: FitsFile, planes: Planes, layout: Layout, wavelength: NDArray[np.float64], overrides: Overrides
) -> tuple[Samples, dict[str, str]]:
    science, error, quality = planes.science, planes.error, planes.quality
    used = {"science": science.label}
    samples = read_data(layout.shape, layout.chunks(file, science))
    if quality is not None:
        rule = read_quality(
            samples,
            _quality_chunks(file, quality, science, layout),
            overrides.quality_bad_bits,
            overrides.quality_good_bits,
        )
        used["quality"] = f"{quality.label}: {rule}"
    elif overrides.quality_bad_bits is not None or overrides.quality_good_bits is not None:
        raise InputError(
            "quality bits given but the file has no quality plane", file.path.name, "set quality_extension"
        )
    if error is not None:
        if error.naxis != science.naxis:
            raise InputError(
                f"error extension {error.label} has another shape",
                f"{error.naxis} for {science.naxis}",
                "name another",
            )
        read_errors(samples, layout.chunks(file, error), planes.error_kind, error.label)
        used["error"] = f"{error.label}: {planes.error_kind}"
    settle(samples, wavelength, overrides)
    used |= {f"masked {cause}": str(count) for cause, count in samples.masked.items()}
    return samples, used


def settle(samples: Samples, wavelength: NDArray[np.float64], overrides: Overrides) -> None:
    """The checks every input goes through once its planes are read."""
    mask_empty(samples)
    for low, high in overrides.mask_wavelength_um or ():
        inside = (wavelength >= low) & (wavelength <= high)
        samples.add_mask(
            slice(None), np.broadcast_to(inside[:, None, None], samples.data.shape), "by the run file"
        )
    finish(samples)
    if samples.variance is None:
        samples.notes.append(
            Note("no-error-plane", "the file holds no errors: noise to be estimated from the data")
        )
    drop_absurd_errors(samples)
    if samples.data.shape[1:] != (1, 1):
        mask_duplicates(samples)
        finish(samples)


def _quality_chunks(file: FitsFile, quality: Hdu, science: Hdu, layout: Layout) -> Chunks:
    """A quality plane with the shape of the cube, or of its image, or one flag per channel."""
    if quality.naxis == science.naxis:
        return layout.chunks(file, quality)
    wave, y, x = layout.axes
    shape = tuple(n for n in quality.naxis if n > 1) or (1,)
    values = file.image(quality)
    every = (slice(None), slice(None), slice(None))
    if len(quality.naxis) == 2 and y and quality.naxis == (science.naxis[x - 1], science.naxis[y - 1]):
        return [(every, np.broadcast_to(values[None], layout.shape))]
    if shape == (science.naxis[wave - 1],):
        flags = values.ravel()[::-1] if layout.flip else values.ravel()
        flags = flags[slice(*layout.channels)]
        return [(every, np.broadcast_to(flags[:, None, None], layout.shape))]
    raise InputError(
        f"quality extension {quality.label} has another shape",
        f"{quality.naxis} for {science.naxis}",
        "name another",
    )
