"""FITS and HDF5 cubes: planes, masks, traps, layouts, memory. Everything is written here and read back."""

import gzip
import subprocess
import sys
import textwrap
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from xcorr.cube import Cube
from xcorr.errors import InputError, SettingsError
from xcorr.io import LAYOUTS, read_cube, read_exposure, write_cube
from xcorr.spectral import air_to_vacuum, barycentric_velocity, vacuum_to_air

NW, NY, NX = 60, 5, 6
LAMBDA = 2.0 + 1e-3 * np.arange(NW)


def noise(seed=0, shape=(NW, NY, NX), level=1.0):
    return (100 + level * np.random.default_rng(seed).normal(size=shape)).astype(np.float32)


def wave_cards(**changes):
    cards = {"CTYPE3": "WAVE", "CUNIT3": "um", "CRVAL3": 2.0, "CRPIX3": 1.0, "CDELT3": 1e-3}
    cards |= {"CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CUNIT1": "deg", "CUNIT2": "deg"}
    cards |= {"CRVAL1": 83.0, "CRVAL2": -5.0, "CRPIX1": 2.0, "CRPIX2": 3.0, "CDELT1": -7e-6, "CDELT2": 7e-6}
    cards |= {"SPECSYS": "TOPOCENT"}
    return {key: value for key, value in (cards | changes).items() if value is not None}


def write(path, *planes, primary=None, cards=None):
    """Planes are (name, array) or (name, array, extra cards); all get the wave cards."""
    hdus = [fits.PrimaryHDU()]
    hdus[0].header.update(primary or {})
    for name, values, *extra in planes:
        hdu = fits.ImageHDU(values, name=name)
        hdu.header.update(wave_cards() if cards is None else cards)
        hdu.header.update(extra[0] if extra else {})
        hdus.append(hdu)
    fits.HDUList(hdus).writeto(path, overwrite=True)
    return path


def codes(cube):
    return {note.code for note in cube.notes}


ERRORS = [
    *[(name, "sigma") for name in ("ERR", "ERROR", "NOISE", "SIGMA", "x.NOISE", "IFU_3_etc.NOISE")],
    *[(name, "variance") for name in ("VAR", "STAT", "VARIANCE")],
    ("IVAR", "inverse"),
]


@pytest.mark.parametrize(("name", "kind"), ERRORS)
@pytest.mark.parametrize("science", ["SCI", "DATA", "FLUX"])
def test_planes_by_name(tmp_path, name, kind, science):
    if "." in name:
        science = name.rsplit(".", 1)[0] + "." + science
    sigma = np.full((NW, NY, NX), 2.0, np.float32)
    sigma[:, 1, 2] = 4.0
    plane = {"sigma": sigma, "variance": sigma**2, "inverse": sigma**-2}[kind]
    cube = read_cube(write(tmp_path / "a.fits", (science, noise()), (name, plane)))
    assert cube.variance == pytest.approx(sigma**2, rel=1e-6)
    assert not cube.mask.any()
    assert cube.data == pytest.approx(noise())
    assert cube.wavelength_um == pytest.approx(LAMBDA, rel=1e-14)


@pytest.mark.parametrize(
    ("hduclas3", "power"), [("MSE", 2.0), ("RMSE", 1.0), ("INVMSE", -2.0), ("INVRMSE", -1.0)]
)
def test_planes_by_hduclas(tmp_path, hduclas3, power):
    quality = np.zeros((NW, NY, NX), np.int32)
    quality[3, 2, 1] = 16
    path = write(
        tmp_path / "a.fits",
        ("ONE", noise(), {"HDUCLAS2": "DATA"}),
        ("TWO", np.full((NW, NY, NX), 3.0**power), {"HDUCLAS2": "ERROR", "HDUCLAS3": hduclas3}),
        ("THREE", quality, {"HDUCLAS2": "QUALITY"}),
    )
    cube = read_cube(path)
    good = ~cube.mask
    assert cube.variance[good] == pytest.approx(9.0, rel=1e-6)
    assert np.argwhere(cube.mask).tolist() == [[3, 2, 1]]


def test_overrides_name_planes_by_number_or_name_and_kind(tmp_path):
    path = write(tmp_path / "a.fits", ("X1", noise()), ("X2", np.full((NW, NY, NX), 4.0)))
    plain = read_cube(path, science_extension=1)
    assert plain.variance is None
    assert {"no-error-plane", "unused-plane"} <= codes(plain)
    for extension in (2, "x2"):
        named = read_cube(path, science_extension="X1", error_extension=extension, error_kind="variance")
        assert named.variance == pytest.approx(4.0)
    with pytest.raises(InputError, match="set error_kind"):
        read_cube(path, science_extension=1, error_extension=2)
    with pytest.raises(InputError, match="it holds"):
        read_cube(path, science_extension=7)


def test_several_objects_in_one_file_must_be_named(tmp_path):
    planes = [("IFU.1.DATA", noise(1)), ("IFU.1.NOISE", noise(2)), ("IFU.2.DATA", noise(3))]
    path = write(tmp_path / "a.fits", *planes, ("IFU.2.NOISE", 2 * noise(2)))
    with pytest.raises(InputError, match="science_extension"):
        read_cube(path)
    second = read_cube(path, science_extension="IFU.2.DATA")
    assert second.data == pytest.approx(noise(3))
    assert second.variance == pytest.approx(
        4 * noise(2) ** 2, rel=1e-5
    )  # its own errors, not those of object 1


def test_every_bad_sample_is_masked_and_neutral(tmp_path):
    data, sigma = noise(), np.ones((NW, NY, NX), np.float32)
    data[0, 0, 0], data[1, 0, 0] = np.nan, np.inf
    sigma[2, 0, 0], sigma[3, 0, 0], sigma[4, 0, 0], sigma[5, 0, 0] = 0, -1, np.nan, np.inf
    data[10] = 0  # a channel that is zero over the whole field
    data[:, 4, 5] = 0  # a spaxel outside the field
    quality = np.zeros((NW, NY, NX), np.uint8)
    quality[6, 0, 0] = 2
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", data), ("ERR", sigma), ("DQ", quality)))
    expected = np.zeros(data.shape, bool)
    expected[:7, 0, 0] = True
    expected[10] = True
    expected[:, 4, 5] = True
    assert np.array_equal(cube.mask, expected)
    assert np.all(cube.data[expected] == 0)
    assert np.all(cube.variance[expected] == 1)
    assert np.all(np.isfinite(cube.data))
    assert cube.planes["masked channel zero"] == str(NY * NX)


def test_zeros_at_the_rim_are_masked_but_honest_counts_are_not(tmp_path):
    data = noise()
    data[20:40, 0, 0] = 0
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", data)))
    assert cube.mask[20:40, 0, 0].all()
    assert cube.mask.sum() == 20
    counts = np.random.default_rng(1).poisson(0.7, (NW, NY, NX)).astype(np.float32)
    cube = read_cube(write(tmp_path / "b.fits", ("SCI", counts)))
    assert cube.mask.sum() == 0


@pytest.mark.parametrize(
    ("bits", "bad_values"),
    [
        ({}, {1, 2, 3, 8, 9}),
        ({"quality_bad_bits": [0]}, {1, 3, 9}),
        ({"quality_bad_bits": [1, 3]}, {2, 3, 8, 9}),
        ({"quality_good_bits": [0, 3]}, {0, 1, 2, 3, 8}),
    ],
)
def test_quality_bits(tmp_path, bits, bad_values):
    values = np.array([0, 1, 2, 3, 8, 9])
    quality = np.broadcast_to(values, (NW, NY, NX)).astype(np.int16)
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", noise()), ("DQ", quality)), **bits)
    assert [bool(cube.mask[0, 0, i]) for i in range(6)] == [int(v) in bad_values for v in values]


def test_unsigned_quality_and_flat_quality_planes(tmp_path):
    quality = np.zeros((NW, NY, NX), np.uint32)
    quality[1, 1, 1] = 2**31
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", noise()), ("DQ", quality)), quality_bad_bits=[31])
    assert np.argwhere(cube.mask).tolist() == [[1, 1, 1]]
    image = np.zeros((NY, NX), np.int32)
    image[2, 3] = 1
    cube = read_cube(write(tmp_path / "b.fits", ("SCI", noise()), ("MASK", image)))
    assert cube.mask[:, 2, 3].all()
    assert cube.mask.sum() == NW
    with pytest.raises(InputError, match="another shape"):
        read_cube(write(tmp_path / "c.fits", ("SCI", noise()), ("MASK", image[:, :3])))


@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_duplicate_spaxels_count_once(tmp_path, axis):
    once = noise(shape=(NW, 4, 7))
    twice = np.repeat(once, 2, axis=1 if axis == "rows" else 2)
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", twice), ("ERR", np.ones_like(twice))))
    usable = ~cube.mask.all(axis=0)
    assert usable.sum() == 28
    kept = cube.data[:, usable].reshape(NW, 4, 7)
    assert np.array_equal(kept, once)
    message = next(note.message for note in cube.notes if note.code == "duplicate-spaxels")
    assert "28 of 56" in message
    assert "duplicate-spaxels" not in codes(read_cube(write(tmp_path / "b.fits", ("SCI", once))))


def test_duplicates_with_masked_samples_are_still_seen(tmp_path):
    data = np.repeat(noise(shape=(NW, 3, 6)), 2, axis=1)
    data[5, 1, 2] = np.nan  # the copy alone is hurt
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", data)))
    assert (~cube.mask.all(axis=0)).sum() == 18


def test_absurd_constant_errors_are_dropped_and_sane_ones_kept(tmp_path):
    data = noise()
    tiny = np.full(data.shape, 1e-9, np.float32)
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", data), ("ERR", tiny)))
    assert cube.variance is None
    assert "error-plane-absurd" in codes(cube)
    for level in (1.0, 0.1, 30.0):  # right, too small by ten, too large: kept, for the calibration to judge
        cube = read_cube(write(tmp_path / "b.fits", ("SCI", data), ("ERR", np.full_like(data, level))))
        assert cube.variance == pytest.approx(level**2, rel=1e-6)


@pytest.mark.parametrize("factor", [1e-20, 1e-30, 1e12, 1.0])
@pytest.mark.parametrize("kind", ["ERR", "VAR", "IVAR"])
def test_faint_and_huge_fluxes_keep_their_variances(tmp_path, factor, kind):
    sigma = (np.full((NW, NY, NX), 0.5) + 0.1 * LAMBDA[:, None, None]) * factor
    plane = {"ERR": sigma, "VAR": sigma**2, "IVAR": sigma**-2}[kind]
    data = noise().astype(np.float64) * factor
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", data), (kind, plane)))
    back = 10.0 ** (-cube.scale_exponent)
    assert not cube.mask.any()
    assert cube.data.astype(float) * back == pytest.approx(data, rel=1e-6)
    assert np.sqrt(cube.variance.astype(float)) * back == pytest.approx(sigma, rel=1e-6)
    assert 1e-3 <= np.median(np.abs(cube.data)) <= 1e5


def test_scaled_integers_blanks_and_compressed_images(tmp_path):
    stored = np.random.default_rng(2).integers(-500, 500, (NW, NY, NX)).astype(np.int16)
    hdu = fits.ImageHDU(stored, name="SCI")
    hdu.header.update(wave_cards())
    hdu.header["BLANK"] = int(stored[7, 1, 1])
    hdu.header["BSCALE"], hdu.header["BZERO"] = 0.5, 100.0
    expected = stored * 0.5 + 100.0
    bad = stored == stored[7, 1, 1]
    # BSCALE survives only if astropy does not rescale: write the bytes as they are
    raw = fits.PrimaryHDU().header.tostring() + hdu.header.tostring()
    body = stored.astype(">i2").tobytes()
    (tmp_path / "a.fits").write_bytes(raw.encode() + body + b"\0" * (-len(body) % 2880))
    cube = read_cube(tmp_path / "a.fits")
    assert np.array_equal(cube.mask, bad)
    assert cube.data[~bad] == pytest.approx(expected[~bad])

    packed = fits.CompImageHDU(noise(), name="SCI", compression_type="GZIP_1", quantize_level=0)
    packed.header.update(wave_cards())
    fits.HDUList([fits.PrimaryHDU(), packed]).writeto(tmp_path / "b.fits")
    assert read_cube(tmp_path / "b.fits").data == pytest.approx(noise())


def test_gzip_gives_the_same_cube(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()), ("ERR", np.ones((NW, NY, NX), np.float32)))
    (tmp_path / "a.fits.gz").write_bytes(gzip.compress(path.read_bytes()))
    plain, packed = read_cube(path), read_cube(tmp_path / "a.fits.gz")
    assert np.array_equal(plain.data, packed.data)
    assert np.array_equal(plain.variance, packed.variance)
    data = (tmp_path / "a.fits.gz").read_bytes()
    (tmp_path / "cut.fits.gz").write_bytes(data[: len(data) // 2])
    with pytest.raises(InputError):
        read_cube(tmp_path / "cut.fits.gz")


@pytest.mark.parametrize("axis", [1, 2, 3])
@pytest.mark.parametrize("descending", [False, True])
@pytest.mark.parametrize("window", [None, (2.0105, 2.0305)])
def test_any_axis_order_gives_wave_y_x(tmp_path, axis, descending, window):
    data, sigma = noise(), np.random.default_rng(5).uniform(1, 2, (NW, NY, NX)).astype(np.float32)
    letters = {3: (0, 1, 2), 2: (1, 0, 2), 1: (1, 2, 0)}[axis]  # file order of (wave, y, x)
    cards = {f"CTYPE{axis}": "WAVE", f"CUNIT{axis}": "um", f"CRPIX{axis}": 1.0, "SPECSYS": "TOPOCENT"}
    start, step = (LAMBDA[-1], -1e-3) if descending else (LAMBDA[0], 1e-3)
    cards |= {f"CRVAL{axis}": start, f"CDELT{axis}": step}
    turn = slice(None, None, -1) if descending else slice(None)
    planes = [(name, plane[turn].transpose(letters)) for name, plane in (("SCI", data), ("ERR", sigma))]
    quality = np.zeros((NW, NY, NX), np.int16)
    quality[15, 3, 4] = 1
    planes.append(("DQ", quality[turn].transpose(letters)))
    cube = read_cube(write(tmp_path / "a.fits", *planes, cards=cards), wavelength_range_um=window)
    kept = slice(None) if window is None else slice(11, 31)
    assert cube.wavelength_um == pytest.approx(LAMBDA[kept], rel=1e-14)
    assert np.array_equal(cube.mask, quality[kept] == 1)
    good = ~cube.mask
    assert np.array_equal(cube.data[good], data[kept][good])
    assert np.allclose(cube.variance[good], sigma[kept][good] ** 2, rtol=1e-6)


def test_degenerate_fourth_axis(tmp_path):
    cards = wave_cards(CTYPE4="STOKES", CRVAL4=1.0, CRPIX4=1.0, CDELT4=1.0)
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", noise()[None]), cards=cards))
    assert np.array_equal(cube.data, noise())


def test_frequency_axis_is_turned_to_ascending_wavelength(tmp_path):
    light = 299792.458  # GHz um
    high, low = light / 2.0, light / 2.06
    cards = wave_cards(CTYPE3="FREQ", CUNIT3="GHz", CRVAL3=low, CDELT3=(high - low) / (NW - 1))
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", noise()), cards=cards))
    assert cube.wavelength_um == pytest.approx(light / np.linspace(high, low, NW), rel=1e-13)
    assert np.array_equal(cube.data, noise()[::-1])


def test_air_wavelengths_become_vacuum_by_the_formula_asked_for(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()), cards=wave_cards(CTYPE3="AWAV"))
    shift = {}
    for formula in ("ciddor1996", "fits3"):
        cube = read_cube(path, air_formula=formula)
        assert cube.wavelength_um == pytest.approx(air_to_vacuum(LAMBDA, formula=formula), rel=1e-15)
        shift[formula] = cube.wavelength_um[0]
    # the two formulas differ by about 4.5 km/s in the K band (15 C against 0 C)
    assert (shift["fits3"] / shift["ciddor1996"] - 1) * 299792.458 == pytest.approx(4.5, abs=0.1)
    assert read_cube(path).wavelength_um[0] == shift["ciddor1996"]
    forced = read_cube(path, medium="vacuum")
    assert forced.wavelength_um == pytest.approx(LAMBDA)
    assert "medium-overridden" in codes(forced)


def test_a_nameless_medium_is_asked_for(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()), cards=wave_cards(CTYPE3="LAMBDA"))
    with pytest.raises(InputError, match="set medium"):
        read_cube(path)
    assert read_cube(path, medium="air").wavelength_um == pytest.approx(air_to_vacuum(LAMBDA))
    said = write(tmp_path / "b.fits", ("SCI", noise()), cards=wave_cards(CTYPE3="LAMBDA", AIRORVAC="vac"))
    assert read_cube(said).wavelength_um == pytest.approx(LAMBDA)


@pytest.mark.parametrize(
    ("specsys", "frame"),
    [
        ("TOPOCENT", "observatory"),
        ("BARYCENT", "barycentric"),
        ("HELIOCEN", "heliocentric"),
        (None, "observatory"),
    ],
)
def test_frames(tmp_path, specsys, frame):
    path = write(tmp_path / "a.fits", ("SCI", noise()), cards=wave_cards(SPECSYS=specsys))
    cube = read_cube(path)
    assert cube.frame == frame
    assert ("frame-assumed" in codes(cube)) == (specsys is None)
    assert read_cube(path, frame="heliocentric").frame == "heliocentric"


def test_unusable_frame_is_refused(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()), cards=wave_cards(SPECSYS="LSRK"))
    with pytest.raises(InputError, match="LSRK"):
        read_cube(path)


XYZ = {"OBSGEO-X": 1946404.3, "OBSGEO-Y": -5467644.3, "OBSGEO-Z": -2642728.2}


def test_barycentric_velocity_from_the_header(tmp_path):
    primary = {"MJD-OBS": 58000.0, "EXPTIME": 7200.0, **XYZ}
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", noise()), primary=primary))
    middle = 58000.0 + 3600.0 / 86400.0 + 2400000.5
    expected = barycentric_velocity(middle, 83.0, -5.0, site=tuple(XYZ.values()))
    assert cube.barycentric_velocity_km_s == pytest.approx(expected, abs=1e-9)
    assert abs(expected) > 1
    same = {"DATE-OBS": "2017-09-04T00:00:00", "EXPTIME": 7200.0, **XYZ}
    cube = read_cube(write(tmp_path / "b.fits", ("SCI", noise()), primary=same))
    assert cube.barycentric_velocity_km_s == pytest.approx(expected, abs=1e-6)
    assert read_cube(tmp_path / "b.fits", barycentric_velocity_km_s=-7.5).barycentric_velocity_km_s == -7.5


def test_barycentric_velocity_by_overrides_or_unknown(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()))
    cube = read_cube(path)
    assert cube.barycentric_velocity_km_s is None
    message = next(note.message for note in cube.notes if note.code == "no-barycentric-velocity")
    assert "time" in message
    assert "site" in message
    said = read_cube(path, time="2017-09-04T01:00:00", site=(-70.4, -24.6, 2635.0), coordinates=(83.0, -5.0))
    expected = barycentric_velocity("2017-09-04T01:00:00", 83.0, -5.0, site=(-70.4, -24.6, 2635.0))
    assert said.barycentric_velocity_km_s == pytest.approx(expected)


def test_resolving_power_from_number_file_and_header(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()), primary={"SPEC_RES": 3900.0})
    assert read_cube(path).resolving_power == pytest.approx(3900.0)
    assert read_cube(path, resolving_power=4000).resolving_power == pytest.approx(4000.0)
    (tmp_path / "r.txt").write_text("# wavelength_nm R\n1990 3000\n2100 4100\n")
    by_file = read_cube(path, resolving_power=tmp_path / "r.txt").resolving_power
    assert by_file == pytest.approx(np.interp(LAMBDA, [1.99, 2.1], [3000, 4100]))
    (tmp_path / "short.txt").write_text("# wavelength_um R\n2.01 3000\n2.02 4100\n")
    with pytest.raises(InputError, match="does not cover"):
        read_cube(path, resolving_power=str(tmp_path / "short.txt"))
    values = np.random.default_rng(0).uniform(3000, 5000, (NW, NY, NX))
    fits.PrimaryHDU(values).writeto(tmp_path / "r.fits")
    assert read_cube(path, resolving_power=tmp_path / "r.fits").resolving_power == pytest.approx(values)
    for wrong in (0, -1.0, float("nan")):
        with pytest.raises(InputError, match="resolving power"):
            read_cube(path, resolving_power=wrong)


def test_range_and_masked_intervals(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()))
    cube = read_cube(path, wavelength_range_um=[2.01, 2.02], mask_wavelength_um=[[2.0145, 2.0165]])
    assert cube.wavelength_um == pytest.approx(LAMBDA[10:21])
    assert np.flatnonzero(cube.mask.all(axis=(1, 2))).tolist() == [5, 6]
    with pytest.raises(InputError, match="leaves no channel"):
        read_cube(path, wavelength_range_um=[3.0, 3.1])


def test_states_and_gain(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise(), {"BUNIT": "adu"}), primary={"OBJECT": "x"})
    cube = read_cube(path, telluric_corrected=True, starlight_removed=True, gain_e_per_unit=2.1)
    assert (cube.telluric_corrected, cube.starlight_removed, cube.gain_e_per_unit) == (True, True, 2.1)
    assert cube.unit == "adu"
    assert cube.header["OBJECT"] == "x"
    assert len(cube.sha256) == 64


def test_unknown_override_names_the_nearest(tmp_path):
    path = write(tmp_path / "a.fits", ("SCI", noise()))
    with pytest.raises(SettingsError, match="did you mean 'medium'"):
        read_cube(path, medum="air")
    with pytest.raises(SettingsError):
        read_cube(path, medium="water")
    with pytest.raises(SettingsError):
        read_cube(path, spectral_axis="three")


def test_celestial_cards_follow_the_image_plane(tmp_path):
    from astropy.wcs import WCS

    cards = {"CTYPE1": "WAVE", "CUNIT1": "um", "CRVAL1": 2.0, "CRPIX1": 1.0, "CD1_1": 1e-3}
    cards |= {"CTYPE2": "RA---TAN", "CTYPE3": "DEC--TAN", "CRVAL2": 83.0, "CRVAL3": -5.0}
    cards |= {"CRPIX2": 2.0, "CRPIX3": 3.0, "CD2_2": -7e-6, "CD2_3": 2e-6, "CD3_2": 2e-6, "CD3_3": 7e-6}
    cards |= {"CUNIT2": "deg", "CUNIT3": "deg", "SPECSYS": "TOPOCENT"}
    cube = read_cube(write(tmp_path / "a.fits", ("SCI", noise().transpose(1, 2, 0)), cards=cards))
    sky = WCS(fits.Header(dict(cube.celestial_header))).pixel_to_world_values(4.0, 1.0)  # x, y from zero
    full = WCS(fits.Header(cards)).pixel_to_world_values(0.0, 4.0, 1.0)
    assert np.array(sky) == pytest.approx(np.array(full[1:]), abs=1e-10)


def example_cube(order=False):
    rng = np.random.default_rng(3)
    shape = (NW, NY, NX)
    mask = rng.random(shape) < 0.05
    data = np.where(mask, 0, rng.normal(50, 3, shape)).astype(np.float32)
    variance = np.where(mask, 1, rng.uniform(4, 9, shape)).astype(np.float32)
    celestial = {"WCSAXES": 2, "CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CUNIT1": "deg", "CUNIT2": "deg"}
    celestial |= {"CRVAL1": 83.0, "CRVAL2": -5.0, "CRPIX1": 2.0, "CRPIX2": 3.0}
    celestial |= {"CD1_1": -7e-6, "CD1_2": 1e-6, "CD2_1": 1e-6, "CD2_2": 7e-6}
    return Cube(
        data=data,
        variance=variance,
        mask=mask,
        wavelength_um=LAMBDA,
        order=np.repeat([0, 1], NW // 2) if order else None,
        resolving_power=np.full(NW, 4000.0),
        frame="barycentric",
        barycentric_velocity_km_s=12.25,
        scale_exponent=18,
        unit="W m-2 um-1",
        celestial_header=celestial,
        header={"OBJECT": "example"},
    )


@pytest.mark.parametrize("layout", LAYOUTS)
@pytest.mark.parametrize("grid", ["linear", "logarithmic"])
def test_layouts_round_trip(tmp_path, layout, grid):
    cube = example_cube()
    if grid == "logarithmic":
        cube = cube.with_changes(wavelength_um=2.0 * np.exp(5e-4 * np.arange(NW)))
    path = tmp_path / "a.dat"
    write_cube(path, cube, layout=layout)
    again = read_exposure(path, **({"quality_good_bits": [0, 3]} if layout == "nm-axis1-quality" else {}))
    channel = np.gradient(cube.wavelength_um)
    assert np.max(np.abs(again.wavelength_um - cube.wavelength_um) / channel) < 1e-3
    assert np.array_equal(again.mask, cube.mask)
    scale = 10.0 ** (cube.scale_exponent - again.scale_exponent)
    assert again.data.astype(float) * scale == pytest.approx(cube.data, rel=1e-6)
    if layout == "metre-nan":
        assert again.variance is None
    else:
        good = ~cube.mask
        assert again.variance[good].astype(float) * scale**2 == pytest.approx(cube.variance[good], rel=1e-6)
    assert (again.frame, again.barycentric_velocity_km_s, again.unit) == ("barycentric", 12.25, cube.unit)
    assert again.resolving_power == pytest.approx(4000.0)
    assert again.celestial_header == pytest.approx(cube.celestial_header)
    assert again.header["OBJECT"] == "example"


def test_written_headers_are_what_the_layouts_say(tmp_path):
    cube = example_cube()
    for layout, axis, ctype, unit in [
        ("um-sigma", 3, "WAVE", "um"),
        ("nm-axis1-quality", 1, "WAVE", "nm"),
        ("awav-variance", 3, "AWAV", "Angstrom"),
        ("metre-nan", 3, "WAVE", "m"),
    ]:
        write_cube(tmp_path / "a.fits", cube, layout=layout)
        with fits.open(tmp_path / "a.fits") as hdus:
            header = hdus[1].header
            assert (header[f"CTYPE{axis}"], header[f"CUNIT{axis}"]) == (ctype, unit)
            names = [hdu.name for hdu in hdus]
            if ctype == "AWAV":
                wave = header["CRVAL3"] + header["CD3_3"] * np.arange(NW)
                assert wave == pytest.approx(vacuum_to_air(LAMBDA) * 1e4, abs=0.01)  # a thousandth of 10 A
                assert "STAT" in names
            assert ("DQ" in names) == (layout == "nm-axis1-quality")


def test_written_bytes_are_reproducible(tmp_path):
    for layout in LAYOUTS:
        for name in ("a", "b"):
            write_cube(tmp_path / name, example_cube(), layout=layout)
        assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


def test_hdf5_keeps_orders_bits_and_selects(tmp_path):
    cube = example_cube(order=True)
    write_cube(tmp_path / "a.h5", cube, layout="hdf5")
    again = read_cube(tmp_path / "a.h5")
    assert np.array_equal(again.data, cube.data)
    assert np.array_equal(again.variance, cube.variance)
    assert np.array_equal(again.order, cube.order)
    assert again.scale_exponent == cube.scale_exponent
    second = read_cube(tmp_path / "a.h5", orders=[1], wavelength_range_um=[2.0, 2.04])
    assert np.array_equal(second.data, cube.data[30:41])
    with pytest.raises(Exception, match="one order only"):
        write_cube(tmp_path / "b.fits", cube, layout="um-sigma")


MEMORY_PROBE = r"""
import re, sys
import numpy, astropy.io.fits, h5py, xcorr.spectral
from xcorr.io import read_cube
def peak():  # of this process alone; ru_maxrss would inherit the parent's
    return int(re.search(r"VmHWM:\s+(\d+) kB", open("/proc/self/status").read())[1])
bits = [0, 3] if "quality" in sys.argv[3] else None
read_cube(sys.argv[2], quality_good_bits=bits)  # imports and caches out of the way
before = peak()
cube = read_cube(sys.argv[1], quality_good_bits=bits)
print((peak() - before) * 1024 / (cube.data.nbytes + cube.variance.nbytes))
"""


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="needs /proc for the peak of one process")
@pytest.mark.parametrize("layout", ["um-sigma", "nm-axis1-quality"])
def test_peak_memory_stays_near_the_planes(tmp_path, layout):
    """Data, variance, mask (an eighth of both) and slabs; no file is mapped: the peak is honest."""
    rng = np.random.default_rng(0)
    shape = (800, 96, 96)
    big = Cube(
        data=rng.normal(100, 1, shape).astype(np.float32),
        variance=rng.uniform(1, 2, shape).astype(np.float32),
        mask=np.zeros(shape, bool),
        wavelength_um=2.0 + 2e-4 * np.arange(800),
    )
    write_cube(tmp_path / "big.fits", big, layout=layout)
    write_cube(tmp_path / "small.fits", example_cube(), layout=layout)
    command = [sys.executable, "-c", textwrap.dedent(MEMORY_PROBE)]
    run = subprocess.run(
        [*command, str(tmp_path / "big.fits"), str(tmp_path / "small.fits"), layout],
        capture_output=True,
        text=True,
        check=True,
    )
    assert 1.0 < float(run.stdout) < 2.2
