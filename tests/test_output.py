"""The output folder: whole or not at all, and everything reads back."""

import json
import math
import os
import time
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS

from xcorr.errors import InputError, Note, OutputError
from xcorr.io.output import output_directory
from xcorr.io.results import file_stems, read_result, write_hdf5, write_result
from xcorr.io.summary import summary_text
from xcorr.report.tables import _plus_minus, latex_table, text_table
from xcorr.results import InputFile, MoleculeResult, NullSummary, RunResult

# CONTRACTS, "Output of run": the keys in their order.
SUMMARY_KEYS = [
    *("schema", "target", "frame", "molecules", "warnings", "inputs", "settings_sha256", "seed", "versions"),
]
MOLECULE_KEYS = [
    *("name", "template", "snr", "snr_raw", "snr_conditional", "snr_at_systemic", "velocity_km_s"),
    *("velocity_err_km_s", "amplitude", "amplitude_err", "amplitude_unit", "p_local", "p_global"),
    *("p_global_is_extrapolated", "n_null", "nu_eff", "null", "efficiency", "masked_fraction", "verdict"),
    "position_xy",
]
CELESTIAL = {
    "CTYPE1": "RA---TAN",
    "CTYPE2": "DEC--TAN",
    "CRVAL1": 150.0,
    "CRVAL2": -20.0,
    "CRPIX1": 3.0,
    "CRPIX2": 2.0,
    "CDELT1": -1e-5,
    "CDELT2": 1e-5,
    "CUNIT1": "deg",
    "CUNIT2": "deg",
}


def molecule(name="CO", **changes):
    values = {
        "name": name,
        "template": "contribution of CO",
        "snr": np.float32(12.25),
        "snr_raw": 15.5,
        "snr_conditional": 11.0,
        "snr_at_systemic": math.nan,
        "velocity_km_s": 23.456,
        "velocity_err_km_s": 1.234,
        "amplitude": 1.04,
        "amplitude_err": 0.085,
        "amplitude_unit": "template",
        "p_local": 1e-30,
        "p_global": 4.5e-11,
        "p_global_is_extrapolated": True,
        "n_null": np.int64(4000),
        "nu_eff": 812.5,
        "null": NullSummary(0.1, 1.3),
        "efficiency": 0.91,
        "masked_fraction": 0.02,
        "verdict": "detected",
        "position_xy": (14.2, np.float64(9.5)),
        "extra": {"host_velocity_km_s": np.float64(3.0)},
    }
    return MoleculeResult(**(values | changes))


def result(**changes):
    rng = np.random.default_rng(1)
    values = {
        "target": "A & B_1 ü",
        "frame": "barycentric",
        "molecules": (
            molecule(),
            molecule(
                "my CO/2", null=None, position_xy=None, nu_eff=math.inf, verdict="not detected", n_null=0
            ),
        ),
        "warnings": (Note("no-error-plane", "errors were estimated"),),
        "inputs": (InputFile("night1.fits", "ab" * 32),),
        "settings_sha256": "cd" * 32,
        "seed": 7,
        "versions": {"xcorr": "0.1.0"},
        "arrays": {
            "velocity_km_s": np.linspace(-10.0, 10.0, 5),
            "molecule": np.array(["CO", "my CO/2"], dtype=object),
            "snr_map": rng.normal(size=(2, 4, 6)).astype(np.float32),
            "amplitude_map": rng.normal(size=(2, 4, 6)).astype(np.float32),
            "null/snr": rng.normal(size=(100, 200)),
            "null/used": rng.random(100) > 0.5,
            "exposure/0/num": np.arange(3),
            "count": np.array(3),
        },
        "attributes": {"velocity_km_s": {"unit": "km/s"}, "null": {"meaning": "companion-free positions"}},
        "celestial_header": CELESTIAL,
        "extra": {"efficiency_ledger": {"transmission": np.float64(math.nan)}},
    }
    return RunResult(**(values | changes))


def tree(folder):
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


def strict(text):
    def refuse(name):
        raise AssertionError(f"{name} is not JSON")

    return json.loads(text, parse_constant=refuse)


# ---------------------------------------------------------------- content


def test_summary_is_strict_json_in_the_documented_order(tmp_path):
    write_result(result(), tmp_path)
    summary = strict((tmp_path / "summary.json").read_text())
    assert list(summary)[: len(SUMMARY_KEYS)] == SUMMARY_KEYS
    first, second = summary["molecules"]
    assert list(first)[: len(MOLECULE_KEYS)] == MOLECULE_KEYS
    assert summary["schema"] == "xcorr-summary-1"
    assert first["snr"] == 12.25
    assert first["snr_at_systemic"] is None
    assert first["null"] == {"mean": 0.1, "std": 1.3}
    assert first["position_xy"] == [14.2, 9.5]
    assert first["host_velocity_km_s"] == 3.0
    assert (second["null"], second["position_xy"], second["nu_eff"]) == (None, None, None)
    assert summary["warnings"] == [{"code": "no-error-plane", "message": "errors were estimated"}]
    assert summary["efficiency_ledger"] == {"transmission": None}


def test_additions_never_replace_documented_keys():
    odd = result(extra={"seed": 99}, molecules=(molecule(extra={"snr": -1.0}),))
    summary = strict(summary_text(odd))
    assert (summary["seed"], summary["molecules"][0]["snr"]) == (7, 12.25)


def test_everything_reads_back(tmp_path):
    written = result()
    write_result(written, tmp_path)
    back = read_result(tmp_path)
    assert summary_text(back) == summary_text(written)
    assert set(back.arrays) == set(written.arrays)
    for name, values in written.arrays.items():
        np.testing.assert_array_equal(back.arrays[name], values)
        assert back.arrays[name].dtype.kind == values.dtype.kind
    assert back.attributes == written.attributes
    assert back.celestial_header == written.celestial_header
    assert math.isnan(back.molecules[0].snr_at_systemic)
    assert read_result(tmp_path / "result.h5").molecules[1].null is None


def test_equal_results_give_equal_bytes(tmp_path):
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        write_result(result(), tmp_path / name)
        time.sleep(1.1)  # time stamps in files count whole seconds
    assert tree(tmp_path / "a") == tree(tmp_path / "b")
    for name in tree(tmp_path / "a"):
        if (tmp_path / "a" / name).is_file():
            assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes(), name


def test_maps_are_images_on_the_sky_at_one_velocity(tmp_path):
    written = result()
    write_result(written, tmp_path)
    assert tree(tmp_path / "maps") == [
        "CO_amplitude.fits",
        "CO_snr.fits",
        "my_CO_2_amplitude.fits",
        "my_CO_2_snr.fits",
    ]
    with fits.open(tmp_path / "maps" / "my_CO_2_snr.fits") as file:
        np.testing.assert_array_equal(file[0].data, written.arrays["snr_map"][1])
        assert file[0].header["VELOCITY"] == 23.456
        sky = WCS(file[0].header).pixel_to_world_values(2.0, 1.0)
        np.testing.assert_allclose(sky, (150.0, -20.0), atol=1e-9)


def test_maps_without_a_sky_or_a_velocity(tmp_path):
    write_result(
        result(celestial_header=None, molecules=(molecule(velocity_km_s=math.nan), molecule("H2O"))), tmp_path
    )
    header = fits.getheader(tmp_path / "maps" / "CO_snr.fits")
    assert "VELOCITY" not in header
    assert "CTYPE1" not in header
    arrays = {"velocity_km_s": np.arange(3.0)}
    (tmp_path / "none").mkdir()
    write_result(result(arrays=arrays), tmp_path / "none")
    assert not (tmp_path / "none" / "maps").exists()


def test_table_file_keeps_units_and_undefined_values(tmp_path):
    write_result(result(), tmp_path)
    table = Table.read(tmp_path / "summary.ecsv")
    assert list(table["name"]) == ["CO", "my CO/2"]
    assert str(table["velocity_km_s"].unit) == "km / s"
    assert table.meta["target"] == "A & B_1 ü"
    assert np.isnan(table["x"][1])


@pytest.mark.parametrize("names", [["CO", "co", "CO "], ["..", "/", ""], ["x" * 300, "x" * 301], ["é", "è"]])
def test_file_names_are_safe_and_distinct(names):
    stems = file_stems(names)
    assert len({stem.lower() for stem in stems}) == len(names)
    assert all(stem and "/" not in stem and not stem.startswith(".") and len(stem) < 80 for stem in stems)


def test_text_of_any_language_survives_in_hdf5(tmp_path):
    arrays = {"molecule": np.array(["ü", ""], dtype=object), "names": np.array(["a", "bb"])}
    write_hdf5(result(arrays=arrays), tmp_path / "r.h5")
    back = read_result(tmp_path / "r.h5")
    assert back.arrays["molecule"].tolist() == ["ü", ""]
    assert back.arrays["names"].tolist() == ["a", "bb"]


@pytest.mark.parametrize("content", [None, b"", b"not HDF5 at all"])
def test_what_is_no_result_is_refused(tmp_path, content):
    path = tmp_path / "result.h5"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(InputError):
        read_result(path)


# ---------------------------------------------------------------- tables


def test_terminal_table_leads_with_what_the_nulls_show():
    text = text_table(result())
    row = next(line for line in text.splitlines() if line.startswith("CO"))
    assert "detected" in row
    assert "12.2" in row  # half to even: 12.25
    assert "23.5 +- 1.2" in row
    assert row.index("not exceeded in 4000 nulls (3.5 sigma)") < row.index("p extrapolated 4.5e-11")
    assert "warning: errors were estimated" in text


def test_latex_table_escapes_and_rounds():
    text = latex_table(result())
    assert r"my CO/2 & not detected" in text
    assert r"$23.5 \pm 1.2$" in text
    assert r"$1.040 \pm 0.085$" in text
    assert r"$4.5 \times 10^{-11}$*" in text
    assert r"A \& B\_1" in text
    assert text.count(r"\\") == 4  # two lines of headings, two molecules


# ---------------------------------------------------------------- the folder


def fill(folder):
    (folder / "sub").mkdir()
    (folder / "sub" / "x.txt").write_text("new")


def fail_while_filling(path, error, **options):
    with output_directory(path, **options) as folder:
        fill(folder)
        raise error("stop")


def test_output_appears_whole_also_below_missing_parents(tmp_path):
    final = tmp_path / "a" / "b" / "out"
    with output_directory(final) as folder:
        assert folder.name == f".out.partial-{os.getpid()}"
        fill(folder)
        assert not final.exists()
    assert tree(tmp_path) == ["a", "a/b", "a/b/out", "a/b/out/sub", "a/b/out/sub/x.txt"]


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt, SystemExit, InputError])
def test_nothing_is_left_after_an_error(tmp_path, error):
    with pytest.raises(error):
        fail_while_filling(tmp_path / "a" / "out", error)
    assert tree(tmp_path) == []


def test_existing_output_needs_overwrite_and_survives_a_failure(tmp_path):
    final = tmp_path / "out"
    final.mkdir()
    with output_directory(final) as folder:  # empty: free to use
        (folder / "old.txt").write_text("old")
    with pytest.raises(OutputError, match=r"not empty.*--overwrite"), output_directory(final):
        pass
    with pytest.raises(ValueError, match="stop"):
        fail_while_filling(final, ValueError, overwrite=True)
    assert tree(tmp_path) == ["out", "out/old.txt"]
    with output_directory(final, overwrite=True) as folder:
        fill(folder)
    assert tree(tmp_path) == ["out", "out/sub", "out/sub/x.txt"]


def test_a_failed_move_puts_the_old_output_back(tmp_path, monkeypatch):
    final = tmp_path / "out"
    final.mkdir()
    (final / "old.txt").write_text("old")
    rename = os.rename

    def refuse_partial(source, target):
        if ".partial-" in str(source):
            raise OSError(28, "No space left on device", str(target))
        rename(source, target)

    monkeypatch.setattr(os, "rename", refuse_partial)
    with pytest.raises(OSError, match="No space"), output_directory(final, overwrite=True) as folder:
        fill(folder)
    assert tree(tmp_path) == ["out", "out/old.txt"]


def test_inputs_and_the_working_directory_are_never_replaced(tmp_path, monkeypatch):
    final = tmp_path / "scene"
    (final / "deep").mkdir(parents=True)
    cube = final / "cube.fits"
    cube.touch()
    with (
        pytest.raises(OutputError, match="must stay"),
        output_directory(final, overwrite=True, protect=[cube]),
    ):
        pass
    monkeypatch.chdir(final / "deep")
    with pytest.raises(OutputError, match="must stay"), output_directory(final, overwrite=True):
        pass
    with pytest.raises(OutputError), output_directory(Path("/"), overwrite=True):
        pass


def test_places_that_cannot_be_written(tmp_path):
    file = tmp_path / "file"
    file.touch()
    with pytest.raises(OutputError, match="must be a folder"), output_directory(file, overwrite=True):
        pass
    with pytest.raises(OSError, match="Not a directory"), output_directory(file / "out"):
        pass
    assert tree(tmp_path) == ["file"]


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (9.5e-16, 8.3e-16, "(9.5 +- 8.3)e-16"),
        (-2.5e7, 1.26e6, "(-2.50 +- 0.13)e7"),
        (0.0007, 0.0001, "0.00070 +- 0.00010"),
    ],
)
def test_strengths_in_tiny_or_huge_units_stay_readable(value, error, text):
    assert _plus_minus(value, error) == text
