"""Real published files against the facts their README states; skipped where they are absent."""

import numpy as np
import pytest
from astropy.io import fits

from xcorr.errors import InputError
from xcorr.io import read_cube, read_exposure, read_spectrum, read_template
from xcorr.spectral import air_to_vacuum


def codes(cube):
    return {note.code for note in cube.notes}


def test_kmos_noise_zero_is_masked(reference_data):
    """DATA + NOISE, WAVE in um, vacuum; samples with NOISE == 0 and a border of NaN (README of the data)."""
    path = reference_data / "cubes" / "kmos_yj_faint.fits"
    cube = read_cube(path)
    with fits.open(path) as hdus:
        data, noise, header = hdus[1].data, hdus[2].data, hdus[1].header
        expected_bad = ~np.isfinite(data) | ~(noise > 0)
    assert cube.shape == (2048, 14, 15)
    assert cube.wavelength_um == pytest.approx(1.0 + header["CD3_3"] * np.arange(2048), rel=1e-12)
    assert cube.mask[expected_bad].all()
    extra = cube.mask & ~expected_bad
    # everything else that is masked is an exact zero, or claims an error far below all others: of the 0.15 % of
    # samples beside the gaps, the lowest claims 3e-7 of the median sigma
    absurd = noise < np.sqrt(1.1e-3) * np.median(noise[~cube.mask])
    assert np.all((data[extra] == 0) | absurd[extra])
    assert 1e-4 < (extra & absurd).mean() < 3e-3
    assert 0.07 <= cube.mask.mean() <= 0.32
    good = ~cube.mask
    factor = 10.0**cube.scale_exponent
    assert np.allclose(cube.data[good], data[good].astype(float) * factor, rtol=1e-6, atol=0)
    assert np.allclose(np.sqrt(cube.variance[good]), noise[good].astype(float) * factor, rtol=1e-5, atol=0)
    # header gives time, site and coordinates; the Earth's motion is below 30 km/s
    assert abs(cube.barycentric_velocity_km_s) < 30.5
    assert "barycentric-from-header" in codes(cube)


def test_muse_is_air_with_variances(reference_data):
    """DATA + STAT (variance), AWAV in Angstrom: 4750 + 1.25 k, air (README of the data)."""
    path = reference_data / "cubes" / "muse_awav_cutout.fits"
    cube = read_cube(path)
    assert cube.wavelength_um == pytest.approx(air_to_vacuum(0.4750 + 1.25e-4 * np.arange(500)), rel=1e-12)
    with fits.open(path) as hdus:
        assert np.allclose(cube.variance[~cube.mask], hdus[2].data[~cube.mask], rtol=1e-6, atol=0)
    assert cube.unit.startswith("10**-20")
    assert cube.celestial_header["CTYPE1"] == "RA---TAN"


def test_gmos_needs_unit_and_medium_and_its_errors_are_noticed(reference_data):
    """SCI + ERR + MASK, CTYPE3 LAMBDA without unit; absurdly small ERR (README of the data)."""
    path = reference_data / "cubes" / "gmos_lambda.fits"
    with pytest.raises(InputError, match="wavelength_unit"):
        read_cube(path)
    with pytest.raises(InputError, match="medium"):
        read_cube(path, wavelength_unit="Angstrom")
    cube = read_cube(path, wavelength_unit="Angstrom", medium="air")
    assert cube.wavelength_um[0] == pytest.approx(float(air_to_vacuum(0.562789)), rel=1e-12)
    assert cube.variance is None
    assert "error-plane-absurd" in codes(cube)
    assert cube.mask[:, 0, :2].all()
    assert cube.mask.mean() == pytest.approx(2 / 48)
    assert cube.celestial_header is None
    assert (
        read_cube(path, wavelength_unit="Angstrom", medium="air", error_kind="variance").variance is not None
    )


def test_miri_wavelength_table(reference_data):
    path = reference_data / "cubes" / "miri_s3d_wavetab_header_only.fits"
    cube = read_cube(path)
    with fits.open(path) as hdus:
        table = hdus["WCS-TABLE"].data["wavelength"].ravel()
    assert cube.wavelength_um == pytest.approx(table[:10].astype(float), rel=1e-12)
    assert cube.frame == "barycentric"
    assert cube.planes["error"].endswith("sigma")


def test_manga_logarithmic_grid_with_inverse_variance(reference_data):
    path = reference_data / "cubes" / "manga_wavelog_header_only.fits"
    cube = read_cube(path)
    # the survey's grid is log10 lambda = log10(3621.59598486 A) + 1e-4 k, vacuum; header CD3_3 is rounded
    assert cube.wavelength_um == pytest.approx(0.362159598486 * 10 ** (1e-4 * np.arange(10)), rel=1e-9)
    with fits.open(path) as hdus:
        ivar = hdus["IVAR"].data.astype(float)
    good = ~cube.mask
    assert cube.variance[good] == pytest.approx(1 / ivar[good], rel=1e-6)


SPECTRA = {
    "L5_2MASSJ1507-1627.fits": 1,
    "M0V_HD19305.fits": 1,
    "M5III_HD175865.fits": 1,
    "M8III_IRAS01037+1219.fits": 1,
    "T4.5_2MASSJ0559-1404.fits": 1,
    "L4_R2699_orders.fits": 4,
    "T5_R2699_orders.fits": 4,
}


@pytest.mark.parametrize("name", SPECTRA)
def test_spectra_read_without_a_word_from_the_user(reference_data, name):
    """Rows (wavelength, flux, error[, flag]) with XUNITS and WAVETYPE in the header: um, vacuum."""
    path = reference_data / "spectra" / name
    cube = read_exposure(path)
    assert np.array_equal(cube.data, read_spectrum(path).data)
    with fits.open(path) as hdus:
        stored = hdus[0].data.astype(float)
    orders = stored if stored.ndim == 3 else stored[None]
    assert np.unique(cube.order).size == SPECTRA[name]
    for i, rows in enumerate(orders):
        usable = np.isfinite(rows[:3]).all(axis=0)
        mine = cube.order == i
        good = mine & ~cube.mask[:, 0, 0]
        assert np.array_equal(cube.wavelength_um[good], rows[0][usable])
        factor = 10.0**cube.scale_exponent
        assert np.allclose(cube.data[good, 0, 0], rows[1][usable] * factor, rtol=1e-6, atol=0)
        sigma = np.sqrt(cube.variance[good, 0, 0])
        assert np.allclose(sigma, rows[2][usable] * factor, rtol=1e-5, atol=0)
        assert not cube.mask[np.flatnonzero(mine)[[0, -1]], 0, 0].any()  # padded ends are gone
    template = read_template(path)
    assert np.all(np.diff(template.wavelength_um) > 0)
    if "R2699" in name:
        assert cube.resolving_power == pytest.approx(2699.0)
        assert template.resolving_power == 2699.0
