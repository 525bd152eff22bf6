"""The PSF: flux, what the fit of the star's image recovers, stamps at the edge and under masks."""

import numpy as np
import pytest
from scipy.integrate import dblquad

from tests.small_scenes import scene
from xcorr.errors import InputError
from xcorr.psf import (
    DEFAULT_BETA,
    MoffatPsf,
    core_and_wing,
    find_peak,
    fit_star_image,
    make_stamps,
    moffat,
    moffat_of_width,
    node_images,
    sampled_psf,
)

WAVE = np.linspace(2.0, 2.4, 200)
NODES = np.linspace(2.0, 2.4, 8)
SHAPE = (21, 23)
NOTHING = np.zeros(SHAPE, bool)


def gaussian(shape, x, y, sigma):
    rows, columns = np.indices(shape)
    return np.exp(-0.5 * ((columns - x) ** 2 + (rows - y) ** 2) / sigma**2) / (2 * np.pi * sigma**2)


def star_cube(psf, xy, flux=1e5, background=0.0):
    """Images (n_node, ny, nx) of a star with a known PSF."""
    rows, columns = np.indices(SHAPE)
    return flux * psf.profile(columns - xy[0], rows - xy[1]) + background


def elliptical():
    along = np.linspace(-0.2, 0.2, 8)
    return MoffatPsf(
        NODES,
        np.linspace(2.9, 3.2, 8),
        np.linspace(2.2, 2.4, 8),
        0.6,
        3.5,
        np.stack([along, -0.5 * along], axis=1),
    )


# ---------------------------------------------------------------- profiles


def test_moffat_has_unit_flux_and_its_fwhm():
    """Moffat 1969: the integral is one, and half the peak lies at FWHM / 2 along both axes."""
    total = dblquad(lambda y, x: float(moffat(x, y, 2.0, 3.0, 0.4, 4.765)), -40, 40, -40, 40)[0]
    assert total == pytest.approx(1.0, abs=1e-4)  # the wings beyond 40 pixels
    peak = moffat(0.0, 0.0, 2.0, 3.0, 0.4, 4.765)
    for length, angle in ((2.0, 0.4), (3.0, 0.4 + np.pi / 2)):
        at = moffat(np.cos(angle) * length / 2, np.sin(angle) * length / 2, 2.0, 3.0, 0.4, 4.765)
        assert at == pytest.approx(peak / 2, rel=1e-12)


def test_moffat_exponent_to_infinity_is_a_gaussian():
    x = np.linspace(-4, 4, 41)
    sigma = 2.5 / 2.354820045
    expected = np.exp(-0.5 * (x / sigma) ** 2) / (2 * np.pi * sigma**2)
    # corrections are of the order of (x/sigma)^4 / beta
    assert moffat(x, 0.0 * x, 2.5, 2.5, 0.0, 1e5) == pytest.approx(expected, rel=2e-3)


def test_sampled_psf_is_normalised_centred_and_interpolates():
    image = 7.0 * gaussian((31, 31), 15.3, 14.6, 1.5)
    psf = sampled_psf(image, WAVE)
    assert psf.centre_xy == pytest.approx((15.3, 14.6), abs=0.005)
    # from the peak's pixel, which lies 0.5 pixels from the centre: 1 + 0.5^2 / (4 sigma^2)
    assert psf.fwhm_pixels == pytest.approx(1.5 * 2.3548 * (1 + 0.25 / 9), rel=0.005)
    dx, dy = np.array([0.0, 0.4, 1.7]), np.array([0.0, -1.1, 0.3])
    expected = np.exp(-0.5 * (dx**2 + dy**2) / 1.5**2) / (2 * np.pi * 1.5**2)
    # cubic splines of a PSF with 3.5 pixels per FWHM
    assert psf.profile(dx, dy)[0] == pytest.approx(expected, rel=0.01)
    assert not np.any(psf.profile(np.array([40.0]), np.array([0.0])))
    stack = sampled_psf(np.stack([image, image, 2 * image]), WAVE)
    assert stack.images.sum(axis=(1, 2)) == pytest.approx(1.0)
    with pytest.raises(InputError, match="positive flux"):
        sampled_psf(-image, WAVE)


def test_profiles_are_integrated_over_pixels():
    """Against adaptive quadrature over one pixel; three Gauss points a side are exact to the sixth power."""
    for x, y in ((0.0, 0.0), (0.4, -0.3), (1.6, 0.8)):
        exact = dblquad(
            lambda v, u: float(moffat(u, v, 2.4, 2.0, 0.3, 3.0)), x - 0.5, x + 0.5, y - 0.5, y + 0.5
        )[0]
        found = core_and_wing(np.array(x), np.array(y), 2.4, 2.0, 0.3, 3.0, 0.0, 3.0)
        assert found == pytest.approx(exact, rel=2e-3)
    # control: the value at the centre is off by several per cent in the core
    centre = core_and_wing(np.array(0.0), np.array(0.0), 2.4, 2.0, 0.3, 3.0, 0.0, 3.0)
    assert moffat(0.0, 0.0, 2.4, 2.0, 0.3, 3.0) / centre > 1.05


def test_core_and_wing_share_unit_flux():
    y, x = np.mgrid[-60:61, -60:61].astype(float)
    for share in (0.0, 0.4):
        total = core_and_wing(x, y, 2.4, 2.0, 0.3, 4.0, share, 3.0).sum()
        # the wing falls as r^-5: (7 / 60)^3 of it lies outside
        assert total == pytest.approx(1.0, abs=2e-3)


# ---------------------------------------------------------------- the star's image


def noisy_star(psf, xy, seed=1):
    """Noise of a thousandth of the peak."""
    images = star_cube(psf, xy)
    rng = np.random.default_rng(seed)
    return images + 1e-3 * images.max() * np.sqrt(images / images.max() + 0.01) * rng.standard_normal(
        images.shape
    )


def test_the_fit_recovers_widths_angle_drift_and_flux():
    psf, xy = elliptical(), (11.3, 9.6)
    found = fit_star_image(NODES, noisy_star(psf, xy), (11.0, 10.0), NOTHING)
    assert found.star_xy == pytest.approx(xy, abs=0.01)
    assert found.psf.drift_xy == pytest.approx(psf.drift_xy, abs=0.02)
    # second moments of the core, whatever axes the fit chose; a wing can take the place of a low exponent
    order = np.mean(found.psf.fwhm_x) > np.mean(found.psf.fwhm_y)
    major, minor = (found.psf.fwhm_x, found.psf.fwhm_y) if order else (found.psf.fwhm_y, found.psf.fwhm_x)
    assert major == pytest.approx(psf.fwhm_x, rel=0.03)
    assert minor == pytest.approx(psf.fwhm_y, rel=0.03)
    angle = found.psf.angle if order else found.psf.angle + np.pi / 2
    assert np.sin(angle - psf.angle) == pytest.approx(0.0, abs=0.03)
    # flux is counted with the fitted profile, whose wings are not well known inside 2.2 FWHM
    assert found.flux == pytest.approx(1e5, rel=0.04)
    assert found.residual < 0.005
    # what the search uses: the profile in the stamp, up to the same factor
    y, x = np.mgrid[-3:4, -3:4].astype(float)
    ratio = found.psf.profile(x, y) * (found.flux / 1e5)[:, None, None] / psf.profile(x, y)
    assert ratio[:, 2:5, 2:5] == pytest.approx(1.0, abs=0.01)
    assert ratio == pytest.approx(1.0, abs=0.15)


def test_a_wing_is_found():
    psf = MoffatPsf(NODES, np.full(8, 2.4), np.full(8, 2.4), 0.0, 4.0, np.zeros((8, 2)), np.full(8, 0.4), 3.0)
    found = fit_star_image(NODES, noisy_star(psf, (11.3, 9.6)), (11.0, 10.0), NOTHING)
    y, x = np.mgrid[-3:4, -3:4].astype(float)
    ratio = found.psf.profile(x, y) * (found.flux / 1e5)[:, None, None] / psf.profile(x, y)
    assert ratio == pytest.approx(1.0, abs=0.1)
    assert np.mean(found.psf.wing_share) > 0.15


def test_a_masked_core_and_an_excluded_companion_do_not_bend_the_fit():
    psf, xy = elliptical(), (11.3, 9.6)
    images = star_cube(psf, xy)
    rows, columns = np.indices(SHAPE)
    images[:, np.hypot(columns - xy[0], rows - xy[1]) < 0.9] = np.nan  # saturated and flagged
    companion = np.hypot(columns - 14.5, rows - 12.0) < 1.5
    images[:, companion] += 2e3
    found = fit_star_image(NODES, images, (11.0, 10.0), companion)
    assert found.star_xy == pytest.approx(xy, abs=0.02)
    assert found.psf.fwhm_pixels == pytest.approx(psf.fwhm_pixels, rel=0.05)
    # control: not excluded, the companion pulls the centroid
    pulled = fit_star_image(NODES, images, (11.0, 10.0), NOTHING)
    assert np.hypot(*np.subtract(pulled.star_xy, xy)) > 3 * np.hypot(*np.subtract(found.star_xy, xy))


def test_the_fit_needs_spaxels():
    images = star_cube(elliptical(), (11.3, 9.6))
    with pytest.raises(InputError, match="too few usable spaxels") as caught:
        fit_star_image(NODES, images, (11.3, 9.6), ~NOTHING)
    assert "fwhm_pixels" in caught.value.do


def test_a_simulated_star_gives_its_own_psf():
    """Against the simulator's image (written without this code): core width and drift by refraction."""
    one = scene(drift_xy_pixels=(0.4, -0.3), n_speckles=0, halo_fraction=0.0, star_electrons=1e7)
    cube, exposure = one.cubes[0], one.exposures[0]
    nodes, images = node_images(cube.data, ~cube.mask, cube.wavelength_um)
    found = fit_star_image(nodes, images, find_peak(images.mean(axis=0)), np.zeros(images.shape[1:], bool))
    assert found.star_xy == pytest.approx(exposure.star_xy.mean(axis=0), abs=0.02)
    drift = exposure.star_xy[[0, -1]]
    # nodes are the middles of 8 bins: 7/8 of the whole drift
    expected = (drift[1] - drift[0]) * 7 / 8
    assert found.psf.drift_xy[-1] - found.psf.drift_xy[0] == pytest.approx(expected, abs=0.03)
    # widths without the pixel; the simulator's PSF widens with wavelength about 2.4 pixels
    assert found.psf.fwhm_pixels == pytest.approx(2.4, rel=0.05)
    # the profile is the image: what star and companion share
    image = exposure.star_psf[300]
    rows, columns = np.indices(image.shape)
    x, y = exposure.star_xy[300]
    middle = found.psf.profile(columns - found.star_xy[0], rows - found.star_xy[1])[3:5].mean(axis=0)
    near = np.hypot(columns - x, rows - y) < 3
    assert np.max(np.abs(middle - image)[near]) < 0.03 * image.max()


def test_node_images_average_usable_samples():
    rng = np.random.default_rng(2)
    data = rng.standard_normal((40, 3, 4)).astype(np.float32) + 5
    usable = rng.random(data.shape) < 0.7
    usable[:, 0, 0] = False
    wave, images = node_images(data, usable, WAVE[:40], 4)
    assert wave == pytest.approx(WAVE[:40].reshape(4, 10).mean(axis=1))
    assert np.isnan(images[:, 0, 0]).all()
    expected = np.nanmean(np.where(usable, data, np.nan).reshape(4, 10, 12)[:, :, 1:], axis=1)
    assert images.reshape(4, 12)[:, 1:] == pytest.approx(expected, rel=1e-6)


def test_find_peak_ignores_nan():
    image = 100 * gaussian(SHAPE, 14.2, 6.7, 1.2)
    image[0, 0] = np.nan
    assert find_peak(image) == pytest.approx((14.2, 6.7), abs=0.25)  # 3 x 3 pixels: drawn to the middle one


# ---------------------------------------------------------------- stamps


def stamps(position, usable=None, psf=None):
    psf = psf or moffat_of_width(2.5, WAVE)
    usable = np.ones(SHAPE, bool) if usable is None else usable
    return make_stamps(psf, np.atleast_2d(position).astype(float), SHAPE, WAVE, usable), psf


def test_a_stamp_evaluates_the_psf_at_the_sub_pixel_offset():
    found, psf = stamps([10.3, 8.8])
    y, x = np.divmod(found.spaxels[0], SHAPE[1])
    inside = found.spaxels[0] >= 0
    expected = psf.profile(x - 10.3, y - 8.8)[0]
    assert found.profiles[0, inside, 0] == pytest.approx(expected[inside], rel=1e-6)
    assert np.hypot(x - 10.3, y - 8.8)[inside].max() <= 1.25 * 2.5 + 0.5


def test_captured_flux_and_squares():
    """Inside radius r a Moffat profile holds 1 - (1 + r^2/a^2)^(1 - beta) of its flux: its integral."""
    wide, narrow = stamps([11.0, 10.0])
    a = 2.5 / 2 / np.sqrt(2 ** (1 / DEFAULT_BETA) - 1)
    expected = 1 - (1 + (1.25 * 2.5 + 0.5) ** 2 / a**2) ** (1 - DEFAULT_BETA)
    # the circle is cut along pixel borders: a few per cent of the outermost ring
    assert wide.captured[0] == pytest.approx(expected, abs=0.02)
    assert wide.captured[0] == pytest.approx(wide.whole(narrow), rel=1e-6)
    # signal to noise lives in the squares: hardly anything is lost
    assert 0.995 < wide.captured_squares(narrow) <= 1.0


def test_at_the_edge_and_under_a_mask_less_is_captured():
    middle, psf = stamps([11.0, 10.0])
    edge, _ = stamps([0.0, 10.0])
    # symmetric about the edge spaxel's centre: half of the flux and half of that column
    assert 0.55 < edge.captured[0] / middle.captured[0] < 0.75
    assert np.all(edge.spaxels[0][edge.spaxels[0] >= 0] % SHAPE[1] <= 4)
    usable = np.ones(SHAPE, bool)
    usable[10, 11] = False
    holed, _ = stamps([11.0, 10.0], usable)
    assert 10 * SHAPE[1] + 11 not in holed.spaxels
    assert middle.captured[0] - holed.captured[0] == pytest.approx(
        psf.profile(np.zeros(1), np.zeros(1))[0, 0], rel=1e-5
    )
    outside, _ = stamps([-20.0, 10.0])
    assert np.all(outside.spaxels == -1)
    assert outside.captured[0] == 0.0


def test_profiles_between_nodes_are_linear_in_wavelength():
    drifting = elliptical()
    found, _ = stamps([11.0, 10.0], psf=drifting)
    profile = found.profiles[0]
    value = profile[:, found.node] + found.fraction * (profile[:, found.node + 1] - profile[:, found.node])
    at = 57
    expected = [np.interp(WAVE[at], NODES, own) for own in profile]
    assert value[:, at] == pytest.approx(expected, rel=1e-5)


def test_an_extracted_spectrum_is_one_spaxel():
    found = make_stamps(None, np.zeros((1, 2)), (1, 1), WAVE, np.ones((1, 1), bool))
    assert found.spaxels.tolist() == [[0]]
    assert np.all(found.profiles == 1.0)
    assert found.captured.tolist() == [1.0]
