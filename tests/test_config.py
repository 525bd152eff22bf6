"""The run file: defaults, every refusal, paths, digest, and writing it back."""

import os
from pathlib import Path

import numpy as np
import pytest

from xcorr.config import (
    Settings,
    dump_toml,
    load_settings,
    named_files,
    parse_exposure,
    parse_settings,
    settings_sha256,
)
from xcorr.errors import SettingsError

EXPOSURE = '[[exposure]]\nfile = "a.fits"\n'
SEARCH = '[search]\nmolecules = ["CO"]\n'
SMALL = EXPOSURE + SEARCH


def parsed(text, base="/data"):
    return parse_settings(text, base_dir=base)


def refusal(text):
    with pytest.raises(SettingsError) as caught:
        parsed(text)
    assert "\n" not in str(caught.value)
    assert caught.value.got
    assert caught.value.do
    return str(caught.value)


def test_defaults_are_those_of_the_contract():
    settings = parsed(SMALL)
    assert settings.starlight.model_dump() == {
        "reference": "brightest",
        "knots": 40,
        "background_knots": 0,
        "companion_knots": 6,
        "modes": 0,
        "star_t_eff": None,
    }
    assert settings.search.velocity_km_s == (-1000.0, 1000.0, 5.0)
    assert (settings.search.t_eff, settings.search.log_g) == (1200.0, 4.0)
    assert settings.run.model_dump() == {"jobs": 1, "seed": 1, "max_memory_gb": 8.0}
    assert settings.target.companion_xy is None
    assert settings.target.systemic_velocity_km_s is None
    assert settings.psf.model_dump() == {"file": None, "fwhm_pixels": None, "star_magnitude": None}


def test_whole_numbers_serve_as_numbers_but_not_the_reverse():
    settings = parsed(EXPOSURE + "resolving_power = 4000\n" + SEARCH + "t_eff = 1500\n")
    assert settings.exposure[0].resolving_power == 4000.0
    assert isinstance(settings.search.t_eff, float)
    assert "whole number" in refusal(SMALL + "[starlight]\nknots = 40.0\n")


def test_velocity_grid_includes_its_stop():
    grid = np.array(parsed(SMALL).velocity_grid())
    assert grid.size == 401
    assert (grid[0], grid[-1]) == (-1000.0, 1000.0)
    uneven = parsed(EXPOSURE + SEARCH + "velocity_km_s = [0, 10, 3]\n").velocity_grid()
    assert uneven == (0.0, 3.0, 6.0, 9.0)
    tenths = parsed(EXPOSURE + SEARCH + "velocity_km_s = [0, 0.3, 0.1]\n").velocity_grid()
    assert len(tenths) == 4  # 0.3 / 0.1 is below 3 in binary
    assert parsed(EXPOSURE + SEARCH + "velocity_km_s = [7, 7, 1]\n").velocity_grid() == (7.0,)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (EXPOSURE + "[search]\nmolecule = ['CO']\n", ["[search]", "'molecule'", "did you mean molecules"]),
        (EXPOSURE + "resolvin_power = 1\n" + SEARCH, ["[[exposure]] 1", "did you mean resolving_power"]),
        (EXPOSURE + EXPOSURE + "fram = 'x'\n" + SEARCH, ["[[exposure]] 2", "did you mean frame"]),
        ("[serch]\n" + SMALL, ["'serch'", "did you mean search"]),
        (SMALL + "[psf]\nqqqqqq = 1\n", ["[psf]", "known keys: file, fwhm_pixels, star_magnitude"]),
        ("[[exposure]]\nfil = 'a'\n" + SEARCH, ["did you mean file"]),
        (
            EXPOSURE + "resolving_power = 0\n" + SEARCH,
            ["resolving_power", "greater than 0", "got 0", "R = lambda"],
        ),
        (EXPOSURE + "resolving_power = -1.5\n" + SEARCH, ["resolving_power", "greater than 0"]),
        (EXPOSURE + "resolving_power = true\n" + SEARCH, ["resolving_power", "must be a number", "True"]),
        (SMALL + "velocity_km_s = [-10, 10, 0]\n", ["[search].velocity_km_s", "step", "[-10, 10, 0]"]),
        (SMALL + "velocity_km_s = [-10, 10, -5]\n", ["[search].velocity_km_s", "step"]),
        (SMALL + "velocity_km_s = [10, -10, 5]\n", ["[search].velocity_km_s", "starts above its stop"]),
        (SMALL + "velocity_km_s = [10, 20]\n", ["[search].velocity_km_s", "too few", "[start, stop, step]"]),
        (SMALL + "velocity_km_s = [1, 2, 3, 4]\n", ["[search].velocity_km_s", "wrong number"]),
        (SMALL + "velocity_km_s = [1, 2, 'x']\n", ["[search].velocity_km_s value 3", "must be a number"]),
        (SMALL + "velocity_km_s = 5\n", ["[search].velocity_km_s", "must be a list"]),
        (SMALL + "velocity_km_s = [nan, 2, 1]\n", ["[search].velocity_km_s value 1", "finite"]),
        (SMALL + "velocity_km_s = [-9e9, 9e9, 1]\n", ["[search].velocity_km_s", "30000"]),
        (SMALL + "velocity_km_s = [-9, 9, 1e-9]\n", ["[search].velocity_km_s", "wider step"]),
        (EXPOSURE, ["molecules", "[[template]]", "both empty"]),
        (EXPOSURE + "[search]\nmolecules = []\n", ["molecules", "both empty"]),
        (EXPOSURE + "[search]\nmolecules = ['CO', 'CO']\n", ["[search].molecules", "twice", "'CO'"]),
        (EXPOSURE + "[search]\nmolecules = 'CO'\n", ["[search].molecules", "must be a list"]),
        (EXPOSURE + "[search]\nmolecules = [3]\n", ["[search].molecules value 1", "text in quotes"]),
        (SMALL + "[[template]]\nname = 'CO'\nfile = 'x'\n", ["[[template]]", "'CO' twice"]),
        (SMALL + "[starlight]\nknots = -3\n", ["[starlight].knots", "got -3"]),
        (SMALL + "[starlight]\ncompanion_knots = 2\n", ["[starlight].companion_knots", "at least 4"]),
        (SMALL + "[starlight]\nmodes = -1\n", ["[starlight].modes", "got -1"]),
        (SMALL + "[starlight]\nmodes = 2\n", ["[starlight].modes", "not available in this version"]),
        (SMALL + "t_eff = 'hot'\n", ["[search].t_eff", "must be a number", "'hot'"]),
        (SMALL + "t_eff = 0\n", ["[search].t_eff", "greater than 0"]),
        (SMALL + "t_eff = inf\n", ["[search].t_eff", "finite"]),
        (SEARCH, ["[[exposure]] is missing"]),
        ("exposure = []\n" + SEARCH, ["[[exposure]]", "wrong number"]),
        ("[exposure]\nfile = 'a'\n" + SEARCH, ["[[exposure]]", "double brackets"]),
        ("[[exposure]]\n" + SEARCH, ["[[exposure]] 1: file is missing"]),
        ("[[exposure]]\nfile = ''\n" + SEARCH, ["[[exposure]] 1: file", "must name a file"]),
        ("[[exposure]]\nfile = 3\n" + SEARCH, ["[[exposure]] 1: file", "file name in quotes"]),
        (EXPOSURE + "medium = 'vacum'\n" + SEARCH, ["medium", "'vacuum' or 'air'", "'vacum'"]),
        (EXPOSURE + "telluric_corrected = 1\n" + SEARCH, ["telluric_corrected", "true or false"]),
        (EXPOSURE + "wavelength_range_um = [2.4, 2.0]\n" + SEARCH, ["wavelength_range_um", "ascending"]),
        (
            EXPOSURE + "mask_wavelength_um = [[2.0, 2.0]]\n" + SEARCH,
            ["mask_wavelength_um value 1", "ascending"],
        ),
        (EXPOSURE + "site = [1, 2]\n" + SEARCH, ["site", "height_m"]),
        (
            EXPOSURE + "quality_bad_bits = [0]\nquality_good_bits = [1]\n" + SEARCH,
            ["[[exposure]] 1", "keep one"],
        ),
        (
            SMALL + "[target]\ncompanion_xy = [1, 2]\ncompanion_offset_arcsec = [1, 2]\n",
            ["[target]", "twice", "keep one"],
        ),
        (SMALL + "[target]\nsystemic_velocity_err_km_s = 1\n", ["[target].systemic_velocity_err_km_s"]),
        (SMALL + "[target]\nmask_sources = [[1, 2, 0]]\n", ["[target].mask_sources value 1 value 3"]),
        (SMALL + "[run]\njobs = 0\n", ["[run].jobs", "got 0"]),
        (SMALL + "[run]\nseed = -1\n", ["[run].seed"]),
        (SMALL + "[run]\nmax_memory_gb = 0\n", ["[run].max_memory_gb"]),
        ("search = 3\n" + EXPOSURE, ["[search] must be a table"]),
        (SMALL + "molecules = ['H2O']\n", ["not valid TOML", "line 5"]),
        (SMALL + "t_eff = \n", ["not valid TOML", "line 5"]),
        (SMALL + "t_eff = [", ["not valid TOML", "line 5"]),
    ],
)
def test_refusals_say_where_what_and_how(text, words):
    message = refusal(text)
    for word in words:
        assert word in message


def test_paths_start_from_the_run_file(tmp_path, monkeypatch):
    folder = tmp_path / "night"
    folder.mkdir()
    for name in ("a.fits", "r.txt", "t.fits"):
        (folder / name).touch()
    text = (
        EXPOSURE + 'resolving_power = "r.txt"\n' + '[[template]]\nname = "mine"\nfile = "../night/t.fits"\n'
    )
    (folder / "run.toml").write_text(text)
    monkeypatch.chdir(tmp_path)
    settings = load_settings("night/run.toml")
    assert settings.exposure[0].file == folder / "a.fits"
    assert settings.exposure[0].resolving_power == folder / "r.txt"
    assert [words for words, _ in named_files(settings)] == [
        "[[exposure]] 1: file",
        "[[exposure]] 1: resolving_power",
        "[[template]] 1: file",
    ]


def test_files_are_looked_for_before_the_work(tmp_path):
    run = tmp_path / "run.toml"
    run.write_text(SMALL)
    with pytest.raises(SettingsError, match=r"\[\[exposure\]\] 1: file: no such file.*a\.fits"):
        load_settings(run)
    (tmp_path / "a.fits").mkdir()
    with pytest.raises(SettingsError, match="must name a file; got the folder"):
        load_settings(run)
    (tmp_path / "a.fits").rmdir()
    (tmp_path / "a.fits").touch()
    assert load_settings(run).exposure[0].file == tmp_path / "a.fits"
    run.write_text(SMALL + '[starlight]\nreference = "brighest"\n')
    with pytest.raises(SettingsError, match=r"\[starlight\].reference: no such file.*\"brightest\""):
        load_settings(run)


def test_a_run_file_that_is_not_text(tmp_path):
    run = tmp_path / "run.toml"
    run.write_bytes(b"[search]\n\xff\xfe\x00")
    with pytest.raises(SettingsError, match=r"not text.*0xff in line 2"):
        load_settings(run)


def test_digest_ignores_jobs_memory_and_paths_only():
    base = settings_sha256(parsed(SMALL))
    same = [
        SMALL + "[run]\njobs = 7\nmax_memory_gb = 3\n",
        SMALL.replace("a.fits", "/elsewhere/b.fits"),
        SMALL + "[starlight]\nknots = 40\n",
        SMALL + "t_eff = 1200\n",
    ]
    assert {settings_sha256(parsed(text)) for text in same} == {base}
    other = [
        SMALL + "[run]\nseed = 2\n",
        SMALL + "[starlight]\nknots = 41\n",
        SMALL + '[starlight]\nreference = "none"\n',
        SMALL + '[starlight]\nreference = "star.fits"\n',
        EXPOSURE + SMALL,
        EXPOSURE + "resolving_power = 4000\n" + SEARCH,
    ]
    digests = {settings_sha256(parsed(text)) for text in other}
    assert len(digests) == len(other)
    assert base not in digests


def test_written_run_file_reads_back_from_another_folder(tmp_path):
    everything = (
        '[target]\nname = "a \\"b\\" ü"\ncompanion_xy = [1.5, 2]\nmask_sources = [[1, 2, 3]]\n'
        '[[exposure]]\nfile = "in/a.fits"\nresolving_power = "r.txt"\norders = [0, 1]\n'
        'science_extension = "SCI"\n'
        "error_extension = 1\ntime = 2020-01-01T00:00:00\nmask_wavelength_um = [[2.0, 2.1]]\n"
        '[psf]\nfwhm_pixels = 2.2\n[starlight]\nreference = "none"\n' + SEARCH + "[run]\njobs = 3\n"
    )
    settings = parsed(everything, tmp_path)
    assert settings.exposure[0].time == "2020-01-01T00:00:00"
    out = tmp_path / "results" / "one"
    text = dump_toml(settings, relative_to=out)
    assert str(tmp_path) not in text
    assert parse_settings(text, base_dir=out) == settings
    assert parse_settings(dump_toml(settings), base_dir="/nowhere") == settings


def test_settings_are_frozen_and_strict():
    settings = parsed(SMALL)
    with pytest.raises(ValueError, match="frozen"):
        settings.run.jobs = 2
    assert settings.with_run(jobs=4).run.jobs == 4
    assert settings.with_run(jobs=None) == settings
    with pytest.raises(SettingsError, match=r"\[run\].jobs"):
        settings.with_run(jobs=0)
    assert isinstance(settings, Settings)
    assert settings.names == ("CO",)


def test_one_exposure_from_plain_values():
    exposure = parse_exposure({"file": "x.fits", "medium": "air", "orders": [1]}, base_dir="/data")
    assert exposure.file == Path(os.sep, "data", "x.fits")
    assert exposure.orders == (1,)
    with pytest.raises(SettingsError, match="did you mean medium"):
        parse_exposure({"file": "x.fits", "mediun": "air"})
