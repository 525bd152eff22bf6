"""The command line: start-up, exit codes, one-line errors, and that nothing is half-written."""

import json
import logging
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from xcorr import cli
from xcorr.commands import run as run_command
from xcorr.commands.options import log_to_file, log_to_stderr

ROOT = Path(__file__).resolve().parent.parent
ONE_LINE = re.compile(r"xcorr: error: [^;]+; got .+; .+\n")
SEARCH = '[search]\nmolecules = ["CO"]\n'


@pytest.fixture
def here(tmp_path, monkeypatch):
    """An empty working directory."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def entries(folder):
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


def refused(arguments, capsys, *words):
    """The command exits 2 with one line on stderr, nothing on stdout, and leaves the folder as it was."""
    before = entries(Path.cwd())
    code = cli.main(arguments)
    out, err = capsys.readouterr()
    assert code == 2
    assert out == ""
    assert ONE_LINE.fullmatch(err), err
    for word in words:
        assert word in err
    assert entries(Path.cwd()) == before


def python(*arguments, **options):
    return subprocess.run(
        [sys.executable, *arguments], capture_output=True, text=True, cwd=ROOT, timeout=120, **options
    )


# ---------------------------------------------------------------- start-up


@pytest.mark.parametrize("arguments", [["--help"], ["--version"], ["run", "--help"], ["inspect", "--help"]])
def test_help_imports_no_numerical_library(arguments):
    program = (
        "import sys\nfrom xcorr.cli import main\n"
        f"assert main({arguments!r}) == 0\n"
        "heavy = {'numpy', 'scipy', 'astropy', 'numba', 'h5py', 'pydantic', 'joblib', 'matplotlib', 'rich'}\n"
        "print('heavy:', sorted(heavy & set(sys.modules)))\n"
    )
    done = python("-c", program)
    assert done.returncode == 0, done.stderr
    assert "heavy: []" in done.stdout


def test_help_lists_what_exists_and_everything_listed_exists(capsys):
    assert cli.main(["--help"]) == 0
    text = capsys.readouterr().out
    assert re.findall(r"^  (\w+)  ", text, re.MULTILINE) == ["run", "inspect", "templates", "simulate"]
    for name in ("run", "inspect", "templates", "simulate"):
        assert cli.main([name, "--help"]) == 0
        assert "Usage: xcorr" in capsys.readouterr().out


def test_module_and_version():
    from xcorr import __version__

    done = python("-m", "xcorr", "--version")
    assert (done.returncode, done.stderr) == (0, "")
    assert __version__ in done.stdout


# ---------------------------------------------------------------- usage


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ([], ["Missing command", "xcorr --help"]),
        (["rnu"], ["No such command 'rnu'"]),
        (["run"], ["Missing argument", "xcorr run --help"]),
        (["run", "x.toml"], ["Missing option '--out'"]),
        (["run", "x.toml", "--out", "d", "--job", "2"], ["--job"]),
        (["run", "x.toml", "--out", "d", "--jobs", "two"], ["--jobs", "two"]),
        (["run", "x.toml", "--out", "d", "--jobs", "0"], ["--jobs", "at least 1"]),
        (["inspect", "x.fits", "--set", "medium"], ["--set", "KEY=VALUE"]),
        (["inspect", "x.fits", "--set", "mediun=air"], ["mediun", "did you mean medium"]),
        (["templates", "list", "--jsno"], ["--jsno"]),
        (["templates", "build", "--out", "d"], ["--range"]),
        (["templates", "build", "--out", "d", "--range", "2.4", "2.0"], ["--range", "ascending"]),
        (["templates", "build", "--out", "d", "--range", "2", "2.1", "--name", "XY"], ["XY", "CO"]),
        (["simulate", "--out", "d", "--snr", "nan"], ["--snr"]),
        (["simulate", "--out", "d", "--seed", "-1"], ["--seed"]),
    ],
)
def test_usage_errors(here, capsys, arguments, words):
    refused(arguments, capsys, *words)


# ---------------------------------------------------------------- run files


def test_no_run_file(here, capsys):
    refused(["run", "nothing.toml", "--out", "d"], capsys, "nothing.toml", "No such file", "check the path")


def test_run_file_is_a_folder(here, capsys):
    (here / "x.toml").mkdir()
    refused(["run", "x.toml", "--out", "d"], capsys, "x.toml", "Is a directory")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (b"[search\n", ["not valid TOML", "line 1"]),
        (np.random.default_rng(5).bytes(64) + b"\xff", ["run.toml"]),
        (b"[[exposure]]\nfile = 'a.fits'\n[search]\nmolecule = ['CO']\n", ["did you mean molecules"]),
        (
            b"[[exposure]]\nfile = 'a.fits'\nresolving_power = 0\n[search]\nmolecules = ['CO']\n",
            ["R = lambda"],
        ),
        (b"[[exposure]]\nfile = 'a.fits'\n[search]\nmolecules = 'CO'\n", ["must be a list"]),
        (b"[[exposure]]\nfile = 'a.fits'\n[search]\nmolecules = ['CO']\n", ["no such file", "a.fits"]),
        (b"[[exposure]]\nfile = 'run.toml'\n[search]\nmolecules = ['CQ']\n", ["'CQ'", "did you mean CO"]),
        (
            b"[[exposure]]\nfile = 'a'\n[search]\nmolecules = ['CO']\nvelocity_km_s = [0, 9, 0]\n",
            ["[search].velocity_km_s needs a step above 0"],
        ),
    ],
)
def test_bad_run_files(here, capsys, text, words):
    (here / "run.toml").write_bytes(text)
    refused(["run", "run.toml", "--out", "d"], capsys, *words)


# ---------------------------------------------------------------- output places


@pytest.fixture
def small_run(here):
    """A run file whose one input exists; what it holds is not read before the output is checked."""
    (here / "a.fits").write_bytes(b"never read")
    (here / "run.toml").write_text("[[exposure]]\nfile = 'a.fits'\nresolving_power = 4000\n" + SEARCH)
    return here


def test_output_that_exists(small_run, capsys):
    (small_run / "d").mkdir()
    (small_run / "d" / "precious").touch()
    refused(["run", "run.toml", "--out", "d"], capsys, "exists and is not empty", "--overwrite")


def test_scene_that_exists(here, capsys):
    (here / "scene").mkdir()
    (here / "scene" / "precious").touch()
    refused(["simulate", "--out", "scene"], capsys, "exists and is not empty", "--overwrite")


def test_output_over_inputs(small_run, capsys):
    refused(["run", "run.toml", "--out", ".", "--overwrite"], capsys, "must stay", "choose another --out")


def test_output_below_a_file(small_run, capsys):
    refused(["run", "run.toml", "--out", "a.fits/d"], capsys, "a.fits", "Not a directory")


def test_output_where_nothing_can_be_made(small_run, capsys):
    refused(["run", "run.toml", "--out", "/proc/none/d"], capsys, "/proc/none", "No such file")


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_output_without_permission(small_run, capsys):
    (small_run / "closed").mkdir(mode=0o500)
    refused(["run", "run.toml", "--out", "closed/d"], capsys, "Permission denied", "check the permissions")


# ---------------------------------------------------------------- what goes wrong inside


def test_internal_error_is_1_and_leaves_a_log(small_run, capsys, monkeypatch):
    def broken(*arguments, **options):
        raise ZeroDivisionError("a defect")

    monkeypatch.setattr(run_command, "_log_place", broken)
    assert cli.main(["run", "run.toml", "--out", "d"]) == 1
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    path = Path(re.search(r"the traceback is in (\S+);", err)[1])
    assert "ZeroDivisionError: a defect" in path.read_text()
    assert "Traceback" in path.read_text()
    path.unlink()
    assert entries(small_run) == ["a.fits", "run.toml"]


@pytest.mark.parametrize(("error", "code"), [(KeyboardInterrupt, 130), (cli.Terminated, 143)])
def test_interrupts_clean_up(small_run, capsys, monkeypatch, error, code):
    def interrupt(*arguments, **options):
        assert [name for name in entries(small_run) if ".partial-" in name]
        raise error

    monkeypatch.setattr(run_command, "_log_place", interrupt)
    assert cli.main(["run", "run.toml", "--out", "d"]) == code
    assert capsys.readouterr().out == ""
    assert entries(small_run) == ["a.fits", "run.toml"]


def test_an_operating_system_error_is_the_users(small_run, capsys, monkeypatch):
    def full(*arguments, **options):
        raise OSError(28, "No space left on device", "/data/x")

    monkeypatch.setattr(run_command, "_log_place", full)
    refused(["run", "run.toml", "--out", "d"], capsys, "/data/x", "No space left", "free space")


@pytest.mark.parametrize(("number", "code"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_signals_in_a_process_of_its_own(small_run, number, code):
    program = (
        "import signal, sys, time\n"
        "from xcorr import cli\n"
        "from xcorr.commands import run\n"
        # a shell starts background jobs with SIGINT ignored, and the tests may be one
        "signal.signal(signal.SIGINT, signal.default_int_handler)\n"
        "def wait(*_):\n"
        "    print('working', flush=True)\n"
        "    time.sleep(60)\n"
        "run._log_place = wait\n"
        "sys.exit(cli.main(['run', 'run.toml', '--out', 'd']))\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", program],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        cwd=small_run,
        env=os.environ | {"PYTHONPATH": str(ROOT)},
    ) as process:
        try:
            assert process.stdout.readline() == "working\n"
            assert [name for name in entries(small_run) if ".partial-" in name]
            process.send_signal(number)
            _, err = process.communicate(timeout=50)
        finally:
            process.kill()
    assert process.returncode == code
    assert err.startswith("xcorr: ")
    assert err.count("\n") == 1
    assert entries(small_run) == ["a.fits", "run.toml"]


def test_a_closed_pipe_is_quiet():
    done = subprocess.run(
        f"{sys.executable} -m xcorr templates list | head -c 1",
        shell=True,
        capture_output=True,
        text=True,
        cwd=ROOT,
        timeout=120,
    )
    assert done.stderr == ""


# ---------------------------------------------------------------- logging


def test_log_goes_to_stderr_and_the_file(tmp_path, capsys):
    logger = logging.getLogger("xcorr.test")
    with log_to_stderr(quiet=False, debug=False), log_to_file(tmp_path / "log.txt"):
        logger.info("read %s", "a.fits")
        logger.debug("host")
    out, err = capsys.readouterr()
    assert out == ""
    assert err == "xcorr: read a.fits\n"
    text = (tmp_path / "log.txt").read_text()
    assert "host" in text
    assert time.strftime("%Y-%m-") in text
    with log_to_stderr(quiet=True, debug=False):
        logger.info("not shown")
        logger.warning("shown")
    assert capsys.readouterr().err == "xcorr: shown\n"
    assert logging.getLogger("xcorr").handlers == []


# ---------------------------------------------------------------- inspect and templates


@pytest.fixture
def cube_file(here):
    """A cube of a round source (FWHM 2.4 pixels) with white noise of sigma 2, on axis 3, um, in air."""
    rng = np.random.default_rng(3)
    y, x = np.indices((15, 16))
    sigma_pixels = 2.4 / 2.3548
    image = 500.0 * np.exp(-0.5 * ((x - 9.3) ** 2 + (y - 6.2) ** 2) / sigma_pixels**2)
    data = (image + rng.normal(0.0, 2.0, (300, 15, 16))).astype(np.float32)
    header = {
        "CTYPE3": "AWAV",
        "CUNIT3": "um",
        "CRVAL3": 2.1,
        "CRPIX3": 1.0,
        "CD3_3": 2.5e-4,
        "SPECSYS": "BARYCENT",
    }
    science = fits.ImageHDU(data, name="DATA")
    science.header.update(header)
    error = fits.ImageHDU(
        np.full(data.shape, 2.0, np.float32) * (1 + 0.01 * rng.random(data.shape)), name="NOISE"
    )
    error.data = error.data.astype(np.float32)
    fits.HDUList([fits.PrimaryHDU(), science, error]).writeto(here / "cube.fits")
    return here / "cube.fits"


def test_inspect_says_what_was_understood(cube_file, capsys):
    assert cli.main(["inspect", "cube.fits", "--json", "--set", "resolving_power=3000"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    found = json.loads(out)
    assert (found["schema"], found["kind"]) == ("xcorr-inspect-1", "cube")
    assert (found["n_wave"], found["ny"], found["nx"]) == (300, 15, 16)
    assert (found["medium_of_file"], found["frame"]) == ("air", "barycentric")
    # 2.1 um in air is 2.100573 um in vacuum (CHECKS 2.3: n - 1 = 2.7294e-4 to 2.73e-4)
    assert found["wavelength_range_um"][0] == pytest.approx(2.1 * 1.000273, rel=2e-7)
    middle = 299792.458 * 2.5e-4 / (2.1 + 150 * 2.5e-4)
    assert found["channel_km_s"][1] == pytest.approx(middle, rel=1e-3)
    assert found["pixels_per_resolution_element"][1] == pytest.approx(299792.458 / 3000 / middle, rel=1e-3)
    assert found["errors"]["verdict"].startswith("claimed errors match")
    # scatter of 120 spaxels x 296 differences: median absolute deviation good to 1 per cent
    assert found["errors"]["ratio"] == pytest.approx(1.0, abs=0.03)
    assert found["brightest"]["xy"] == pytest.approx([9.3, 6.2], abs=0.02)
    assert found["brightest"]["fwhm_pixels"] == pytest.approx(2.4, abs=0.1)
    assert found["sha256"]


def test_inspect_as_text(cube_file, capsys):
    assert cli.main(["inspect", "cube.fits"]) == 0
    text = capsys.readouterr().out
    assert "300 channels, 16 x 15 spaxels" in text
    assert "give resolving_power" in text
    assert "file: air" in text


def test_inspect_overrides_reach_the_reader(cube_file, capsys):
    assert (
        cli.main(["inspect", "cube.fits", "--json", "--set", "medium=vacuum", "--set", "frame=observatory"])
        == 0
    )
    found = json.loads(capsys.readouterr().out)
    assert (found["medium_of_file"], found["frame"]) == ("vacuum", "observatory")
    assert found["wavelength_range_um"][0] == pytest.approx(2.1, rel=1e-9)


def test_inspect_notices_wrong_errors(cube_file, capsys):
    with fits.open(cube_file, mode="update") as file:
        file["NOISE"].data /= 10.0
    assert cli.main(["inspect", "cube.fits", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["errors"]["ratio"] == pytest.approx(10.0, rel=0.03)
    assert "smaller than the scatter" in found["errors"]["verdict"]


@pytest.mark.parametrize(
    "content",
    [None, b"", b"SIMPLE", np.random.default_rng(6).bytes(5000)],
    ids=["none", "empty", "start", "random"],
)
def test_inspect_of_what_is_no_cube(here, capsys, content):
    if content is not None:
        (here / "x.fits").write_bytes(content)
    refused(["inspect", "x.fits"], capsys, "x.fits")


def test_templates_list(capsys):
    assert cli.main(["templates", "list", "--json"]) == 0
    listed = json.loads(capsys.readouterr().out)
    assert {entry["name"] for entry in listed["templates"]} == {"H2O", "CO", "CH4", "full"}
    assert all(entry["source"] for entry in listed["templates"])
    assert cli.main(["templates", "list"]) == 0
    assert "caveat: cold methane" in capsys.readouterr().out


def test_templates_build_makes_readable_files_and_resumes(here, capsys, monkeypatch):
    from xcorr.atmosphere import builtin_template
    from xcorr.io import read_template

    monkeypatch.setenv("XCORR_CACHE", str(here / "cache"))
    arguments = ["templates", "build", "--out", "t", "--range", "2.30", "2.32", "--name", "CO", "--quiet"]
    assert cli.main(arguments) == 0
    path = Path(capsys.readouterr().out.strip())
    assert path == Path("t/shards/CO_t1200_g4.h5")
    built, expected = (
        read_template(path),
        builtin_template("CO", wavelength_range_um=(2.3, 2.32), t_eff=1200, log_g=4),
    )
    # micrometre to metre and back costs a last bit
    np.testing.assert_allclose(built.wavelength_um, expected.wavelength_um, rtol=1e-15)
    for name in ("flux", "reference_flux", "covered"):
        np.testing.assert_array_equal(getattr(built, name), getattr(expected, name))
    assert (built.name, built.kind) == ("CO", "contribution")

    first = path.stat().st_mtime_ns
    assert cli.main(arguments) == 0
    assert path.stat().st_mtime_ns == first
    path.write_bytes(b"damaged")
    assert cli.main(arguments) == 0
    assert read_template(path).name == "CO"
    capsys.readouterr()
    refused([*arguments[:-1], "--t-eff", "1000"], capsys, "something else than this request", "--overwrite")


def test_templates_build_of_nothing_leaves_nothing(here, capsys, monkeypatch):
    monkeypatch.setenv("XCORR_CACHE", str(here / "cache"))
    code = cli.main(["templates", "build", "--out", "t", "--range", "3.0", "3.1", "--name", "CH4", "--quiet"])
    assert code == 2
    assert "nothing could be built" in capsys.readouterr().err
    assert not (here / "t").exists()
