"""Inspection: numbers about an exposure against what it was made with."""

import json
import math

import numpy as np
import pytest

from xcorr import cli
from xcorr.commands.inspect import as_text
from xcorr.cube import Cube
from xcorr.inspection import check_errors, inspect_cube

LIGHT = 299792.458


def white(sigma=3.0, claimed=3.0, shape=(400, 9, 10), seed=1, **changes):
    """A cube of white noise with claimed errors."""
    rng = np.random.default_rng(seed)
    values = {
        "data": rng.normal(0.0, sigma, shape).astype(np.float32),
        "variance": None if claimed is None else np.full(shape, claimed**2, np.float32),
        "mask": np.zeros(shape, bool),
        "wavelength_um": np.linspace(2.0, 2.2, shape[0]),
    }
    return Cube(**(values | changes))


@pytest.mark.parametrize("scale", [0.3, 1.0, 4.0])
def test_ratio_of_scatter_to_claim(scale):
    check = check_errors(white(claimed=3.0 / scale))
    # 45 spaxels x 396 overlapping differences: the median absolute value is good to 1 per cent
    assert check.ratio == pytest.approx(scale, rel=0.03)
    assert check.scatter_sigma == pytest.approx(3.0, rel=0.03)
    assert ("match" in check.verdict) == (scale == 1.0)
    assert "constant" in check.verdict


def test_slopes_and_a_bright_source_do_not_count_as_scatter():
    cube = white()
    slope = np.linspace(0.0, 500.0, 400, dtype=np.float32)[:, None, None]
    lines = 200.0 * np.random.default_rng(2).random((400, 1, 1)).astype(np.float32)
    source = np.zeros((1, 9, 10), np.float32)
    source[0, 3:6, 3:6] = 1.0
    changed = cube.with_changes(data=(cube.data + slope + 50.0 * source * lines).astype(np.float32))
    assert check_errors(changed).ratio == pytest.approx(1.0, rel=0.03)
    # the control: with lines in every spaxel the scatter is theirs
    everywhere = cube.with_changes(data=(cube.data + lines).astype(np.float32))
    assert check_errors(everywhere).ratio > 5.0


def test_scale_exponent_and_masks():
    cube = white()
    mask = np.random.default_rng(3).random(cube.shape) < 0.1
    data = np.where(mask, np.float32(0.0), cube.data)
    check = check_errors(cube.with_changes(data=data, mask=mask, scale_exponent=18))
    assert check.ratio == pytest.approx(1.0, rel=0.03)
    assert check.claimed_sigma == pytest.approx(3.0e-18)
    assert check.n_samples < 0.8 * 45 * 396


def test_without_errors_or_without_data():
    check = check_errors(white(claimed=None))
    assert check.verdict == "no errors claimed"
    assert math.isnan(check.ratio)
    assert check.scatter_sigma == pytest.approx(3.0, rel=0.03)
    dead = white(mask=np.ones((400, 9, 10), bool), data=np.zeros((400, 9, 10), np.float32))
    assert "too few" in check_errors(dead).verdict
    found = inspect_cube(dead)
    assert (found.dead_channels, found.dead_spaxels, found.masked_fraction) == (400, 90, 1.0)
    assert found.brightest is None


def test_made_up_data_are_noticed():
    shape = (400, 9, 10)
    assert "do not scatter" in check_errors(white(data=np.ones(shape, np.float32))).verdict


def test_sampling_of_a_spectrum_of_two_orders():
    wavelength = np.concatenate([np.linspace(2.0, 2.1, 300), np.linspace(2.05, 2.2, 300)])
    cube = white(
        shape=(600, 1, 1),
        wavelength_um=wavelength,
        order=np.repeat([0, 1], 300).astype(np.int16),
        resolving_power=np.full(600, 3000.0),
    )
    found = inspect_cube(cube)
    assert (found.kind, found.n_orders, found.brightest) == ("spectrum", 2, None)
    low, _, high = found.channel_km_s
    # the extremes are the red end of the first order and the blue end of the second
    assert low == pytest.approx(LIGHT * (0.1 / 299) / 2.1, rel=1e-3)
    assert high == pytest.approx(LIGHT * (0.15 / 299) / 2.05, rel=1e-3)
    assert found.pixels_per_resolution_element[0] == pytest.approx(LIGHT / 3000 / high, rel=1e-3)
    assert "600 channels in 2 orders" in as_text(found)


def test_one_channel_says_nothing_about_sampling():
    cube = white(shape=(1, 5, 5), wavelength_um=np.array([2.0]), resolving_power=np.array([3000.0]))
    assert all(math.isnan(value) for value in inspect_cube(cube).channel_km_s)
    as_text(inspect_cube(cube))


# ---------------------------------------------------------------- real files


def inspected(capsys, path, *options):
    assert cli.main(["inspect", str(path), "--json", *options]) == 0
    return json.loads(capsys.readouterr().out)


def test_a_real_cube_in_air(reference_data, capsys):
    """A public cutout: CTYPE3 AWAV, variance plane whose errors are known to be close to the scatter."""
    found = inspected(capsys, reference_data / "cubes" / "muse_awav_cutout.fits")
    assert found["medium_of_file"] == "air"
    assert found["planes"]["error"].endswith("variance")
    assert 0.8 < found["errors"]["ratio"] < 1.25


def test_a_real_cube_with_absurd_errors(reference_data, capsys):
    """The error plane is constant and absurdly small (README of the reference data)."""
    found = inspected(
        capsys,
        reference_data / "cubes" / "gmos_lambda.fits",
        *("--set", "wavelength_unit=Angstrom", "--set", "medium=air"),
    )
    assert any("error" in note["code"] for note in found["notes"])
    assert "match" not in found["errors"]["verdict"]


def test_a_real_spectrum_of_four_orders(reference_data, capsys):
    """Theissen et al. 2022: R = 2699, four orders, vacuum."""
    found = inspected(capsys, reference_data / "spectra" / "T5_R2699_orders.fits")
    assert (found["kind"], found["n_orders"], found["medium_of_file"]) == ("spectrum", 4, "vacuum")
    assert found["resolving_power"][1] == 2699
