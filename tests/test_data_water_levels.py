"""The assignment of lines to level pairs, on a made-up molecule whose truth is known."""

import importlib.util
import sys

import numpy as np
import pytest

from xcorr.provenance import data_path


@pytest.fixture(scope="module")
def levels_module():
    """The script that assigns H2O lines."""
    spec = importlib.util.spec_from_file_location(
        "water_levels_under_test", data_path("templates", "water_levels.py")
    )
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def scene(levels_module):
    """Lines of true levels; the list of levels given to the assignment has errors up to 0.4 cm-1 above.

    Crowded as H2O is where it is worst: 400 lower levels below 1000 cm-1, 2000 upper ones in 4000-4600 cm-1.
    """
    rng = np.random.default_rng(20)
    n_lower, n_upper = 400, 2000
    j = np.concatenate([[0], rng.integers(0, 9, n_lower + n_upper - 1)])
    block = np.concatenate([[1], rng.integers(1, 5, n_lower + n_upper - 1)])
    energy = np.concatenate([[0.0], rng.uniform(20, 1000, n_lower - 1), rng.uniform(4000, 4600, n_upper)])
    error = np.concatenate([np.zeros(1), rng.normal(0, 0.01, n_lower - 1), rng.uniform(-0.4, 0.4, n_upper)])
    partner = np.array([levels_module.BLOCK_PARTNER[b] for b in block])
    lower, upper = np.meshgrid(np.arange(n_lower), np.arange(n_lower, n_lower + n_upper), indexing="ij")
    allowed = (partner[lower] == block[upper]) & (np.abs(j[lower] - j[upper]) <= 1)
    allowed &= ~((j[lower] == 0) & (j[upper] == 0)) & (rng.uniform(size=lower.shape) < 0.24)
    lower, upper = lower[allowed], upper[allowed]
    wavenumber = energy[upper] - energy[lower] + rng.normal(0, 3e-4, lower.size)
    rounded = np.round(energy[lower] / 8.065544) * 8.065544
    order = np.argsort(wavenumber)
    listed = levels_module.Levels(j, block, energy + error)
    return wavenumber[order], rounded[order], lower[order], listed


def test_ortho_and_para_are_recovered(levels_module, scene):
    """97 % right; the nearest pair alone, without the crowds, gives clearly less (control)."""
    wavenumber, rounded, lower, listed = scene
    truth = listed.ortho[lower]
    found = levels_module.assign(wavenumber, rounded, listed)
    right = np.mean(found.ortho == truth)
    assert right > 0.97
    assert np.mean(np.abs(found.lower_energy - listed.energy[lower]) < 1e-9) > 0.95
    raw = levels_module.find_candidates(wavenumber, rounded, 4.3, listed, 0.5)
    nearest = levels_module.best_of_each(raw.line, np.lexsort((np.abs(raw.residual), raw.line)))
    alone = np.mean(listed.ortho[raw.lower[nearest]] == truth[raw.line[nearest]])
    assert alone < right - 0.03


def test_candidates_obey_the_selection_rules(levels_module, scene):
    wavenumber, rounded, _, listed = scene
    raw = levels_module.find_candidates(wavenumber, rounded, 4.3, listed, 0.5)
    assert np.array_equal(listed.ortho[raw.lower], listed.ortho[raw.upper])
    assert np.all(listed.block[raw.lower] != listed.block[raw.upper])
    assert np.abs(listed.j[raw.lower] - listed.j[raw.upper]).max() == 1
    assert np.all(listed.j[raw.lower] + listed.j[raw.upper] > 0)
    assert np.abs(raw.residual).max() <= 0.5
    wanted = listed.energy[raw.upper] - listed.energy[raw.lower] - wavenumber[raw.line]
    np.testing.assert_allclose(raw.residual, wanted, atol=1e-9)


def test_crowd_against_brute_force(levels_module):
    rng = np.random.default_rng(3)
    upper, residual, weight = rng.integers(0, 6, 300), rng.uniform(-0.5, 0.5, 300), rng.uniform(size=300)
    near = (upper[:, None] == upper) & (np.abs(residual[:, None] - residual) <= 0.05)
    np.testing.assert_allclose(levels_module.crowd(upper, residual, 0.05, weight), near @ weight, rtol=1e-9)


def test_an_exchanged_doublet_is_put_right(levels_module):
    """Two lines 0.003 cm-1 apart that hold each other's pair of levels."""
    found = levels_module.Candidates(
        line=np.array([0, 0, 1, 1, 2, 3, 4, 5]),
        lower=np.array([0, 1, 0, 1, 2, 3, 6, 7]),
        upper=np.array([4, 5, 4, 5, 4, 5, 4, 5]),
        residual=np.array([0.1, 0.2015, 0.097, 0.1985, 0.1, 0.1985, 0.1, 0.1985]),
    )
    swapped = np.array([1, 2, 4, 5, 6, 7])
    assert levels_module.untwist(found, found.residual, swapped, 8).tolist() == [0, 3, 4, 5, 6, 7]
