"""The simulator's point-spread function."""

import numpy as np
import pytest

from xcorr.simulate.image import PointSpread, random_speckles, render

WAVES = np.array([2.0, 2.2, 2.4])


def at(x, y):
    return np.tile([x, y], (WAVES.size, 1)).astype(float)


def test_flux_is_one_over_a_large_field():
    spread = PointSpread(2.4, 2.2, 0.4, 10.0, 3.5, *random_speckles(8, 0.01, (3.0, 9.0), 0.6, 1))
    image = render(spread, WAVES, at(150.2, 149.7), 301, 301)
    # A Moffat profile of exponent 3.5 and FWHM 10 has 4e-6 of its flux beyond 150 pixels.
    assert image.sum(axis=(1, 2)) == pytest.approx(1.0, abs=2e-5)
    assert image.min() >= 0.0


def test_halo_is_a_moffat_profile():
    """The mixture of Gaussians against (1 + r2/alpha2)**-beta, in the range where the halo matters."""
    beta, fwhm = 2.5, 12.0
    spread = PointSpread(2.4, 2.2, 1.0 - 1e-12, fwhm, beta)
    image = render(spread, np.array([2.2]), np.array([[40.0, 40.0]]), 81, 81)[0]
    alpha = 0.5 * fwhm / np.sqrt(2.0 ** (1.0 / beta) - 1.0)
    radius = np.arange(2, 19)
    expected = (beta - 1.0) / (np.pi * alpha**2) * (1.0 + radius**2 / alpha**2) ** -beta
    # Twelve quadrature nodes, and the pixel's own size near the middle.
    assert image[40, 40 + radius] == pytest.approx(expected, rel=0.01)


def test_core_widens_with_wavelength():
    image = render(PointSpread(2.4, 2.2), WAVES, at(15.0, 15.0), 31, 31).astype(float)
    x = np.arange(31)
    width = np.sqrt((image * (x - 15.0) ** 2).sum(axis=(1, 2)) - 1.0 / 12.0) * 2.3548
    assert width == pytest.approx(2.4 * WAVES / 2.2, rel=1e-3)


def test_centroid_is_the_position_in_each_channel():
    position = np.array([[14.3, 15.8], [14.5, 15.6], [14.7, 15.4]])
    image = render(PointSpread(2.4, 2.2), WAVES, position, 31, 31).astype(float)
    y, x = np.mgrid[0:31, 0:31]
    found = np.column_stack([(image * x).sum(axis=(1, 2)), (image * y).sum(axis=(1, 2))])
    assert found == pytest.approx(position, abs=1e-4)


def test_speckle_distance_is_proportional_to_wavelength():
    speckle = np.array([[6.0, -4.0]])
    spread = PointSpread(2.0, 2.2, speckle_xy=speckle, speckle_flux=np.array([0.3]))
    clean = PointSpread(2.0, 2.2)
    position = at(20.0, 20.0)
    only = render(spread, WAVES, position, 41, 41) - 0.7 * render(clean, WAVES, position, 41, 41)
    y, x = np.mgrid[0:41, 0:41]
    weight = only.sum(axis=(1, 2))
    found = np.column_stack(
        [(only * (x - 20)).sum(axis=(1, 2)) / weight, (only * (y - 20)).sum(axis=(1, 2)) / weight]
    )
    assert found == pytest.approx(speckle * (WAVES / 2.2)[:, None], abs=1e-3)


def test_source_outside_the_field_leaves_its_halo():
    spread = PointSpread(2.4, 2.2, 0.4)
    image = render(spread, WAVES, at(-9.0, 10.0), 21, 21)
    assert 0.0 < image.sum(axis=(1, 2)).max() < 0.2
    assert image[0, 10, 0] > image[0, 10, 20]
