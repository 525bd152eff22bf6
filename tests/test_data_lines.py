"""The shipped line lists against HITRAN and against published lines and band heads."""

import importlib.util
import sys
from collections import defaultdict
from pathlib import Path

import h5py
import numpy as np
import pytest
from threadpoolctl import threadpool_limits

from xcorr.errors import InputError
from xcorr.lines.data import load_lines
from xcorr.provenance import data_path

LIGHT_KM_S = 299792.458
C2 = 1.438776877
PIECES = ("h2o_2000-2100.par", "h2o_3400-4100.par")


def read_par(path: Path) -> dict[str, np.ndarray]:
    """Columns of a HITRAN 160-character file, parsed here anew (not by the code that built the lists)."""
    rows = path.read_text(encoding="latin-1").splitlines()
    spans = {"iso": (2, 3), "nu": (3, 15), "s": (15, 25), "e": (45, 55), "v_up": (67, 82), "v_low": (82, 97)}
    numeric = ("iso", "nu", "s", "e")
    columns = {name: [row[a:b] for row in rows] for name, (a, b) in spans.items()}
    out = {name: np.array(columns[name], dtype=float) for name in numeric}
    out |= {name: np.array(columns[name]) for name in ("v_up", "v_low")}
    out["label"] = np.array([row[112:127].strip() for row in rows])
    if path.name.startswith("h2o"):
        spans = ((115, 118), (118, 121), (95, 97))
        out["ka_kc_v3"] = np.array([sum(int(row[a:b]) for a, b in spans) for row in rows])
    return out


def spread(values: np.ndarray) -> float:
    """Robust scatter, as a standard deviation of normal data."""
    return 1.4826 * float(np.median(np.abs(values - np.median(values))))


def match_h2o(piece: dict[str, np.ndarray], faintest: float) -> tuple[np.ndarray, np.ndarray]:
    """Rows (piece, list) of lines of H2(16)O nearest in position (0.01 cm-1) with the same lower energy.

    The list's lower energies are calculated ones (Barber et al. 2006), within 0.2 cm-1 of measured ones.
    """
    lines = load_lines("H2O")
    pairs = []
    wanted = (piece["s"] > faintest) & (piece["iso"] == 1) & (piece["nu"] > lines.wavenumber_per_cm[0])
    for i in np.flatnonzero(wanted):
        first, last = np.searchsorted(lines.wavenumber_per_cm, piece["nu"][i] + np.array([-0.01, 0.01]))
        same = np.abs(lines.lower_energy_per_cm[first:last] - piece["e"][i]) < 0.2
        if same.any():
            distance = np.where(same, np.abs(lines.wavenumber_per_cm[first:last] - piece["nu"][i]), np.inf)
            pairs.append((i, first + int(np.argmin(distance))))
    assert len(pairs) >= 0.98 * np.count_nonzero(wanted)
    return tuple(np.array(pairs).T)


@pytest.mark.parametrize("name", PIECES)
def test_h2o_positions_and_strengths_against_hitran(reference_data, name):
    """HITRAN 2016/2020 pieces, lines above 1e-25. The table's 0.001 Angstrom is 0.006-0.01 km/s here."""
    piece = read_par(reference_data / "hitran" / name)
    theirs, ours = match_h2o(piece, 1e-25)
    lines = load_lines("H2O")
    shift = (lines.wavenumber_per_cm[ours] / piece["nu"][theirs] - 1) * LIGHT_KM_S
    assert abs(np.median(shift)) < 0.001  # the air formula is the right one: Ciddor would leave 0.0016
    assert np.mean(np.abs(shift) < 0.02) > 0.99
    ratio = np.log10(lines.strength_296[ours] / piece["s"][theirs])
    assert abs(np.median(ratio)) < 0.002
    assert spread(ratio) < 0.005  # log gf has three decimals; lines of the wrong kind are off by 0.48


@pytest.mark.parametrize("name", PIECES)
def test_h2o_ortho_and_para(reference_data, name):
    """Ortho levels have Ka + Kc + v3 odd: the list's flag, found from levels alone, against labels.

    Most of what is not right here are doublets, an ortho and a para line within 0.01 cm-1 in position and
    energy, of which each has the other's place.
    """
    piece = read_par(reference_data / "hitran" / name)
    theirs, ours = match_h2o(piece, 1e-25)
    odd = piece["ka_kc_v3"][theirs] % 2
    right = odd == load_lines("H2O").ortho[ours]
    assert np.mean(right) >= 0.97
    assert 0.4 < odd.mean() < 0.8  # both kinds are there


def test_h2o_strength_is_hardly_touched_by_wrong_kinds(reference_data):
    """3400-4100 cm-1: lines of the wrong kind carry less than 0.4 % of the strength."""
    piece = read_par(reference_data / "hitran" / PIECES[1])
    theirs, ours = match_h2o(piece, 1e-25)
    wrong = piece["ka_kc_v3"][theirs] % 2 != load_lines("H2O").ortho[ours]
    assert piece["s"][theirs][wrong].sum() < 0.004 * piece["s"][theirs].sum()


def test_h2o_without_the_ortho_factor_would_fail(reference_data):
    """Control: the table as published, whose ortho lines are a factor 3 too weak."""
    piece = read_par(reference_data / "hitran" / PIECES[1])
    theirs, ours = match_h2o(piece, 1e-25)
    lines = load_lines("H2O")
    ratio = lines.strength_296[ours] / piece["s"][theirs]
    flawed = ratio / np.where(lines.ortho[ours] == 1, 3, 1)
    assert np.mean(np.abs(np.log10(ratio)) < 0.05) > 0.95
    assert np.mean(np.abs(np.log10(flawed)) < 0.05) < 0.6


def read_co() -> dict[str, np.ndarray]:
    """The CO file with its quantum numbers."""
    with h5py.File(data_path("templates", "lines_co.h5")) as file:
        return {name: file[name][()] for name in file}


@pytest.fixture(scope="module")
def co_pairs(reference_data):
    """Matched (shipped, HITRAN 2012) CO lines by quantum numbers, isotopologues 1 to 4."""
    ours = read_co()
    keys = zip(ours["isotopologue"], ours["v_up"], ours["v_low"], ours["m"], strict=True)
    index = {tuple(int(part) for part in key): row for row, key in enumerate(keys)}
    piece = read_par(reference_data / "hitran" / "05_hit12.par")
    pairs, bands = [], []
    for i, label in enumerate(piece["label"]):
        v_up, v_low, j = int(piece["v_up"][i]), int(piece["v_low"][i]), int(label[1:].rstrip(" eq"))
        if piece["iso"][i] > 4 or v_up == v_low or v_up - v_low > 3:
            continue
        key = (int(piece["iso"][i]), v_up, v_low, j + 1 if label[0] == "R" else -j)
        if key in index:
            pairs.append((index[key], i))
            bands.append(key[:3])
    rows, theirs = np.array(pairs).T
    assert len(pairs) > 2500
    return (
        {name: values[rows] for name, values in ours.items()},
        {k: v[theirs] for k, v in piece.items()},
        bands,
    )


def test_co_positions_against_hitran(co_pairs):
    ours, theirs, _ = co_pairs
    shift = (ours["wavenumber_per_cm"] / theirs["nu"] - 1) * LIGHT_KM_S
    assert np.abs(shift).max() < 0.02
    assert abs(np.median(shift)) < 0.001  # the air formula is the right one: Ciddor would leave -0.002
    assert np.abs(ours["lower_energy_per_cm"] - theirs["e"]).max() < 0.1


def test_co_band_strengths_against_hitran(co_pairs):
    """Rothman et al. 2013, every band of the four isotopologues with a change of v of 1 to 3."""
    ours, theirs, bands = co_pairs
    sums = defaultdict(lambda: np.zeros(2))
    for band, mine, other in zip(bands, ours["strength_296"], theirs["s"], strict=True):
        sums[band] += mine, other
    assert len(sums) == 24
    for band, (mine, other) in sums.items():
        assert mine / other == pytest.approx(1, abs=0.03), band


def test_co_rotational_dependence_against_hitran(co_pairs):
    """Line by line: the dipole function's dependence on J is not scaled to anything."""
    ours, theirs, _ = co_pairs
    ratio = ours["strength_296"] / theirs["s"]
    strong = theirs["s"] > 1e-25
    assert np.all(np.abs(ratio[strong] - 1) < 0.05)
    assert np.percentile(np.abs(ratio[strong] - 1), 90) < 0.01


@pytest.fixture(scope="module")
def theory():
    """The script behind the CO strengths; one BLAS thread, because its matrices are small."""
    path = data_path("templates", "co_theory.py")
    spec = importlib.util.spec_from_file_location("co_theory_under_test", path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    with threadpool_limits(1):
        yield module


def test_co_dipole_function_predicts_what_it_was_not_given(theory):
    """2-1 and the isotopologues' 1-0 bands follow from the 12C16O bands 1-0 to 4-0 (HITRAN 2012 sums)."""
    dipole = np.array(theory.dipole_function())
    assert theory.equilibrium() == pytest.approx(1.128323, abs=2e-6)  # Huber & Herzberg 1979, Angstrom
    for isotopologue, band, published in (
        (1, (2, 1), 5.9213e-22),
        (2, (1, 0), 1.0705e-19),
        (3, (1, 0), 1.9039e-20),
    ):
        total = sum(branch.sum() for branch in theory.strengths(dipole, isotopologue, *band))
        assert total == pytest.approx(published, rel=0.005)


def test_co_wave_equation_returns_the_term_values(theory):
    """The potential is right if its levels are the Dunham sums it came from (first-order inversion)."""
    energies, _ = theory.wave_functions(1)
    v = np.arange(12)
    for j, tolerance in ((0, 0.02), (30, 0.1)):
        difference = energies[j, v] - energies[0, 0] - (theory.term(1, v, j) - theory.term(1, 0, 0))
        assert np.abs(difference).max() < tolerance


def co_line(v_up: int, v_low: int, m: int, isotopologue: int = 1) -> float:
    """Position of one CO line, cm-1."""
    co = read_co()
    row = (
        (co["v_up"] == v_up) & (co["v_low"] == v_low) & (co["m"] == m) & (co["isotopologue"] == isotopologue)
    )
    return float(co["wavenumber_per_cm"][row].item())


@pytest.mark.parametrize(
    ("m", "published"),
    [(1, 2147.081132), (2, 2150.856006), (4, 2158.299710), (-1, 2139.426071), (-4, 2127.682404)],
)
def test_co_fundamental_frequency_standards(m, published):
    """Maki & Wells (CRC handbook), good to 1e-6; the table's 0.001 Angstrom is 5e-5 cm-1 here."""
    assert co_line(1, 0, m) == pytest.approx(published, abs=1e-4)


@pytest.mark.parametrize(
    ("m", "published"), [(1, 4263.837), (11, 4297.705), (-1, 4256.217), (-8, 4227.354), (13, 4303.623)]
)
def test_co_overtone_lines(m, published):
    """2-0 lines of a published list with three decimals; 0.001 Angstrom is 2e-4 cm-1 here."""
    assert co_line(2, 0, m) == pytest.approx(published, abs=8e-4)


@pytest.mark.parametrize(
    ("isotopologue", "v_up", "head_um"),
    [
        (1, 2, 2.293515),
        (1, 3, 2.322649),
        (1, 4, 2.352450),
        (1, 5, 2.382939),
        (2, 2, 2.344821),
        (2, 3, 2.373929),
    ],
)
def test_co_band_heads(isotopologue, v_up, head_um):
    """Heads from the Dunham sum of Huber & Herzberg constants, whose truncation costs 1e-5 um at J = 50."""
    co = read_co()
    band = (co["isotopologue"] == isotopologue) & (co["v_up"] == v_up) & (co["v_low"] == v_up - 2)
    assert 1e4 / co["wavenumber_per_cm"][band].max() == pytest.approx(head_um, abs=2e-5)


def test_lists_are_read_only_sorted_and_documented():
    for molecule, count in (("H2O", 84_432), ("CO", 34_594)):
        lines = load_lines(molecule)
        assert len(lines) == count
        assert np.all(np.diff(lines.wavenumber_per_cm) >= 0)
        assert "HITRAN" in lines.source
        assert lines.gamma_air is None
        with pytest.raises(ValueError, match="read-only"):
            lines.strength_296[0] = 1.0
    assert load_lines("H2O").complete_to_k == 1300
    assert "hot lines incomplete" in load_lines("H2O").notes


def test_select_cuts_every_column():
    part = load_lines("H2O").select(4200.0, 4300.0, 1e-26)
    assert part.wavenumber_per_cm[0] >= 4200
    assert part.wavenumber_per_cm[-1] <= 4300
    assert part.strength_296.min() >= 1e-26
    assert len(part.ortho) == len(part.lower_energy_per_cm) == len(part) > 100


def test_unknown_molecule_says_what_ships():
    with pytest.raises(InputError, match="H2O, CO"):
        load_lines("NH3")
