"""Channel edges and the mean over a pixel."""

import numpy as np
import pytest
from astropy import units as u
from scipy.integrate import trapezoid

from xcorr.errors import InputError
from xcorr.spectral import channel_edges, log_grid, to_channels


def test_log_grid():
    grid = log_grid(2.0, 2.4, 200_000)
    np.testing.assert_allclose(np.diff(np.log(grid)), 5e-6, rtol=1e-8)
    assert grid[0] == 2.0
    assert grid[-2] < 2.4 <= grid[-1]
    with pytest.raises(InputError, match="0 < start < stop"):
        log_grid(2.4, 2.0, 1e5)


def test_edges_of_a_uniform_grid():
    edges = channel_edges(np.array([1.0, 1.1, 1.2, 1.3]))
    np.testing.assert_allclose(edges[:, 0], [0.95, 1.05, 1.15, 1.25])
    np.testing.assert_allclose(edges[1:, 0], edges[:-1, 1])
    np.testing.assert_allclose(channel_edges([1.0, 1.1] * u.um), [[0.95, 1.05], [1.05, 1.15]])


def test_a_gap_is_not_a_wide_pixel():
    centres = np.delete(np.linspace(2.0, 2.1, 101), np.arange(40, 60))
    width = np.ptp(channel_edges(centres), axis=1)
    np.testing.assert_allclose(width, 0.001, rtol=1e-9)


def test_orders_do_not_touch():
    first, second = np.linspace(2.0, 2.1, 11), np.linspace(2.05, 2.25, 11)
    edges = channel_edges(np.concatenate([first, second]), np.repeat([0, 1], 11))
    np.testing.assert_array_equal(edges, np.concatenate([channel_edges(first), channel_edges(second)]))
    with pytest.raises(InputError, match="ascend"):
        channel_edges(np.concatenate([first, second]))
    with pytest.raises(InputError, match="at least 2"):
        channel_edges([2.0, 2.1, 2.2], [0, 0, 1])


def test_flux_is_conserved():
    rng = np.random.default_rng(3)
    grid = np.sort(rng.uniform(2.0, 2.4, 5000))
    flux = rng.lognormal(size=(2, grid.size))
    # pixel edges anywhere, also several inside one step of the grid
    edges = np.sort(rng.uniform(grid[0], grid[-1], 900))
    edges[0], edges[-1] = grid[0], grid[-1]
    mean = to_channels(grid, flux, edges)
    total = (mean * np.diff(edges)).sum(axis=1)
    np.testing.assert_allclose(total, trapezoid(flux, grid, axis=1), rtol=1e-12)


def test_a_straight_line_gives_its_value_at_the_middle():
    grid = np.linspace(2.0, 2.4, 777)
    edges = channel_edges(np.linspace(2.01, 2.39, 100))
    np.testing.assert_allclose(
        to_channels(grid, 3.0 * grid - 1.0, edges), 3.0 * edges.mean(1) - 1.0, rtol=1e-12
    )


def test_pixels_outside_are_nan():
    mean = to_channels([2.0, 2.1, 2.2], [1.0, 1.0, 1.0], [[1.95, 2.05], [2.05, 2.15], [2.15, 2.2001]])
    np.testing.assert_array_equal(np.isnan(mean), [True, False, True])
    with pytest.raises(InputError, match="edges"):
        to_channels([2.0, 2.1, 2.2], [1.0, 1.0, 1.0], [[2.1, 2.05]])
