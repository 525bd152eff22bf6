"""Damaged and senseless files: one plain error of the package, never another exception."""

import io
import pickle

import h5py
import numpy as np
import pytest
from astropy.io import fits
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from xcorr.errors import InputError, XcorrError
from xcorr.io import read_cube, read_exposure, read_spectrum, read_template

READERS = (read_cube, read_spectrum, read_exposure, read_template)
SHAPE = (20, 4, 5)


def fits_bytes(data=None, cards=None, *, errors=None):
    rng = np.random.default_rng(0)
    data = rng.normal(10, 1, SHAPE).astype(np.float32) if data is None else data
    hdu = fits.ImageHDU(data, name="SCI")
    hdu.header.update(
        {"CTYPE3": "WAVE", "CUNIT3": "um", "CRVAL3": 2.0, "CRPIX3": 1.0, "CDELT3": 1e-3}
        if cards is None
        else cards
    )
    hdus = [fits.PrimaryHDU(), hdu]
    if errors is not None:
        hdus.append(fits.ImageHDU(errors, name="ERR"))
    stream = io.BytesIO()
    fits.HDUList(hdus).writeto(stream)
    return stream.getvalue()


GOOD = fits_bytes(errors=np.ones(SHAPE, np.float32))


def refuses(reader, path, match=None, **overrides):
    with pytest.raises(InputError, match=match) as caught:
        reader(path, **overrides)
    what, got, do = caught.value.what, caught.value.got, caught.value.do
    assert what
    assert got
    assert do
    assert "\n" not in str(caught.value)
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


@pytest.mark.parametrize("reader", READERS)
def test_missing_empty_and_folder(tmp_path, reader):
    refuses(reader, tmp_path / "none.fits", "missing")
    (tmp_path / "empty.fits").write_bytes(b"")
    refuses(reader, tmp_path / "empty.fits", "empty")
    refuses(reader, tmp_path, "not a file")


@pytest.mark.parametrize("reader", READERS)
@pytest.mark.parametrize("seed", range(3))
def test_random_bytes(tmp_path, reader, seed):
    path = tmp_path / "a.fits"
    path.write_bytes(np.random.default_rng(seed).bytes(20000))
    refuses(reader, path)


@pytest.mark.parametrize("reader", READERS)
@pytest.mark.parametrize("keep", [0.1, 0.3, 0.5, 0.7, 0.9])
def test_truncated_fits(tmp_path, reader, keep):
    path = tmp_path / "a.fits"
    path.write_bytes(GOOD[: int(len(GOOD) * keep)])
    refuses(reader, path, "truncated")


def test_missing_padding_alone_is_harmless(tmp_path):
    data = fits_bytes()
    size = len(data) - (-int(np.prod(SHAPE)) * 4) % 2880
    (tmp_path / "a.fits").write_bytes(data[:size])
    assert read_cube(tmp_path / "a.fits").shape == SHAPE


@pytest.mark.parametrize(
    ("make", "match"),
    [
        (lambda: fits_bytes(np.ones((40, 50), np.float32), {}), "two-dimensional"),
        (lambda: fits_bytes(cards={}), "no spectral axis"),
        (lambda: fits_bytes(cards={"CTYPE3": "WAVE", "CUNIT3": "furlong"}), "unknown spectral unit"),
        (lambda: fits_bytes(cards={"CTYPE3": "LAMBDA", "CRVAL3": 2.0}), "no unit"),
        (lambda: fits_bytes(np.full(SHAPE, np.nan, np.float32)), "NaN"),
        (lambda: fits_bytes(np.zeros(SHAPE, np.float32)), "zero"),
        (lambda: fits_bytes(errors=np.zeros(SHAPE, np.float32)), "no positive sigma"),
        (lambda: fits_bytes(errors=np.full(SHAPE, np.nan, np.float32)), "no positive sigma"),
        (lambda: fits_bytes(cards={"CTYPE3": "WAVE", "CUNIT3": "um", "CDELT3": 0.0}), "step of zero"),
        (
            lambda: fits_bytes(np.ones((2, 3, 4, 5), np.float32), {"CTYPE4": "WAVE", "CUNIT4": "um"}),
            "more than three",
        ),
    ],
)
def test_senseless_cubes(tmp_path, make, match):
    path = tmp_path / "a.fits"
    path.write_bytes(make())
    refuses(read_cube, path, match)


def test_an_error_plane_of_another_shape_is_not_used_and_said(tmp_path):
    (tmp_path / "a.fits").write_bytes(fits_bytes(errors=np.ones((3, 4, 5), np.float32)))
    cube = read_cube(tmp_path / "a.fits")
    assert cube.variance is None
    assert {"error-plane-unused", "no-error-plane"} <= {note.code for note in cube.notes}


def test_other_hdus_and_formats(tmp_path):
    fits.HDUList([fits.PrimaryHDU()]).writeto(tmp_path / "a.fits")
    for reader in READERS:
        refuses(reader, tmp_path / "a.fits")
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["something"] = np.ones(4)
    for reader in READERS:
        refuses(reader, tmp_path / "a.h5")
    (tmp_path / "a.txt").write_text("# a letter\nDear reader,\nthis is no spectrum at all.\n")
    for reader in READERS:
        refuses(reader, tmp_path / "a.txt")
    (tmp_path / "a.ecsv").write_text("# %ECSV 1.0\n# ---\n# datatype:\n# - {name: [}\n")
    for reader in READERS:
        refuses(reader, tmp_path / "a.ecsv")


@pytest.mark.parametrize("value", [0, -10, float("nan"), float("inf")])
def test_senseless_resolving_power(tmp_path, value):
    path = tmp_path / "a.fits"
    path.write_bytes(GOOD)
    refuses(read_cube, path, "resolving power", resolving_power=value)
    refuses(read_template, path, "resolving power", resolving_power=value)


def test_hdf5_without_the_needed_things(tmp_path):
    path = tmp_path / "a.h5"

    def write(**items):
        with h5py.File(path, "w") as file:
            for key, value in items.items():
                file[key] = value

    data, wave = np.random.default_rng(0).normal(size=SHAPE), np.linspace(2, 2.1, 20)
    write(data=data)
    refuses(read_cube, path, "no dataset wavelength")
    write(data=data, wavelength=wave)
    refuses(read_cube, path, "unit of the wavelengths", medium="vacuum")
    refuses(read_cube, path, "medium", wavelength_unit="um")
    assert read_cube(path, wavelength_unit="um", medium="vacuum").shape == SHAPE
    write(data=data, wavelength=wave[:5])
    refuses(read_cube, path, "one wavelength per channel", wavelength_unit="um", medium="vacuum")
    write(data=data, wavelength=wave[::-1])
    refuses(read_cube, path, "ascend", wavelength_unit="um", medium="vacuum")
    write(data=data, wavelength=wave, variance=np.zeros(SHAPE))
    refuses(read_cube, path, "no positive variance", wavelength_unit="um", medium="vacuum")
    write(data=data[0], wavelength=wave[:4])
    refuses(read_cube, path, "must be", wavelength_unit="um", medium="vacuum")
    whole = path.read_bytes()
    for size in (len(whole) // 4, len(whole) // 2, len(whole) - 100):
        path.write_bytes(whole[:size])
        refuses(read_cube, path)


def survives(path, data):
    """Any outcome is fine except an exception from outside the package."""
    path.write_bytes(data)
    for reader in READERS:
        try:
            reader(path)
        except XcorrError as error:
            lines = str(error).splitlines()
        else:
            lines = [""]
        assert len(lines) == 1


FUZZ = settings(
    max_examples=40,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)


@FUZZ
@given(data=st.binary(min_size=1, max_size=6000))
def test_fuzz_any_bytes(tmp_path, data):
    survives(tmp_path / "any", data)


@FUZZ
@given(
    data=st.binary(max_size=3000),
    start=st.sampled_from([b"SIMPLE  =", b"\x1f\x8b\x08", b"# %ECSV 1.0\n", b"# "]),
)
def test_fuzz_bytes_behind_a_signature(tmp_path, data, start):
    survives(tmp_path / "any", start + data)


@FUZZ
@given(hits=st.lists(st.tuples(st.integers(0, 3 * 2880 - 1), st.integers(32, 126)), min_size=1, max_size=12))
def test_fuzz_header_characters(tmp_path, hits):
    data = bytearray(GOOD)
    for position, value in hits:
        data[2880 + position] = value
    survives(tmp_path / "any.fits", bytes(data))


WORDS = [
    "'WAVE-TAB'",
    "'FREQ'",
    "'VOPT-F2W'",
    "'um'",
    "1E400",
    "-1",
    "0",
    "T",
    "'x'",
    "99999999999",
    "NaN",
    "2.5",
    "'",
]


@FUZZ
@given(
    changes=st.lists(
        st.tuples(
            st.sampled_from(
                ["BITPIX", "NAXIS", "NAXIS1", "NAXIS3", "CTYPE3", "CUNIT3", "CRVAL3", "CDELT3", "PCOUNT"]
            ),
            st.sampled_from(WORDS),
        ),
        min_size=1,
        max_size=3,
    )
)
def test_fuzz_header_values(tmp_path, changes):
    data = bytearray(GOOD)
    for key, word in changes:
        at = data.find(key.ljust(8).encode() + b"=", 2880)
        data[at + 10 : at + 80] = word.ljust(70).encode()
    survives(tmp_path / "any.fits", bytes(data))


@FUZZ
@given(hits=st.lists(st.tuples(st.integers(0, 10**6), st.integers(0, 255)), min_size=1, max_size=8))
def test_fuzz_tables(tmp_path, hits):
    column = [fits.Column("wave", "D", unit="um", array=np.linspace(2, 2.1, 30))]
    column.append(fits.Column("flux", "E", array=np.arange(30.0)))
    stream = io.BytesIO()
    hdu = fits.BinTableHDU.from_columns(column)
    hdu.header["WAVETYPE"] = "vacuum"
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(stream)
    data = bytearray(stream.getvalue())
    for position, value in hits:
        data[2880 + position % (len(data) - 2880)] = value
    survives(tmp_path / "any.fits", bytes(data))


@FUZZ
@given(text=st.text(alphabet="0123456789.eE+-, \n#=nan\twavelengthflux", max_size=400))
def test_fuzz_text(tmp_path, text):
    survives(tmp_path / "any.txt", text.encode() or b" ")
