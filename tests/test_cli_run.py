"""``xcorr run`` from files to files: what it writes, that it repeats, and every bad input."""

import json
import re
import shutil
from pathlib import Path

import h5py
import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from xcorr import cli
from xcorr.commands.simulate import RUN_FILE, TRUTH_FILE, write_scene
from xcorr.config import load_settings
from xcorr.io.results import read_result
from xcorr.simulate import SceneFactory, demo_companion, quick_settings

ROOT = Path(__file__).resolve().parent.parent
ONE_LINE = re.compile(r"(xcorr: (?!error)[^\n]*\n)*xcorr: error: [^;]+; got .+; .+\n")
FILES = {
    *("summary.json", "summary.ecsv", "summary.tex", "result.h5", "run.toml", "log.txt", "maps"),
    *(f"maps/{name}_{kind}.fits" for name in ("CO", "H2O") for kind in ("snr", "amplitude")),
}


def entries(folder):
    return {str(path.relative_to(folder)) for path in folder.rglob("*")}


@pytest.fixture(scope="module")
def scene(tmp_path_factory):
    """A small scene with a bright companion, its run file narrowed to CO and H2O."""
    settings = quick_settings(
        wavelength_range_um=(2.27, 2.37),
        n_wave=400,
        nx=16,
        ny=16,
        n_exposures=1,
        barycentric_velocity_km_s=(14.0,),
        rotation_deg=(0.0,),
        dither_xy_pixels=((0.0, 0.0),),
        companion_offset_xy=(4.0, -3.0),
        ideal_snr=40.0,
    )
    folder = tmp_path_factory.mktemp("scene")
    write_scene(SceneFactory(settings, demo_companion(settings.wavelength_range_um)).draw(), folder)
    run = folder / RUN_FILE
    text = (
        run.read_text()
        .replace('["CO", "H2O", "CH4"]', '["CO", "H2O"]')
        .replace("[-1000, 1000, 5]", "[-600, 600, 20]")
    )
    run.write_text(text + "\n[run]\nmax_memory_gb = 4\n")
    return folder


@pytest.fixture(scope="module")
def answer(scene, tmp_path_factory):
    out = tmp_path_factory.mktemp("answers") / "one"
    assert cli.main(["run", str(scene / RUN_FILE), "--out", str(out), "--quiet"]) == 0
    return out


def test_everything_promised_is_written(answer):
    assert entries(answer) == FILES
    assert [path.name for path in answer.parent.iterdir()] == ["one"]
    summary = json.loads((answer / "summary.json").read_text())
    assert [row["name"] for row in summary["molecules"]] == ["CO", "H2O"]
    assert summary["inputs"][0]["file"] == "exposure_1.fits"
    with h5py.File(answer / "result.h5") as file:
        for name in (
            *("velocity_km_s", "molecule", "snr_map", "amplitude_map", "snr_curve", "snr_raw_curve"),
            *("conditional_curve", "null"),
        ):
            assert name in file
        assert file["molecule"].asstr()[:].tolist() == ["CO", "H2O"]
        assert file["snr_map"].shape == (2, 16, 16)
        assert file["velocity_km_s"][:].tolist() == np.arange(-600.0, 601.0, 20.0).tolist()
    assert len(Table.read(answer / "summary.ecsv")) == 2


def test_every_dataset_is_documented(answer):
    described = set(re.findall(r"`([\w/]+)`", (ROOT / "docs" / "output.md").read_text()))
    names = []
    with h5py.File(answer / "result.h5") as file:
        file.visititems(lambda name, item: names.append(name) if isinstance(item, h5py.Dataset) else None)
    assert len(names) > 20
    assert {re.sub(r"^exposure/\d+/", "", name) for name in names} <= described


def test_times_hosts_and_absolute_paths_are_in_the_log_only(scene, answer):
    assert str(scene) in (answer / "log.txt").read_text()
    for name in ("summary.json", "summary.ecsv", "summary.tex", "run.toml", "result.h5"):
        assert str(scene).encode() not in (answer / name).read_bytes()
        assert str(answer).encode() not in (answer / name).read_bytes()


def test_the_written_run_file_repeats_the_run(answer):
    settings = load_settings(answer / "run.toml")
    assert settings.sha256 == json.loads((answer / "summary.json").read_text())["settings_sha256"]


def test_jobs_and_the_truth_change_nothing(scene, answer, tmp_path):
    """More workers, another folder and a deleted truth: the same bits."""
    shutil.copytree(scene, tmp_path / "other")
    (tmp_path / "other" / TRUTH_FILE).unlink()
    run = str(tmp_path / "other" / RUN_FILE)
    assert cli.main(["run", run, "--out", str(tmp_path / "out"), "--jobs", "2", "--quiet"]) == 0
    for name in ("summary.json", "result.h5", *(name for name in FILES if name.startswith("maps/"))):
        assert (tmp_path / "out" / name).read_bytes() == (answer / name).read_bytes(), name


def test_the_answer_is_on_stdout(scene, tmp_path, capsys):
    assert cli.main(["run", str(scene / RUN_FILE), "--out", str(tmp_path / "out"), "--quiet"]) == 0
    out, err = capsys.readouterr()
    rows = [line.split("  ")[0] for line in out.splitlines()]
    assert "CO" in rows
    assert "H2O" in rows
    assert "simulated companion" in out
    assert err == ""


def test_a_bright_companion_is_found_where_it_is(scene, answer):
    """S/N 40 at the information limit: the full chain must place it in velocity and show it in the map."""
    truth = json.loads((scene / TRUTH_FILE).read_text())
    result = read_result(answer)
    strongest = max(result.molecules, key=lambda row: row.snr_raw)
    # five sigma: a false alarm of 6e-7
    assert abs(strongest.velocity_km_s - truth["velocity_km_s"]) < 5 * strongest.velocity_err_km_s
    index = [row.name for row in result.molecules].index(strongest.name)
    y, x = np.unravel_index(np.nanargmax(result.arrays["snr_map"][index]), (16, 16))
    assert np.hypot(*(np.array([x, y]) - truth["exposures"][0]["companion_xy"])) < 1.5


# ---------------------------------------------------------------- bad input


@pytest.fixture
def bench(scene, tmp_path, monkeypatch):
    """A working directory with a good cube, to be spoilt, and its run file."""
    for name in ("exposure_1.fits", RUN_FILE):
        shutil.copy(scene / name, tmp_path / name)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def refused(capsys, *words):
    before = entries(Path.cwd())
    code = cli.main(["run", RUN_FILE, "--out", "out"])
    out, err = capsys.readouterr()
    assert code == 2, err
    assert out == ""
    assert ONE_LINE.fullmatch(err), err
    for word in words:
        assert word in err.splitlines()[-1]
    assert entries(Path.cwd()) == before


def rewrite(change):
    """Apply `change` to the HDU list of the cube."""
    with fits.open("exposure_1.fits", memmap=False) as file:
        hdus = fits.HDUList([hdu.copy() for hdu in file])
    hdus = change(hdus) or hdus
    hdus.writeto("exposure_1.fits", overwrite=True)


def run_file(old, new):
    path = Path(RUN_FILE)
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new))


@pytest.mark.parametrize("kept", [0, 100, 2880, 5760, 200_000, -2880])
def test_truncated_file(bench, capsys, kept):
    path = bench / "exposure_1.fits"
    path.write_bytes(path.read_bytes()[:kept])
    refused(capsys)


def test_random_bytes(bench, capsys):
    (bench / "exposure_1.fits").write_bytes(np.random.default_rng(1).bytes(100_000))
    refused(capsys)


def test_random_bytes_behind_a_good_start(bench, capsys):
    path = bench / "exposure_1.fits"
    path.write_bytes(path.read_bytes()[:80] + np.random.default_rng(1).bytes(100_000))
    refused(capsys)


def test_two_dimensional_image(bench, capsys):
    rewrite(lambda hdus: fits.HDUList([fits.PrimaryHDU(np.ones((20, 20), np.float32))]))
    refused(capsys)


def test_no_spectral_axis(bench, capsys):
    def change(hdus):
        for hdu in hdus[1:]:
            hdu.header["CTYPE3"] = "STOKES"

    rewrite(change)
    refused(capsys, "spectral axis")


def test_unknown_unit(bench, capsys):
    def change(hdus):
        for hdu in hdus[1:]:
            hdu.header["CUNIT3"] = "furlong"

    rewrite(change)
    refused(capsys, "furlong", "wavelength_unit")


def test_all_nan(bench, capsys):
    def change(hdus):
        hdus["DATA"].data[:] = np.nan

    rewrite(change)
    refused(capsys)


def test_zero_variance_everywhere(bench, capsys):
    def change(hdus):
        hdus["NOISE"].data[:] = 0.0

    rewrite(change)
    refused(capsys)


@pytest.mark.parametrize("wavelengths", ["descending", "repeated"])
def test_wavelengths_that_do_not_ascend(bench, capsys, wavelengths):
    wavelength = np.linspace(2.27, 2.37, 400)
    if wavelengths == "repeated":
        wavelength[100] = wavelength[99]
    else:
        wavelength[50:60] = wavelength[50:60][::-1]
    Table({"wavelength": wavelength, "flux": np.ones(400), "error": np.ones(400)}).write("spectrum.ecsv")
    run_file("exposure_1.fits", "spectrum.ecsv")
    run_file("resolving_power", 'wavelength_unit = "um"\nmedium = "vacuum"\nresolving_power')
    refused(capsys, "ascend")


def test_template_that_covers_too_little(bench, capsys):
    wavelength = np.linspace(2.30, 2.33, 2000)
    flux = 1.0 + 0.1 * np.sin(np.arange(2000.0))
    Path("mine.txt").write_text("\n".join(f"{w:.8f} {f:.6f}" for w, f in zip(wavelength, flux, strict=True)))
    path = Path(RUN_FILE)
    path.write_text(
        path.read_text()
        + '[[template]]\nname = "mine"\nfile = "mine.txt"\nmedium = "vacuum"\nwavelength_unit = "um"\n'
    )
    refused(capsys, "mine", "covers too few channels")


def test_companion_outside_the_field(bench, capsys):
    text = Path(RUN_FILE).read_text()
    Path(RUN_FILE).write_text(re.sub(r"companion_xy = \[.*\]", "companion_xy = [99.0, 5.0]", text))
    refused(capsys, "99", "companion")


def test_no_resolving_power(bench, capsys):
    def change(hdus):
        for hdu in hdus:
            hdu.header.remove("SPEC_RES", ignore_missing=True)

    rewrite(change)
    run_file("resolving_power = 4000", "")
    refused(capsys, "resolving")


def test_builtin_template_outside_its_range(bench, capsys):
    def change(hdus):
        for hdu in hdus[1:]:
            hdu.header["CRVAL3"] = 9.0

    rewrite(change)
    refused(capsys)
