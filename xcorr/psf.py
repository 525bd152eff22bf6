"""The point-spread function: measured on the star, given as a width, or read from an image.

Profiles are flux-normalised over the infinite plane and known at a few wavelength nodes, between
which the search interpolates linearly. The drift of the position with wavelength (differential
refraction) is part of the PSF: positions refer to the mean over the nodes.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import map_coordinates
from scipy.optimize import least_squares

from xcorr.errors import InputError

N_NODE = 8
DEFAULT_BETA = 4.765
"""Moffat exponent of a turbulence-limited image (Trujillo et al. 2001, MNRAS 328, 977)."""
PIXEL_FWHM = 2.3548200450309493 / np.sqrt(12.0)
"""FWHM of the Gaussian with the variance of a pixel."""
MAX_WING = 0.9
WING_BETA = 2.5
"""Exponent of the wing, close to that of a long-exposure seeing halo (common practice, no source)."""
_PIXEL_POINTS = (-0.5 * np.sqrt(0.6), 0.0, 0.5 * np.sqrt(0.6))
_PIXEL_WEIGHTS = (5.0 / 18.0, 8.0 / 18.0, 5.0 / 18.0)
STAMP_RADIUS_FWHM = 1.25
"""Truncation: a Gaussian PSF keeps 0.9999 of the sum of squares inside 1.25 FWHM."""


class Psf(Protocol):
    """What the search needs of a PSF."""

    @property
    def wavelength_um(self) -> NDArray[np.float64]:
        """Nodes, (n_node,)."""

    @property
    def fwhm_pixels(self) -> float:
        """FWHM at the middle of the range."""

    def profile(self, dx: NDArray, dy: NDArray) -> NDArray[np.float64]:
        """Flux per spaxel at offsets (dx, dy) from the mean position, (n_node, *dx.shape)."""


@dataclass(frozen=True)
class MoffatPsf:
    """Elliptical core and wing, both Moffat profiles integrated over pixels, changing with wavelength.

    Attributes
    ----------
    wavelength_um : array (n_node,)
    fwhm_x, fwhm_y : arrays (n_node,)
        FWHM of the core in pixels along the axes turned by `angle`.
    angle : float
        Radians from x to y.
    beta : float
        Exponent of the core, > 1.
    drift_xy : array (n_node, 2)
        Position minus its mean, pixels.
    wing_share : array (n_node,) or None
        Share of the flux in the wing; None: no wing.
    wing_ratio : float
        FWHM of the wing over that of the core.
    """

    wavelength_um: NDArray[np.float64]
    fwhm_x: NDArray[np.float64]
    fwhm_y: NDArray[np.float64]
    angle: float
    beta: float
    drift_xy: NDArray[np.float64]
    wing_share: NDArray[np.float64] | None = None
    wing_ratio: float = 3.0

    @property
    def fwhm_pixels(self) -> float:
        """FWHM of the core as sampled: geometric mean over the nodes, the pixel in quadrature."""
        return float(np.sqrt(np.mean(self.fwhm_x) * np.mean(self.fwhm_y) + PIXEL_FWHM**2))

    def profile(self, dx: NDArray, dy: NDArray) -> NDArray[np.float64]:
        """Flux per spaxel, (n_node, *dx.shape)."""
        shape = (-1,) + (1,) * np.ndim(dx)
        share = np.zeros(self.wavelength_um.size) if self.wing_share is None else self.wing_share
        return core_and_wing(
            dx[None] - self.drift_xy[:, 0].reshape(shape),
            dy[None] - self.drift_xy[:, 1].reshape(shape),
            self.fwhm_x.reshape(shape),
            self.fwhm_y.reshape(shape),
            self.angle,
            self.beta,
            share.reshape(shape),
            self.wing_ratio,
        )


def core_and_wing(
    x: NDArray,
    y: NDArray,
    fwhm_x: NDArray | float,
    fwhm_y: NDArray | float,
    angle: float,
    beta: float,
    wing_share: NDArray | float,
    wing_ratio: float,
) -> NDArray[np.float64]:
    """Two Moffat profiles of total flux one, integrated over pixels by 3 x 3 Gauss-Legendre points."""
    total = np.zeros(np.broadcast(x, y, fwhm_x).shape)
    for step_x, weight_x in zip(_PIXEL_POINTS, _PIXEL_WEIGHTS, strict=True):
        for step_y, weight_y in zip(_PIXEL_POINTS, _PIXEL_WEIGHTS, strict=True):
            core = moffat(x + step_x, y + step_y, fwhm_x, fwhm_y, angle, beta)
            wing = 0.0
            if np.any(wing_share):
                wide_x, wide_y = fwhm_x * wing_ratio, fwhm_y * wing_ratio
                wing = moffat(x + step_x, y + step_y, wide_x, wide_y, angle, WING_BETA)
            total += weight_x * weight_y * ((1.0 - wing_share) * core + wing_share * wing)
    return total


def moffat(
    x: NDArray, y: NDArray, fwhm_x: NDArray | float, fwhm_y: NDArray | float, angle: float, beta: float
) -> NDArray[np.float64]:
    """Moffat (1969, A&A 3, 455) profile of unit flux over the plane."""
    half = 2.0 * np.sqrt(2.0 ** (1.0 / beta) - 1.0)
    along = (np.cos(angle) * x + np.sin(angle) * y) * half / fwhm_x
    across = (-np.sin(angle) * x + np.cos(angle) * y) * half / fwhm_y
    peak = (beta - 1.0) / np.pi * half**2 / (fwhm_x * fwhm_y)
    return peak * (1.0 + along**2 + across**2) ** -beta


@dataclass(frozen=True)
class SampledPsf:
    """A PSF image, or one image a node, interpolated by cubic splines.

    Attributes
    ----------
    wavelength_um : array (n_node,)
    images : array (n_node, ny, nx)
        Sum one, centred on the flux centroid at `centre_xy`.
    centre_xy : (x, y)
    """

    wavelength_um: NDArray[np.float64]
    images: NDArray[np.float64]
    centre_xy: tuple[float, float]

    @property
    def fwhm_pixels(self) -> float:
        """Equivalent FWHM of the middle image, from its peak: Gaussian of the same peak and flux."""
        middle = self.images[len(self.images) // 2]
        return float(np.sqrt(4.0 * np.log(2.0) / (np.pi * middle.max() / middle.sum())))

    def profile(self, dx: NDArray, dy: NDArray) -> NDArray[np.float64]:
        """Flux per spaxel, zero outside the image, (n_node, *dx.shape)."""
        where = np.stack([dy + self.centre_xy[1], dx + self.centre_xy[0]])
        return np.stack([map_coordinates(image, where, order=3, mode="constant") for image in self.images])


def sampled_psf(images: NDArray, wavelength_um: NDArray) -> SampledPsf:
    """Make a `SampledPsf` of an image (ny, nx) or a cube (n, ny, nx), normalised and centred on its peak.

    Raises
    ------
    InputError
        If an image has no positive flux.
    """
    stack = (
        np.atleast_3d(np.asarray(images, float)) if np.ndim(images) == 3 else np.asarray(images, float)[None]
    )
    totals = np.nansum(stack, axis=(1, 2))
    if not np.all(totals > 0):
        raise InputError(
            "a PSF image holds no positive flux", f"sums {totals.min():.3g}", "give another file"
        )
    stack = np.nan_to_num(stack) / totals[:, None, None]
    mean = stack.mean(axis=0)
    centre = _windowed_centroid(mean)
    nodes = np.linspace(wavelength_um.min(), wavelength_um.max(), max(2, len(stack)))
    if len(stack) == 1:
        stack = np.repeat(stack, 2, axis=0)
    return SampledPsf(nodes, stack, centre)


def _windowed_centroid(image: NDArray) -> tuple[float, float]:
    """Centroid (x, y) under a Gaussian window of the source's own width that follows it.

    A window fixed on the peak's pixel draws the centroid towards it, 0.12 pixels for a FWHM of 3.5 measured.
    The factor 2 is exact for a Gaussian under an equal Gaussian window (common practice, no source).
    """
    rows, columns = np.indices(image.shape)
    y, x = (float(i) for i in np.unravel_index(np.argmax(image), image.shape))
    variance = image.sum() / (2.0 * np.pi * image.max())
    for _ in range(20):
        weighted = image * np.exp(-0.5 * ((columns - x) ** 2 + (rows - y) ** 2) / variance)
        x += 2.0 * float((weighted * (columns - x)).sum() / weighted.sum())
        y += 2.0 * float((weighted * (rows - y)).sum() / weighted.sum())
    return x, y


def moffat_of_width(fwhm_pixels: float, wavelength_um: NDArray) -> MoffatPsf:
    """A round PSF of given FWHM, as sampled, at all wavelengths, without drift."""
    nodes = np.array([wavelength_um.min(), wavelength_um.max()])
    width = np.full(2, np.sqrt(max(float(fwhm_pixels) ** 2 - PIXEL_FWHM**2, 0.16)))
    return MoffatPsf(nodes, width, width.copy(), 0.0, DEFAULT_BETA, np.zeros((2, 2)))


@dataclass(frozen=True)
class StarImage:
    """What the star's image gave.

    Attributes
    ----------
    psf : MoffatPsf
    star_xy : (x, y)
        Mean position.
    wavelength_um : array (n_node,)
    flux : array (n_node,)
        PSF-integrated flux of the star in the nodes' bins, data units per channel.
    residual : float
        Root-mean-square misfit inside the fitted radius, relative to the peak.
    """

    psf: MoffatPsf
    star_xy: tuple[float, float]
    wavelength_um: NDArray[np.float64]
    flux: NDArray[np.float64]
    residual: float


def node_images(
    data: NDArray, usable: NDArray[np.bool_], wavelength_um: NDArray, n_node: int = N_NODE
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean images in `n_node` wavelength bins of equal channel number.

    Parameters
    ----------
    data, usable : arrays (n_wave, ny, nx)
    wavelength_um : array (n_wave,)

    Returns
    -------
    wavelength : array (n_node,)
    images : array (n_node, ny, nx), NaN where fewer than a fifth of the samples are usable
    """
    ascending = np.argsort(wavelength_um)
    images, centres = [], []
    for channels in np.array_split(ascending, n_node):
        count = usable[channels].sum(axis=0)
        total = np.where(usable[channels], data[channels], 0.0).sum(axis=0, dtype=np.float64)
        with np.errstate(invalid="ignore", divide="ignore"):
            images.append(np.where(count > 0.2 * channels.size, total / count, np.nan))
        centres.append(wavelength_um[channels].mean())
    return np.array(centres), np.array(images)


def find_peak(image: NDArray) -> tuple[float, float]:
    """Centroid (x, y) of the brightest source of an image, NaN allowed."""
    filled = np.where(np.isfinite(image), image, -np.inf)
    y, x = np.unravel_index(np.argmax(filled), image.shape)
    rows, columns = np.indices(image.shape)
    near = (np.abs(rows - y) <= 1) & (np.abs(columns - x) <= 1) & np.isfinite(image)
    floor = np.nanmedian(image)
    flux = np.where(near, np.clip(image - floor, 0.0, None), 0.0)
    if flux.sum() <= 0:
        return float(x), float(y)
    return float((flux * columns).sum() / flux.sum()), float((flux * rows).sum() / flux.sum())


def fit_star_image(
    wavelength_um: NDArray,
    images: NDArray,
    guess_xy: tuple[float, float],
    excluded: NDArray[np.bool_],
    *,
    guess_fwhm: float = 2.5,
) -> StarImage:
    """Fit the star's core in every node and smooth the parameters with wavelength.

    Parameters
    ----------
    wavelength_um : array (n_node,)
    images : array (n_node, ny, nx)
    guess_xy : (x, y)
    excluded : bool array (ny, nx)
        Spaxels of the companion and of other sources.

    Raises
    ------
    InputError
        If fewer than 12 usable spaxels lie around the star.
    """
    finite = np.isfinite(images)
    count = finite.sum(axis=0)
    total = np.where(finite, images, 0.0).sum(axis=0)
    mean = np.divide(total, count, out=np.full(count.shape, np.nan), where=count > 0)
    shape = _fit_moffat(mean, guess_xy, excluded, guess_fwhm)
    width = float(np.sqrt(shape["fwhm_x"] * shape["fwhm_y"]))
    centre = (shape["x"], shape["y"])
    shape = _fit_moffat(mean, centre, excluded, width)
    single = [_fit_moffat(image, centre, excluded, width, fixed=shape) for image in images]
    x = _smooth([one["x"] for one in single], wavelength_um)
    y = _smooth([one["y"] for one in single], wavelength_um)
    psf = MoffatPsf(
        wavelength_um=np.asarray(wavelength_um, float),
        fwhm_x=_smooth([one["fwhm_x"] for one in single], wavelength_um),
        fwhm_y=_smooth([one["fwhm_y"] for one in single], wavelength_um),
        angle=shape["angle"],
        beta=shape["beta"],
        drift_xy=np.stack([x - x.mean(), y - y.mean()], axis=1),
        wing_share=np.clip(_smooth([one["wing"] for one in single], wavelength_um), 0.0, MAX_WING),
        wing_ratio=shape["ratio"],
    )
    star_xy = (float(x.mean()), float(y.mean()))
    flux, residual = _star_flux(images, psf, star_xy, excluded)
    return StarImage(psf, star_xy, np.asarray(wavelength_um, float), flux, residual)


def _smooth(values: list[float], wavelength_um: NDArray) -> NDArray[np.float64]:
    """Straight line through the node values: one bad node must not bend the PSF."""
    x = wavelength_um - wavelength_um.mean()
    fit = least_squares(
        lambda c: c[0] + c[1] * x - values, [np.median(values), 0.0], loss="soft_l1", f_scale=0.02
    )
    return fit.x[0] + fit.x[1] * x


def _around(
    image: NDArray, centre: tuple[float, float], excluded: NDArray, radius: float
) -> NDArray[np.bool_]:
    rows, columns = np.indices(image.shape)
    near = np.hypot(columns - centre[0], rows - centre[1]) <= radius
    near &= np.isfinite(image) & ~excluded
    if near.sum() < 12:
        raise InputError(
            "too few usable spaxels around the star to measure its PSF",
            f"{int(near.sum())} within {radius:.1f} pixels of ({centre[0]:.1f}, {centre[1]:.1f})",
            "give [psf].fwhm_pixels or [psf].file",
        )
    return near


def _fit_moffat(
    image: NDArray,
    centre: tuple[float, float],
    excluded: NDArray,
    width: float,
    fixed: dict[str, float] | None = None,
) -> dict[str, float]:
    """Fit amplitude, centre, widths and wing share (exponent, angle and wing ratio too unless fixed).

    There is no background term: the pedestal under the core is the PSF's own halo, which the companion has too.
    """
    near = _around(image, centre, excluded, max(2.2 * width, 2.6))
    rows, columns = np.nonzero(near)
    values = image[near]
    peak = float(np.max(values))
    # photon-like weights with a floor: the core counts, its last per cent do not
    sigma = np.sqrt(np.clip(values, 0.0, None) / peak + 0.01)

    def model(p: NDArray) -> NDArray:
        beta, angle, ratio = (
            (fixed["beta"], fixed["angle"], fixed["ratio"]) if fixed else (1.0 + np.exp(p[6]), p[7], p[8])
        )
        fwhm_x, fwhm_y = np.exp(p[2]), np.exp(p[3])
        shape = core_and_wing(columns - p[0], rows - p[1], fwhm_x, fwhm_y, angle, beta, p[5], ratio)
        return peak * p[4] * shape * fwhm_x * fwhm_y

    start = [*centre, np.log(width), np.log(width), 1.0, 0.2 if fixed is None else fixed["wing"]]
    lower = [centre[0] - 2, centre[1] - 2, np.log(0.4), np.log(0.4), 0.0, 0.0]
    upper = [centre[0] + 2, centre[1] + 2, np.log(30.0), np.log(30.0), 30.0, MAX_WING]
    if fixed is None:
        start, lower = [*start, np.log(3.0), 0.1, 3.0], [*lower, np.log(0.5), -3.2, 2.0]
        upper = [*upper, np.log(30.0), 3.2, 8.0]
    start = list(np.clip(start, np.add(lower, 1e-6), np.subtract(upper, 1e-6)))
    fit = least_squares(
        lambda p: (model(p) - values) / peak / sigma,
        start,
        bounds=(lower, upper),
        x_scale="jac",
        max_nfev=200,
    )
    p = fit.x
    return {
        "x": float(p[0]),
        "y": float(p[1]),
        "fwhm_x": float(np.exp(p[2])),
        "fwhm_y": float(np.exp(p[3])),
        "wing": float(p[5]),
        "beta": fixed["beta"] if fixed else float(1.0 + np.exp(p[6])),
        "angle": fixed["angle"] if fixed else float(p[7]),
        "ratio": fixed["ratio"] if fixed else float(p[8]),
    }


def _star_flux(
    images: NDArray, psf: MoffatPsf, star_xy: tuple[float, float], excluded: NDArray
) -> tuple[NDArray[np.float64], float]:
    """Star flux per node, and the relative misfit.

    The same estimate as the companion's amplitude (uniform weights on the same stamp), so that an imperfect
    profile cancels in their ratio.
    """
    rows, columns = np.indices(images.shape[1:])
    profiles = psf.profile(columns - star_xy[0], rows - star_xy[1])
    flux, misfit = np.empty(len(images)), []
    for n, (image, profile) in enumerate(zip(images, profiles, strict=True)):
        near = _around(image, star_xy, excluded, max(_stamp_radius(psf), 2.3))
        flux[n] = np.sum(profile[near] * image[near]) / np.sum(profile[near] ** 2)
        misfit.append(np.std(image[near] - flux[n] * profile[near]) / np.max(image[near]))
    return flux, float(np.mean(misfit))


@dataclass(frozen=True)
class Stamps:
    """Spaxels and PSF profiles of a set of positions in one exposure.

    Attributes
    ----------
    spaxels : int64 array (n_position, n_stamp)
        Index y * nx + x, -1 for none.
    profiles : float32 array (n_position, n_stamp, n_node)
        Flux-normalised PSF at wavelength nodes.
    node, fraction : arrays (n_wave,)
        Linear interpolation between nodes.
    """

    spaxels: NDArray[np.int64]
    profiles: NDArray[np.float32]
    node: NDArray[np.int64]
    fraction: NDArray[np.float32]

    def __getitem__(self, block: slice) -> Stamps:
        """A subset of the positions."""
        return Stamps(self.spaxels[block], self.profiles[block], self.node, self.fraction)

    @property
    def captured(self) -> NDArray[np.float64]:
        """Fraction of the PSF's flux inside the stamp, (n_position,)."""
        inside = np.where(self.spaxels[:, :, None] >= 0, self.profiles, 0.0)
        return inside.sum(axis=1, dtype=np.float64).mean(axis=1)

    def whole(self, psf: Psf) -> float:
        """Flux fraction of the same stamp if every spaxel were usable (first position)."""
        return float(np.clip(_on_grid(psf, _stamp_radius(psf)).sum(axis=(1, 2)).mean(), 1e-6, None))

    def captured_squares(self, psf: Psf) -> float:
        """Sum of squared profile on usable spaxels over that of the whole PSF, first position: S/N^2 kept."""
        inside = np.where(self.spaxels[0, :, None] >= 0, self.profiles[0].astype(np.float64), 0.0)
        whole = (_on_grid(psf, 4.0 * psf.fwhm_pixels) ** 2).sum(axis=(1, 2))
        return float(np.clip(((inside**2).sum(axis=0) / whole).mean(), 0.0, 1.0))


def make_stamps(
    psf: Psf | None,
    positions_xy: NDArray,
    shape: tuple[int, int],
    wavelength_um: NDArray,
    usable: NDArray[np.bool_],
) -> Stamps:
    """Spaxels and profiles of a set of positions.

    Parameters
    ----------
    psf : Psf or None
        None for an extracted spectrum: one spaxel, profile one.
    positions_xy : array (n_position, 2)
        Zero-based (x, y), sub-pixel.
    shape : (ny, nx)
    wavelength_um : array (n_wave,)
    usable : bool array (ny, nx)
        Spaxels that may be summed.
    """
    ny, nx = shape
    if psf is None:
        nodes = np.array([wavelength_um.min(), wavelength_um.max()])
        node, fraction = _between(nodes, wavelength_um)
        ones = np.ones((len(positions_xy), 1, 2), np.float32)
        return Stamps(np.zeros((len(positions_xy), 1), np.int64), ones, node, fraction)
    radius = _stamp_radius(psf)
    reach = int(np.ceil(radius))
    dy, dx = (a.ravel() for a in np.mgrid[-reach : reach + 1, -reach : reach + 1])
    anchor = np.round(positions_xy).astype(np.int64)
    x, y = anchor[:, :1] + dx, anchor[:, 1:] + dy
    off_x, off_y = x - positions_xy[:, :1], y - positions_xy[:, 1:]
    inside = (x >= 0) & (x < nx) & (y >= 0) & (y < ny) & (np.hypot(off_x, off_y) <= radius)
    inside &= usable[np.clip(y, 0, ny - 1), np.clip(x, 0, nx - 1)]
    keep = np.any(np.hypot(off_x, off_y) <= radius, axis=0)
    spaxels = np.where(inside, y * nx + x, -1)[:, keep]
    profiles = np.moveaxis(psf.profile(off_x[:, keep], off_y[:, keep]), 0, -1)
    node, fraction = _between(psf.wavelength_um, wavelength_um)
    return Stamps(np.ascontiguousarray(spaxels), np.ascontiguousarray(profiles, np.float32), node, fraction)


def _stamp_radius(psf: Psf) -> float:
    return STAMP_RADIUS_FWHM * psf.fwhm_pixels + 0.5


def _on_grid(psf: Psf, radius: float) -> NDArray[np.float64]:
    """Profiles on whole-pixel offsets out to a radius, zero beyond, (n_node, n, n)."""
    reach = int(np.ceil(radius))
    dy, dx = np.mgrid[-reach : reach + 1, -reach : reach + 1].astype(float)
    return np.where(np.hypot(dx, dy) <= radius, psf.profile(dx, dy), 0.0)


def _between(nodes: NDArray, wavelength_um: NDArray) -> tuple[NDArray[np.int64], NDArray[np.float32]]:
    """Lower node and weight of the upper one for linear interpolation; constant beyond half a bin outside."""
    node = np.clip(np.searchsorted(nodes, wavelength_um) - 1, 0, nodes.size - 2)
    fraction = (wavelength_um - nodes[node]) / (nodes[node + 1] - nodes[node])
    return node.astype(np.int64), np.clip(fraction, -0.6, 1.6).astype(np.float32)
