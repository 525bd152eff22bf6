"""1-D spectra and templates in every form: the same spectrum must come back from each."""

import h5py
import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.table import Table

from xcorr.cube import Cube
from xcorr.errors import InputError
from xcorr.io import read_cube, read_exposure, read_spectrum, read_template, write_cube
from xcorr.spectral import air_to_vacuum

N = 64
WAVE = 2.0 + 1e-3 * np.arange(N)
RNG = np.random.default_rng(7)
FLUX = 10 + RNG.normal(size=N)
ERROR = RNG.uniform(0.5, 1.5, N)
FLAG = (np.arange(N) == 20).astype(float)


def ecsv(path):
    table = Table({"wavelength": WAVE * 1e3 * u.nm, "flux": FLUX, "error": ERROR, "flag": FLAG.astype(int)})
    table.meta = {"medium": "vacuum", "frame": "barycentric", "resolving_power": 4000.0}
    table.write(path, format="ascii.ecsv")


def fits_table(path):
    table = Table({"WAVE": WAVE * 1e4 * u.AA, "FLUX": FLUX, "ERR": ERROR, "QUAL": FLAG.astype(np.int16)})
    table.meta = {"AIRORVAC": "vac"}
    table.write(path, format="fits")


def fits_table_of_one_row(path):
    columns = [
        fits.Column("WAVE", f"{N}D", unit="um", array=WAVE[None]),
        fits.Column("FLUX_REDUCED", f"{N}D", array=FLUX[None]),
        fits.Column("ERR_REDUCED", f"{N}D", array=ERROR[None]),
        fits.Column("QUAL", f"{N}J", array=FLAG[None].astype(np.int32)),
    ]
    hdu = fits.BinTableHDU.from_columns(columns)
    hdu.header["TUCD1"] = "em.wl"
    hdu.header["WAVETYPE"] = "VACUUM"
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path)


def image_rows(path):
    hdu = fits.PrimaryHDU(np.array([WAVE, FLUX, ERROR, FLAG]))
    hdu.header["XUNITS"], hdu.header["WAVETYPE"] = "um", "Vacuum"
    hdu.writeto(path)


def image_wcs(path):
    cards = {"CTYPE1": "WAVE", "CUNIT1": "um", "CRVAL1": 2.0, "CRPIX1": 1.0, "CDELT1": 1e-3}
    hdus = [
        fits.PrimaryHDU(FLUX),
        fits.ImageHDU(ERROR, name="ERR"),
        fits.ImageHDU(FLAG.astype(int), name="DQ"),
    ]
    hdus[0].header.update(cards)
    fits.HDUList(hdus).writeto(path)


def hdf5(path):
    with h5py.File(path, "w") as file:
        file["wavelength"], file["flux"], file["error"] = WAVE * 1e-6, FLUX, ERROR
        file["mask"] = FLAG.astype(bool)
        file["wavelength"].attrs["unit"], file["wavelength"].attrs["medium"] = "m", "vacuum"


def text(path):
    lines = ["# medium = vacuum", "# wavelength_unit: nm", "# wavelength flux error flag"]
    rows = zip(WAVE * 1e3, FLUX, ERROR, FLAG, strict=True)
    path.write_text("\n".join([*lines, *(" ".join(f"{x:.17g}" for x in row) for row in rows)]))


def csv(path):
    lines = ["# medium: vacuum", "wavelength_um,flux,error,flag"]
    rows = zip(WAVE, FLUX, ERROR, FLAG, strict=True)
    path.write_text("\r\n".join([*lines, *(",".join(f"{x:.17g}" for x in row) for row in rows)]))


FORMS = [ecsv, fits_table, fits_table_of_one_row, image_rows, image_wcs, hdf5, text, csv]


@pytest.mark.parametrize("form", FORMS)
def test_every_form_is_the_same_spectrum(tmp_path, form):
    path = tmp_path / "a.file"
    form(path)
    cube = read_spectrum(path)
    assert cube.shape == (N, 1, 1)
    assert cube.wavelength_um == pytest.approx(WAVE, rel=1e-13)
    good = FLAG == 0
    assert np.array_equal(cube.mask[:, 0, 0], ~good)
    assert cube.data[good, 0, 0] == pytest.approx(FLUX[good], rel=1e-6)
    assert cube.variance[good, 0, 0] == pytest.approx(ERROR[good] ** 2, rel=1e-6)
    again = read_exposure(path)
    assert np.array_equal(again.data, cube.data)
    if form is ecsv:
        assert cube.frame == "barycentric"


@pytest.mark.parametrize("form", FORMS)
def test_every_form_is_the_same_template(tmp_path, form):
    path = tmp_path / "model.dat"
    form(path)
    template = read_template(path, name="X", resolving_power=3000.0)
    assert (template.name, template.resolving_power, template.kind) == ("X", 3000.0, "spectrum")
    assert template.wavelength_um == pytest.approx(WAVE, rel=1e-13)
    assert np.array_equal(template.covered, FLAG == 0)
    # float32 where the file is read as an exposure
    assert template.flux[FLAG == 0] == pytest.approx(FLUX[FLAG == 0], rel=1e-6)
    assert read_template(path).name == "model"


@pytest.mark.parametrize("form", [text, csv])
def test_medium_and_unit_are_asked_for_never_guessed(tmp_path, form):
    path = tmp_path / "a.txt"
    form(path)
    path.write_text("\n".join(line for line in path.read_text().splitlines() if "medium" not in line))
    with pytest.raises(InputError, match="set medium"):
        read_spectrum(path)
    with pytest.raises(InputError, match="set medium"):
        read_template(path)
    assert read_spectrum(path, medium="air").wavelength_um == pytest.approx(air_to_vacuum(WAVE))
    assert read_template(path, medium="air").wavelength_um == pytest.approx(air_to_vacuum(WAVE))
    bare = tmp_path / "b.txt"
    bare.write_text("\n".join(f"{w} {f}" for w, f in zip(WAVE, FLUX, strict=True)))
    with pytest.raises(InputError, match="set wavelength_unit"):
        read_spectrum(bare, medium="vacuum")
    assert read_spectrum(bare, medium="vacuum", wavelength_unit="um").wavelength_um == pytest.approx(WAVE)


def test_orders_stay_apart_and_can_be_chosen(tmp_path):
    orders = np.full((3, 4, N), np.nan)
    orders[:, 3] = 0
    for i, start in enumerate((2.0, 1.6, 1.62)):
        orders[i, :3] = WAVE - 2.0 + start, FLUX + i, ERROR
    orders[0, :3, -5:] = np.nan  # padded end
    orders[1, 1:3, :2] = np.nan  # flux missing at the start
    orders[2, 3, 40] = 1
    hdu = fits.PrimaryHDU(orders)
    hdu.header["XUNITS"], hdu.header["WAVETYPE"] = "um", "Vacuum"
    hdu.writeto(tmp_path / "a.fits")
    cube = read_spectrum(tmp_path / "a.fits")
    assert [int((cube.order == i).sum()) for i in range(3)] == [N - 5, N - 2, N]
    assert np.flatnonzero(cube.mask[:, 0, 0]).tolist() == [2 * N - 7 + 40]
    assert cube.wavelength_um[cube.order == 1][0] == pytest.approx(1.602)
    one = read_spectrum(tmp_path / "a.fits", orders=[2], wavelength_range_um=[1.6295, 1.6405])
    assert one.wavelength_um == pytest.approx(1.63 + 1e-3 * np.arange(11))
    assert set(one.order) == {2}
    with pytest.raises(InputError, match="no such order"):
        read_spectrum(tmp_path / "a.fits", orders=[3])
    template = read_template(tmp_path / "a.fits")
    # orders at 1.6 and 1.62 overlap and are cut at the middle; the gap up to 2.0 is not covered
    assert np.all(np.diff(template.wavelength_um) > 0)
    assert {note.code for note in template.notes} == {"template-gaps"}
    edges = np.flatnonzero(np.diff(template.wavelength_um) > 0.1)
    assert not template.covered[edges].any()
    assert not template.covered[edges + 1].any()
    assert np.count_nonzero(~template.covered) == 3


def test_order_column(tmp_path):
    lines = ["# medium = vacuum", "order wavelength_um flux"]
    lines += [f"{o} {w - o / 10} {f}" for o in (5, 6) for w, f in zip(WAVE, FLUX, strict=True)]
    (tmp_path / "a.txt").write_text("\n".join(lines))
    cube = read_spectrum(tmp_path / "a.txt")
    assert cube.order.tolist() == [0] * N + [1] * N


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (lambda w: w[::-1], "ascend strictly"),
        (lambda w: np.where(np.arange(N) == 5, w[4], w), "ascend strictly"),
        (lambda w: w[np.argsort(np.sin(np.arange(N)))], "ascend strictly"),
        (lambda w: np.where(np.arange(N) == 5, np.nan, w), "missing inside"),
        (lambda w: w * 1e7, "outside 0.01-1000 um"),
    ],
)
def test_disordered_wavelengths_are_an_error(tmp_path, spoil, message):
    Table({"wavelength": spoil(WAVE) * u.um, "flux": FLUX}).write(tmp_path / "a.ecsv")
    for read in (read_spectrum, read_template):
        with pytest.raises(InputError, match=message):
            read(tmp_path / "a.ecsv", medium="vacuum")


def test_wavenumbers_may_ascend(tmp_path):
    Table({"wavenumber": (1e4 / WAVE)[::-1] / u.cm, "flux": FLUX[::-1]}).write(tmp_path / "a.ecsv")
    cube = read_spectrum(tmp_path / "a.ecsv")
    assert cube.wavelength_um == pytest.approx(WAVE, rel=1e-12)
    assert cube.data[:, 0, 0] == pytest.approx(FLUX, rel=1e-6)


def test_log_wavelengths_and_inverse_variance(tmp_path):
    columns = {"loglam": np.log10(WAVE * 1e4), "flux": FLUX, "ivar": ERROR**-2}
    table = Table(columns)
    table["ivar"][3] = 0
    table.meta = {"VACUUM": True}
    table.write(tmp_path / "a.fits")
    cube = read_spectrum(tmp_path / "a.fits")
    assert cube.wavelength_um == pytest.approx(WAVE, rel=1e-12)
    assert np.flatnonzero(cube.mask[:, 0, 0]).tolist() == [3]
    assert cube.variance[5, 0, 0] == pytest.approx(ERROR[5] ** 2, rel=1e-6)


def test_contribution_template_keeps_its_reference(tmp_path):
    table = Table({"wavelength": WAVE * u.um, "flux": FLUX - 10, "reference_flux": FLUX})
    table.meta = {"medium": "vacuum", "kind": "contribution", "name": "CO", "resolving_power": 1e5}
    table.write(tmp_path / "a.ecsv")
    template = read_template(tmp_path / "a.ecsv")
    assert (template.name, template.kind, template.resolving_power) == ("CO", "contribution", 1e5)
    assert np.array_equal(template.reference_flux, FLUX)
    assert np.array_equal(template.flux, FLUX - 10)


def test_flux_per_frequency_becomes_flux_per_wavelength(tmp_path):
    Table({"wavelength": WAVE * u.um, "flux": FLUX * u.Jy}).write(tmp_path / "a.ecsv")
    template = read_template(tmp_path / "a.ecsv", medium="vacuum")
    expected = (FLUX * u.Jy).to_value("W m-2 um-1", u.spectral_density(WAVE * u.um))
    assert template.flux / template.flux[0] == pytest.approx(expected / expected[0], rel=1e-12)


def test_masked_table_cells_are_masked_samples(tmp_path):
    table = Table({"wavelength": WAVE * u.um, "flux": FLUX}, masked=True)
    table["flux"].mask[30] = True
    table.write(tmp_path / "a.ecsv")
    cube = read_spectrum(tmp_path / "a.ecsv", medium="vacuum")
    assert np.flatnonzero(cube.mask[:, 0, 0]).tolist() == [30]


def test_cube_and_spectrum_readers_refuse_each_other(tmp_path):
    text(tmp_path / "a.txt")
    image_wcs(tmp_path / "a.fits")
    shape = (N, 2, 3)
    data = RNG.normal(size=shape).astype(np.float32)
    cube = Cube(data=data, variance=None, mask=np.zeros(shape, bool), wavelength_um=WAVE)
    write_cube(tmp_path / "c.h5", cube, layout="hdf5")
    with pytest.raises(InputError, match="read_spectrum"):
        read_cube(tmp_path / "a.txt")
    with pytest.raises(InputError, match="read_spectrum"):
        read_cube(tmp_path / "a.fits")
    with pytest.raises(InputError, match="read_cube"):
        read_spectrum(tmp_path / "c.h5")


def test_spectrum_written_as_hdf5_reads_back(tmp_path):
    text(tmp_path / "a.txt")
    cube = read_spectrum(tmp_path / "a.txt")
    write_cube(tmp_path / "a.h5", cube, layout="hdf5")
    again = read_spectrum(tmp_path / "a.h5")
    assert np.array_equal(again.data, cube.data)
    assert np.array_equal(again.mask, cube.mask)
    assert np.array_equal(again.variance, cube.variance)
