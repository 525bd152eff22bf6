"""Spectral axes: every CTYPE, on every axis, in CD or PC form, in every unit, against independent formulas.

Formulas: Greisen et al. (2006, A&A 446, 747), table 2 and sections 3-6; the reference library is wcslib
through astropy.wcs, used here on headers that the reader computes without it.
"""

import itertools
import warnings

import numpy as np
import pytest
from astropy import wcs
from astropy.io import fits

from xcorr.errors import InputError
from xcorr.io.spectral_axis import spectral_axis
from xcorr.io.spectral_units import spectral_unit

C = 299792458.0  # m/s, exact
H = 6.62607015e-34  # J s, exact
EV = 1.602176634e-19  # J, exact
N = 40
TRUTH_UM = np.linspace(2.0, 2.4, N)  # only its ends are used

# CTYPE -> (unit -> factor to SI), function from wavelength in m to the coordinate in SI
REST_M = 2.2e-6
TYPES = {
    "WAVE": ({"m": 1.0, "cm": 1e-2, "mm": 1e-3, "um": 1e-6, "nm": 1e-9, "Angstrom": 1e-10}, lambda x: x),
    "AWAV": ({"m": 1.0, "um": 1e-6, "nm": 1e-9, "Angstrom": 1e-10}, lambda x: x),
    "FREQ": ({"Hz": 1.0, "kHz": 1e3, "MHz": 1e6, "GHz": 1e9, "THz": 1e12}, lambda x: C / x),
    "WAVN": ({"m-1": 1.0, "cm-1": 1e2, "1/cm": 1e2}, lambda x: 1 / x),
    "ENER": ({"J": 1.0, "eV": EV, "erg": 1e-7}, lambda x: H * C / x),
    "VOPT": ({"m/s": 1.0, "km/s": 1e3}, lambda x: C * (x / REST_M - 1)),
    "VRAD": ({"m/s": 1.0, "km/s": 1e3}, lambda x: C * (1 - REST_M / x)),
    "VELO": (
        {"m/s": 1.0, "km/s": 1e3},
        lambda x: C * ((x / REST_M) ** 2 - 1) / ((x / REST_M) ** 2 + 1),
    ),
    "ZOPT": ({"": 1.0}, lambda x: x / REST_M - 1),
    "BETA": ({"": 1.0}, lambda x: ((x / REST_M) ** 2 - 1) / ((x / REST_M) ** 2 + 1)),
}
CASES = [(ctype, unit) for ctype, (units, _) in TYPES.items() for unit in units]


def header_of(ctype, unit, crval, step, axis, form, crpix=7.0, naxis=3):
    """Header with the spectral axis on `axis`, celestial ones elsewhere."""
    cards = {"NAXIS": naxis, "RESTWAV": REST_M}
    sky = iter(("RA---TAN", "DEC--TAN"))
    for i in range(1, naxis + 1):
        name = ctype if i == axis else next(sky)
        cards |= {f"CTYPE{i}": name, f"CUNIT{i}": unit if i == axis else "deg"}
        cards |= {f"CRVAL{i}": crval if i == axis else 10.0 + i, f"CRPIX{i}": crpix if i == axis else 3.0}
        size = step if i == axis else 1e-5
        cards |= {f"CD{i}_{i}": size} if form == "CD" else {f"CDELT{i}": size / 2, f"PC{i}_{i}": 2.0}
    return cards


def shape_of(axis, n=N):
    return [n if i == axis else 5 for i in (1, 2, 3)]


@pytest.mark.parametrize("form", ["CD", "PC"])
@pytest.mark.parametrize("axis", [1, 2, 3])
@pytest.mark.parametrize(("ctype", "unit"), CASES)
def test_linear_axes(ctype, unit, axis, form):
    units, coordinate = TYPES[ctype]
    ends = coordinate(TRUTH_UM[[0, -1]] * 1e-6) / units[unit]
    step = (ends[1] - ends[0]) / (N - 1)
    cards = header_of(ctype, unit, ends[0] + 6 * step, step, axis, form)
    found = spectral_axis(cards, shape_of(axis))
    # independent: the coordinate recomputed from the wavelengths must be linear and hit both ends
    again = coordinate(found.wavelength_um * 1e-6) / units[unit]
    line = ends[0] + step * np.arange(N)
    # 1e-12 of the coordinate, or of a coordinate difference near zero velocity
    assert np.max(np.abs(again - line)) <= 1e-12 * np.max(np.abs(line)) + 1e-11 * np.ptp(line)
    assert found.fits_axis == axis
    assert found.medium == ("air" if ctype == "AWAV" else "vacuum")
    assert found.wavelength_um[[0, -1]] == pytest.approx(TRUTH_UM[[0, -1]], rel=1e-12)


@pytest.mark.parametrize("form", ["CD", "PC"])
@pytest.mark.parametrize("axis", [1, 2, 3])
@pytest.mark.parametrize("algorithm", ["", "-LOG"])
@pytest.mark.parametrize(("ctype", "unit"), [case for case in CASES if case[1] != "1/cm"])
def test_agrees_with_wcslib(ctype, unit, axis, form, algorithm):
    units, coordinate = TYPES[ctype]
    ends = coordinate(TRUTH_UM[[0, -1]] * 1e-6 * 1.2) / units[unit]  # away from zero velocity, for -LOG
    step = (ends[1] - ends[0]) / (N - 1)
    cards = header_of(ctype + algorithm, unit, ends[0], step, axis, form, crpix=1.0)
    header = fits.Header(list(cards.items()))
    for i, n in enumerate(shape_of(axis), start=1):
        header[f"NAXIS{i}"] = n
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        reference = wcs.WCS(header)
        pixels = np.ones((N, 3))
        pixels[:, axis - 1] = np.arange(1, N + 1)
        native = reference.wcs_pix2world(pixels, 1)[:, axis - 1]
    expected = INVERSE[ctype](native)
    found = spectral_axis(cards, shape_of(axis)).wavelength_um * 1e-6
    # rounding; wcslib's electronvolt is 1.6021765e-19 J, 8.4e-8 below the exact value used here
    assert np.max(np.abs(found / expected - 1)) < (1e-7 if unit == "eV" else 1e-11)


INVERSE = {
    "WAVE": lambda s: s,
    "AWAV": lambda s: s,
    "FREQ": lambda s: C / s,
    "WAVN": lambda s: 1 / s,
    "ENER": lambda s: H * C / s,
    "VOPT": lambda s: REST_M * (1 + s / C),
    "VRAD": lambda s: REST_M / (1 - s / C),
    "VELO": lambda s: REST_M * np.sqrt((1 + s / C) / (1 - s / C)),
    "ZOPT": lambda s: REST_M * (1 + s),
    "BETA": lambda s: REST_M * np.sqrt((1 + s) / (1 - s)),
}


@pytest.mark.parametrize(
    ("ctype", "unit", "regular"),
    [
        ("WAVE-F2W", "um", lambda x: C / x),
        ("FREQ-W2F", "THz", lambda x: x),
        ("VOPT-F2W", "km/s", lambda x: C / x),
        ("WAVE-V2W", "nm", lambda x: ((x / REST_M) ** 2 - 1) / ((x / REST_M) ** 2 + 1)),
        ("VRAD-W2F", "km/s", lambda x: x),
    ],
)
@pytest.mark.parametrize("axis", [1, 3])
def test_non_linear_algorithms_are_regular_in_their_own_variable(ctype, unit, regular, axis):
    """-X2P axes are by definition linear in X (paper III sect. 3.4), whatever wcslib computes."""
    units, coordinate = TYPES[ctype[:4]]
    reference = 2.2e-6 if ctype[:4] not in ("VOPT", "VRAD") else 2.3e-6
    crval = coordinate(reference) / units[unit]
    step = (coordinate(reference * 1.0005) - coordinate(reference)) / units[unit]
    cards = header_of(ctype, unit, crval, step, axis, "CD")
    found = spectral_axis(cards, shape_of(axis)).wavelength_um * 1e-6
    x = regular(found)
    bend = np.abs(np.diff(x, 2)).max() / np.abs(np.diff(x)).max()
    assert bend < 1e-7
    assert found[6] == pytest.approx(reference, rel=1e-10)  # CRPIX = 7
    # control: the axis is not linear in its own coordinate, so the test can fail
    own = coordinate(found)
    assert np.abs(np.diff(own, 2)).max() / np.abs(np.diff(own)).max() > 1e-5


@pytest.mark.parametrize("name", ["LINEAR", "LAMBDA", "WAVELENGTH", "lambda"])
@pytest.mark.parametrize("axis", [1, 2, 3])
@pytest.mark.parametrize(("unit", "factor"), [("um", 1e-6), ("nm", 1e-9), ("Angstrom", 1e-10), ("A", 1e-10)])
def test_non_standard_names_need_only_a_unit(name, axis, unit, factor):
    cards = header_of(name, unit, 2.0e-6 / factor, 1e-9 / factor, axis, "CD", crpix=1.0)
    found = spectral_axis(cards, shape_of(axis))
    assert found.wavelength_um == pytest.approx(2.0 + 1e-3 * np.arange(N), rel=1e-12)
    assert found.medium == ""  # neither air nor vacuum is said


@pytest.mark.parametrize(
    ("unit", "value"), [("GHz", C / 2e-6 / 1e9), ("cm-1", 5000.0), ("eV", H * C / 2e-6 / EV)]
)
def test_the_unit_of_a_non_standard_axis_says_what_it_is(unit, value):
    cards = header_of("LINEAR", unit, value, -value * 1e-4, 3, "CD", crpix=1.0)
    found = spectral_axis(cards, shape_of(3))
    assert found.wavelength_um[0] == pytest.approx(2.0, rel=1e-12)
    assert found.medium == "vacuum"


def test_table_axis_with_and_without_index():
    values = np.array([2.0, 2.01, 2.03, 2.06, 2.1])
    index = np.array([1.0, 2.0, 4.0, 8.0, 16.0])

    def table(extension, version, column):
        assert (extension, version) == ("LAMS", 1)
        return {"coords": values, "index": index}[column], "um"

    cards = header_of("WAVE-TAB", "um", 1.0, 1.0, 3, "CD", crpix=1.0)
    cards |= {"PS3_0": "LAMS", "PS3_1": "coords"}
    assert spectral_axis(cards, shape_of(3, 5), table=table).wavelength_um == pytest.approx(values, rel=1e-15)
    cards["PS3_2"] = "index"
    found = spectral_axis(cards, shape_of(3, 16), table=table).wavelength_um
    assert found == pytest.approx(np.interp(np.arange(1, 17), index, values), rel=1e-12)
    with pytest.raises(InputError, match="not finite"):
        spectral_axis(cards, shape_of(3, 30), table=table)  # past the end of the table


def test_table_axis_as_wcslib_reads_it():
    values = np.array([2.0, 2.01, 2.03, 2.06, 2.1]) * 1e-6
    cards = header_of("WAVE-TAB", "m", 1.0, 1.0, 3, "CD", crpix=1.0)
    cards |= {"PS3_0": "LAMS", "PS3_1": "coords"}
    column = fits.Column("coords", "5D", dim="(1,5)", array=values[None, :, None])
    hdu = fits.ImageHDU(np.zeros((5, 5, 5), np.float32))
    hdu.header.update(cards)
    hdus = fits.HDUList([fits.PrimaryHDU(), hdu, fits.BinTableHDU.from_columns([column], name="LAMS")])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        reference = wcs.WCS(hdu.header, hdus).wcs_pix2world([[1, 1, k] for k in range(1, 6)], 1)[:, 2]
    found = spectral_axis(cards, shape_of(3, 5), table=lambda *_: (values, "m")).wavelength_um
    assert found == pytest.approx(reference * 1e6, rel=1e-12)


def test_spectral_pixel_axis_other_than_its_world_axis():
    cards = header_of("WAVE", "um", 2.0, 1e-3, 3, "CD", crpix=1.0)
    del cards["CD3_3"], cards["CD1_1"]
    cards |= {"CD3_1": 1e-3, "CD1_3": 1e-5, "CRPIX1": 1.0}
    found = spectral_axis(cards, [N, 5, 5])
    assert found.fits_axis == 1
    assert found.wavelength_um == pytest.approx(2.0 + 1e-3 * np.arange(N))


def test_cdelt_serves_where_cd_leaves_the_spectral_row_empty():
    cards = header_of("WAVE", "um", 2.0, 1e-3, 3, "CD", crpix=1.0)
    del cards["CD3_3"]
    cards["CDELT3"] = 2e-3
    assert spectral_axis(cards, shape_of(3)).wavelength_um == pytest.approx(2.0 + 2e-3 * np.arange(N))


def test_alternate_wcs_and_log10_grids():
    cards = {"CTYPE3": "PIXEL", "CTYPE3A": "WAVE", "CUNIT3A": "nm", "CRVAL3A": 2000.0, "CRPIX3A": 1.0}
    cards["CDELT3A"] = 1.0
    assert spectral_axis(cards, shape_of(3)).wavelength_um == pytest.approx(2.0 + 1e-3 * np.arange(N))
    cards = {"CTYPE1": "LINEAR", "CUNIT1": "Angstrom", "CRVAL1": 4.3, "CRPIX1": 1.0, "CDELT1": 1e-4}
    cards["DC-FLAG"] = 1
    assert spectral_axis(cards, [N]).wavelength_um == pytest.approx(10 ** (4.3 + 1e-4 * np.arange(N) - 4))


BAD = {
    "no axis": (lambda c: c.update(CTYPE3="PIXEL"), "no spectral axis"),
    "unknown unit": (lambda c: c.update(CUNIT3="furlong"), "unknown spectral unit"),
    "unit of another kind": (lambda c: c.update(CUNIT3="Hz"), "unit does not fit"),
    "no unit, no SI": (lambda c: c.pop("CUNIT3"), "outside 0.01-1000 um"),
    "two axes": (lambda c: c.update(CTYPE2="FREQ"), "more than one spectral axis"),
    "zero step": (lambda c: c.update(CD3_3=0.0, CDELT3=0.0), "step of zero"),
    "text for a number": (lambda c: c.update(CRVAL3="two"), "must be a number"),
    "tilted": (lambda c: c.update(CD3_1=1e-4), "depends on the position"),
    "through zero": (lambda c: c.update(CRVAL3=-0.01), "outside 0.01-1000 um"),
    "velocity without rest": (
        lambda c: (c.pop("RESTWAV"), c.update(CTYPE3="VOPT", CUNIT3="km/s")),
        "needs RESTWAV or RESTFRQ",
    ),
    "wcslib refuses": (
        lambda c: (c.pop("RESTWAV"), c.update(CTYPE3="VOPT-F2W", CUNIT3="km/s")),
        "cannot be computed|not finite|needs RESTWAV",
    ),
    "table without pointers": (lambda c: c.update(CTYPE3="WAVE-TAB"), "needs PSi_0"),
}


@pytest.mark.parametrize("case", BAD)
def test_unusable_axes_are_input_errors(case):
    cards = header_of("WAVE", "um", 2.0, 1e-3, 3, "CD", crpix=1.0)
    spoil, message = BAD[case]
    spoil(cards)
    with pytest.raises(InputError, match=message):
        spectral_axis(cards, shape_of(3))


def test_overrides_of_axis_and_unit():
    cards = {"CRVAL2": 20000.0, "CDELT2": 10.0, "CRPIX2": 1.0}
    found = spectral_axis(cards, [5, N, 5], axis=2, unit="Angstrom")
    assert found.wavelength_um == pytest.approx(2.0 + 1e-3 * np.arange(N))
    with pytest.raises(InputError, match="has no unit"):
        spectral_axis(cards, [5, N, 5], axis=2)
    with pytest.raises(InputError, match="no axis of the image"):
        spectral_axis(cards, [5, N, 5], axis=4, unit="um")


def test_standard_axis_without_unit_is_si():
    cards = header_of("WAVE", "m", 2e-6, 1e-9, 3, "CD", crpix=1.0)
    del cards["CUNIT3"]
    assert spectral_axis(cards, shape_of(3)).wavelength_um[0] == pytest.approx(2.0)


def test_units():
    for text, kind in itertools.chain(
        [(t, "length") for t in ("um", "micron", "Microns", "nm", "Angstroms", "A", "m", "0.1nm")],
        [("GHz", "frequency"), ("cm-1", "wavenumber"), ("keV", "energy"), ("km/s", "speed"), ("", "none")],
    ):
        assert spectral_unit(text).kind == kind
    for text in ("furlong", "deg", "kg", "um um um", "()(", "10**", "\x00"):
        with pytest.raises(InputError):
            spectral_unit(text)
