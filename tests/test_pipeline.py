"""The whole chain on scenes of known truth: signals come out as they were put in, noise does not."""

import json
from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits

from tests.small_scenes import chosen, cubes, scene, settings, templates
from xcorr.config import parse_settings
from xcorr.cube import Cube
from xcorr.errors import CoverageError, InputError, SettingsError
from xcorr.io.writing import write_cube
from xcorr.pipeline import run
from xcorr.simulate import Correlation
from xcorr.spectral import LsfOperator

BRIGHT = (("ideal_snr", 30.0), ("companion_velocity_km_s", 37.0))


def search(one, names=("A", "B"), *, data=None, maps=False, jobs=None, **changes):
    return run(
        settings(one, names, **changes),
        cubes=cubes(one) if data is None else data,
        templates=chosen(names),
        maps=maps,
        jobs=jobs,
    )


def codes(result):
    return {note.code for note in result.warnings}


@pytest.fixture(scope="module")
def bright():
    return scene(draw=BRIGHT)


@pytest.fixture(scope="module")
def answer(bright):
    return search(bright, ("full", "A", "B"), maps=True)


# ---------------------------------------------------------------- what was put in comes out


def test_the_injected_companion_is_recovered(bright, answer):
    full = answer.molecules[0]
    # one sigma of noise, the scatter of the null that calibrates (4 per cent), and the fitted PSF
    assert full.snr == pytest.approx(bright.truth["ideal_snr"], abs=4.0)
    assert full.snr_raw == pytest.approx(bright.truth["ideal_snr"], abs=3.0)
    assert full.velocity_km_s == pytest.approx(37.0, abs=3 * full.velocity_err_km_s)
    # amplitude of the full template = contrast; the fitted PSF is good to some per cent
    assert full.amplitude == pytest.approx(bright.truth["contrast"], abs=3 * full.amplitude_err, rel=0.06)
    assert full.amplitude / full.amplitude_err == pytest.approx(full.snr, rel=0.02)
    assert full.amplitude_unit == "star"
    assert [m.verdict for m in answer.molecules] == ["detected"] * 3
    assert [m.amplitude_unit for m in answer.molecules[1:]] == ["template"] * 2
    assert 0.8 < full.efficiency < 1.15


def test_conditional_values_rest_on_the_joint_fit(answer):
    """A and B share no lines: fitted together each is at least as significant as alone."""
    for molecule in answer.molecules[1:]:
        assert molecule.snr_conditional > molecule.snr - 0.5
        assert molecule.amplitude == pytest.approx(answer.molecules[0].amplitude, rel=0.15)


def test_a_molecule_that_is_not_there_is_not_found():
    """B absent: its conditional S/N is noise although A, with the same continuum, is strong."""
    full, b = templates()["full"], templates()["B"]
    wave = full.wavelength_um
    only_a = full.flux - b.flux  # continuum x A alone
    from xcorr.simulate import SceneFactory

    one = SceneFactory(scene().settings, (wave, only_a)).draw(**dict(BRIGHT))
    a = replace(templates()["A"], flux=only_a - (1.0 + 1.5 * (wave - 2.3)), reference_flux=only_a)
    result = run(settings(one), cubes=cubes(one), templates=(a, b), maps=False)
    found, absent = result.molecules
    assert found.verdict == "detected"
    at = int(np.argmin(np.abs(result.arrays["velocity_km_s"] - 37.0)))
    assert abs(result.arrays["conditional_curve"][1, at]) < 4.0
    assert absent.verdict != "detected"


@pytest.mark.parametrize("frame", ["observatory", "barycentric"])
@pytest.mark.parametrize("barycentric", [25.0, -25.0])
def test_shift_in_is_shift_out(frame, barycentric):
    """With the Earth's lines in the data, which sit at rest in one frame and have moved in the other."""
    one = scene(
        draw=(("ideal_snr", 40.0), ("companion_velocity_km_s", 37.0)),
        transmission="shipped",
        barycentric_velocity_km_s=(barycentric,),
        frame=frame,
    )
    result = search(one, ("full",), velocity=(-200, 200, 5))
    full = result.molecules[0]
    assert full.velocity_err_km_s < 3.0
    assert full.velocity_km_s == pytest.approx(37.0, abs=3.5 * full.velocity_err_km_s)
    assert full.snr > 30
    # the telluric fit found the atmosphere where that frame has it
    telluric = result.arrays["exposure/0/telluric"]
    assert telluric[2] == pytest.approx(0.0, abs=1.0)


def test_the_wrong_sign_is_noticed():
    """Control: with the sign of the barycentric velocity turned, the answer is off by twice that."""
    one = scene(draw=BRIGHT, barycentric_velocity_km_s=(25.0,))
    wrong = [cube.with_changes(barycentric_velocity_km_s=-25.0) for cube in cubes(one)]
    full = search(one, ("full",), data=wrong, velocity=(-200, 200, 5)).molecules[0]
    assert full.velocity_km_s == pytest.approx(37.0 - 50.0, abs=4 * full.velocity_err_km_s)


def test_without_a_barycentric_velocity_the_answer_says_so():
    one = scene(draw=BRIGHT, barycentric_velocity_km_s=(25.0,))
    unknown = [cube.with_changes(barycentric_velocity_km_s=None) for cube in cubes(one)]
    result = search(one, ("full",), data=unknown, velocity=(-200, 200, 5))
    assert "barycentric-unknown" in codes(result)
    assert result.molecules[0].velocity_km_s == pytest.approx(
        12.0, abs=4 * result.molecules[0].velocity_err_km_s
    )


# ---------------------------------------------------------------- several exposures


def test_equal_exposures_gain_the_root_of_their_number(bright):
    twice = scene(draw=BRIGHT, n_exposures=2)
    same = cubes(bright) * 2
    both = run(settings(twice), cubes=same, templates=chosen(), maps=False)
    one = search(bright)
    # the same noise twice; the second exposure's star is fitted from another guess: 1e-2 pixels
    expected = np.sqrt(2.0) * one.arrays["snr_raw_curve"]
    assert both.arrays["snr_raw_curve"] == pytest.approx(expected, abs=0.15)
    assert both.arrays["target/info"] == pytest.approx(2 * one.arrays["target/info"], rel=5e-3)
    assert both.molecules[0].amplitude == pytest.approx(one.molecules[0].amplitude, rel=5e-3)


def test_independent_exposures_reach_the_limit_of_all_together():
    one = scene(
        draw=BRIGHT,
        n_exposures=2,
        rotation_deg=(0.0, 40.0),
        dither_xy_pixels=((0.0, 0.0), (0.6, -0.4)),
        barycentric_velocity_km_s=(14.0, -9.0),
    )
    result = search(one, ("full",), velocity=(-300, 300, 10))
    full = result.molecules[0]
    assert one.truth["ideal_snr"] == pytest.approx(30.0, rel=1e-3)
    assert full.snr_raw == pytest.approx(30.0, abs=3.5)
    assert full.velocity_km_s == pytest.approx(37.0, abs=3 * full.velocity_err_km_s)
    parts = result.arrays["exposure/0/target_info"], result.arrays["exposure/1/target_info"]
    assert result.arrays["target/info"] == pytest.approx(parts[0] + parts[1], rel=1e-9)
    # the second exposure was summed where the sky turned the companion to
    truth = one.exposures[1].companion_xy.mean(axis=0)
    assert result.arrays["exposure/1/companion_xy"] == pytest.approx(truth, abs=0.05)
    # control: without a WCS the rotation is not known and half of the signal is lost
    blind = [cube.with_changes(celestial_header=None) for cube in cubes(one)]
    lost = search(one, ("full",), data=blind, velocity=(-300, 300, 10))
    assert lost.molecules[0].snr_raw < 0.85 * full.snr_raw


def test_a_position_given_for_an_exposure_overrules_the_map():
    one = scene(draw=BRIGHT, n_exposures=2, rotation_deg=(0.0, 40.0))
    blind = [cube.with_changes(celestial_header=None) for cube in cubes(one)]
    second = one.exposures[1].companion_xy.mean(axis=0)
    plain = settings(one, ("full",))
    entry = plain.exposure[1].model_copy(update={"companion_xy": tuple(second)})
    told = plain.model_copy(update={"exposure": (plain.exposure[0], entry)})
    result = run(told, cubes=blind, templates=chosen(("full",)), maps=False)
    assert result.molecules[0].snr_raw == pytest.approx(30.0, abs=3.5)


def test_an_exposure_that_misses_the_companion_takes_nothing_away():
    """A large dither leaves the companion outside the second field: the answer is that of the first."""
    one = scene(draw=BRIGHT, n_exposures=2, dither_xy_pixels=((0.0, 0.0), (5.0, 3.0)))
    assert one.exposures[1].companion_xy[0, 0] > 16.5
    plain = settings(one)
    place = tuple(one.exposures[1].companion_xy.mean(axis=0))
    entry = plain.exposure[1].model_copy(update={"companion_xy": place})
    told = plain.model_copy(update={"exposure": (plain.exposure[0], entry)})
    with pytest.raises(SettingsError, match="outside the field of exposure 2"):
        run(told, cubes=cubes(one), templates=chosen(), maps=False)
    result = search(one, ("full",))
    parts = [result.arrays[f"exposure/{i}/target_info"] for i in range(2)]
    assert np.all(parts[1] < 0.05 * parts[0])
    assert result.molecules[0].verdict == "detected"


# ---------------------------------------------------------------- where the companion is


def test_offset_on_the_sky_equals_the_position_in_pixels(bright):
    from xcorr.geometry import plate_matrix

    parts = bright.exposures[0]
    pixels = parts.companion_xy.mean(axis=0) - parts.star_xy.mean(axis=0)
    east, north = plate_matrix(bright.cubes[0].celestial_header) @ pixels
    by_offset = search(bright, target=f"companion_offset_arcsec = [{east:.9f}, {north:.9f}]")
    by_pixels = search(bright)
    # counted from the fitted star, good to 0.02 pixels
    assert by_offset.molecules[0].position_xy == pytest.approx(by_pixels.molecules[0].position_xy, abs=0.03)
    assert by_offset.molecules[0].snr == pytest.approx(by_pixels.molecules[0].snr, rel=0.02)


def test_blind_search_finds_it(bright):
    result = search(bright, target="name = 'blind'")
    assert "blind-search" in codes(result)
    truth = bright.exposures[0].companion_xy.mean(axis=0)
    assert np.hypot(*np.subtract(result.molecules[0].position_xy, truth)) <= 1.0
    assert result.molecules[0].verdict == "detected"
    # every position counts as a trial
    given = search(bright).molecules[0]
    assert result.molecules[0].p_global > result.molecules[0].p_local * 100
    assert given.p_global < result.molecules[0].p_global


def test_blind_search_of_noise_finds_nothing():
    result = search(scene(draw=(("seed", 3),)), target="name = 'blind'")
    assert {m.verdict for m in result.molecules} == {"not detected"}


def test_map_peaks_at_the_companion(bright, answer):
    image = answer.arrays["snr_map"][0]
    assert image.shape == (16, 16)
    y, x = np.unravel_index(np.nanargmax(image), image.shape)
    truth = bright.exposures[0].companion_xy.mean(axis=0)
    assert np.hypot(x - truth[0], y - truth[1]) < 1.0
    assert np.nanmax(image) == pytest.approx(answer.molecules[0].snr, rel=0.1)
    rows, columns = np.indices(image.shape)
    far = np.hypot(columns - truth[0], rows - truth[1]) > 6
    assert np.nanstd(image[far]) < 1.5


def test_companion_outside_the_field_is_refused(bright):
    with pytest.raises(SettingsError, match="outside the field") as caught:
        search(bright, target="companion_xy = [40.0, 3.0]")
    assert "zero-based" in caught.value.do


def test_companion_at_the_edge_is_searched_with_a_note():
    one = scene(draw=BRIGHT, companion_offset_xy=(7.4, -3.0))
    result = search(one, ("full",))
    assert "companion-at-edge" in codes(result)
    assert result.molecules[0].verdict == "detected"
    assert result.molecules[0].snr_raw == pytest.approx(30.0, abs=3.5)  # the limit knows the edge too
    assert result.molecules[0].extra["psf_captured"] < 0.75


def test_companion_in_the_core_is_searched_with_a_note():
    result = search(scene(draw=BRIGHT, companion_offset_xy=(1.2, -0.5)))
    assert "companion-in-core" in codes(result)


def test_star_outside_the_field_with_a_given_width():
    one = scene(draw=BRIGHT, star_xy=(-7.0, 8.0), companion_offset_xy=(14.0, 0.0))
    with pytest.raises(InputError, match="star lies outside the field") as caught:
        search(one, ("full",))
    assert "fwhm_pixels" in caught.value.do
    result = search(one, ("full",), extra="[psf]\nfwhm_pixels = 2.4\n")
    assert "star-off-field" in codes(result)
    assert result.molecules[0].verdict == "detected"
    assert result.molecules[0].amplitude_unit == "template"  # no star flux to refer to
    assert result.molecules[0].snr_raw == pytest.approx(30.0, abs=3.5)


def test_no_usable_spaxel_under_the_companion(bright):
    cube, (x, y) = cubes(bright)[0], bright.exposures[0].companion_xy.mean(axis=0)
    rows, columns = np.indices(cube.shape[1:])
    mask = cube.mask | (np.hypot(columns - x, rows - y) < 4.2)
    with pytest.raises(SettingsError, match="no usable spaxel under the companion"):
        search(bright, data=[cube.with_changes(mask=mask)])


# ---------------------------------------------------------------- files of PSF and star


def test_a_psf_image_serves_as_well_as_the_fitted_star(bright, tmp_path):
    """A well sampled noiseless image of the star, off its pixel's centre, as [psf].file."""
    image = bright.exposures[0].star_psf.mean(axis=0)
    fits.PrimaryHDU(image.astype(np.float32)).writeto(tmp_path / "psf.fits")
    result = search(bright, ("full",), extra=f"[psf]\nfile = '{tmp_path / 'psf.fits'}'\n")
    assert result.molecules[0].snr_raw == pytest.approx(30.0, abs=3.5)
    assert result.inputs[-2].file == "psf.fits"
    assert len(result.inputs[-2].sha256) == 64


def test_the_stars_spectrum_from_a_file(bright, tmp_path):
    """On a finer grid than the cube's; the amplitude then rests on the file's flux."""
    wave = np.linspace(2.24, 2.39, 1500)
    flux = np.interp(wave, bright.cubes[0].wavelength_um, bright.exposures[0].star_spectrum)
    table = "# medium = vacuum\n# wavelength_um flux\n" + "\n".join(
        f"{w:.7f} {f:.6e}" for w, f in zip(wave, flux, strict=True)
    )
    (tmp_path / "star.txt").write_text(table)
    result = search(bright, ("full",), extra=f"[starlight]\nreference = '{tmp_path / 'star.txt'}'\n")
    assert result.molecules[0].snr_raw == pytest.approx(30.0, abs=3.5)
    assert "star.txt" in [item.file for item in result.inputs]
    short = wave > 2.34
    (tmp_path / "short.txt").write_text(
        "# medium = vacuum\n# wavelength_um flux\n"
        + "\n".join(f"{w:.7f} {f:.6e}" for w, f in zip(wave[short], flux[short], strict=True))
    )
    with pytest.raises(InputError, match="covers too few channels"):
        search(bright, ("full",), extra=f"[starlight]\nreference = '{tmp_path / 'short.txt'}'\n")


# ---------------------------------------------------------------- errors of the data


@pytest.mark.parametrize("plane", ["none", "noisy"])
def test_poor_error_planes_cost_little(bright, plane):
    one = scene(draw=BRIGHT, error_plane=plane)
    assert (one.cubes[0].variance is None) == (plane == "none")
    result = search(one, ("full",))
    assert result.molecules[0].snr == pytest.approx(search(bright, ("full",)).molecules[0].snr, rel=0.1)
    # raw S/N is on the claimed scale: variances from the scatter are right to a few per cent
    assert result.molecules[0].snr_raw == pytest.approx(30.0, abs=3.5)
    audit = result.arrays["exposure/0/noise_audit"]
    assert audit[0] == pytest.approx(1.0, abs=0.1)


def test_wrong_claims_do_not_reach_the_calibrated_value(bright):
    """Errors claimed two times too small double the raw S/N and leave the calibrated one."""
    cube = cubes(bright)[0]
    optimistic = cube.with_changes(variance=cube.variance / np.float32(4))
    right, wrong = search(bright, ("full",)), search(bright, ("full",), data=[optimistic])
    assert wrong.molecules[0].snr_raw == pytest.approx(2 * right.molecules[0].snr_raw, rel=0.01)
    assert wrong.molecules[0].snr == pytest.approx(right.molecules[0].snr, rel=0.01)
    assert wrong.arrays["exposure/0/noise_audit"][0] == pytest.approx(2.0, rel=0.1)
    assert "errors" in " ".join(note.message for note in wrong.warnings)


def test_what_cannot_be_searched_says_why(bright):
    cube = cubes(bright)[0]
    with pytest.raises(InputError, match="resolving power"):
        search(bright, data=[cube.with_changes(resolving_power=None)])
    with pytest.raises(SettingsError, match="one cube for each"):
        search(bright, data=[cube, cube])
    with pytest.raises(InputError, match="usable"):
        search(bright, data=[cube.with_changes(mask=np.ones(cube.shape, bool))])
    far = replace(templates()["A"], covered=templates()["A"].wavelength_um > 2.36)
    with pytest.raises(CoverageError, match="covers too few channels") as caught:
        run(settings(bright, ("A",)), cubes=[cube], templates=[far], maps=False)
    assert "[[exposure]]" in caught.value.do


# ---------------------------------------------------------------- noise alone


def null_curves(seeds, **changes):
    """Calibrated and raw S/N at the companion's place without a companion, at velocities 120 km/s apart."""
    found = [search(scene(draw=(("seed", seed),), **changes)) for seed in seeds]
    apart = slice(0, None, 6)
    calibrated = np.concatenate([r.arrays["snr_curve"][:, apart].ravel() for r in found])
    raw = np.concatenate([r.arrays["snr_raw_curve"][:, apart].ravel() for r in found])
    return found, calibrated, raw


def test_noise_alone_is_calibrated_and_not_detected():
    """24 scenes x 2 templates x 11 nearly independent velocities."""
    found, calibrated, raw = null_curves(range(100, 124))
    n = calibrated.size
    assert n == 528
    # four standard errors; the calibration of each scene adds 1 / sqrt(2 nu_eff) of 24: 1 per cent
    assert calibrated.mean() == pytest.approx(0.0, abs=4 / np.sqrt(n))
    assert calibrated.std() == pytest.approx(1.0, abs=4 / np.sqrt(2 * n))
    assert raw.std() == pytest.approx(1.0, abs=4 / np.sqrt(2 * n))  # white noise, true errors
    verdicts = [m.verdict for r in found for m in r.molecules]
    assert set(verdicts) == {"not detected"}  # 48 searches at 1.35e-3
    p = np.sort([m.p_global for r in found for m in r.molecules])
    # global p is conservative: at most uniform
    assert np.mean(p < 0.2) < 0.2 + 4 * np.sqrt(0.2 * 0.8 / 48)


def test_correlated_noise_is_calibrated_where_raw_values_are_not():
    """Control: correlation between spaxels makes raw S/N too wide, the nulls of the same footprint correct it."""
    correlation = Correlation(rho_channel=0.13, rho_y=0.29, rho_x=0.12)
    _, calibrated, raw = null_curves(range(200, 216), correlation=correlation)
    n = calibrated.size
    assert raw.std() > 1.25
    assert calibrated.std() == pytest.approx(1.0, abs=4 / np.sqrt(2 * n) + 0.02)
    assert calibrated.mean() == pytest.approx(0.0, abs=4 / np.sqrt(n))


# ---------------------------------------------------------------- extracted spectra


def extracted(snr, seed=1, n_wave=600):
    """A companion's spectrum alone, with noise of a hundredth; `snr` scales its lines."""
    wave = np.linspace(2.25, 2.38, n_wave)
    full = templates()["full"]
    operator = LsfOperator.build(full.wavelength_um, wave, np.full(n_wave, 4000.0))
    model = operator.apply(full.flux)
    smooth = np.poly1d(np.polyfit(wave - 2.3, model, 5))(wave - 2.3)
    lines = model - smooth
    sigma = 0.01
    scale = snr * sigma / np.sqrt(np.sum(lines**2))
    noise = sigma * np.random.default_rng(seed).standard_normal(n_wave)
    data = (smooth + scale * lines + noise).astype(np.float32)[:, None, None]
    return Cube(
        data=data,
        variance=np.full_like(data, sigma**2),
        mask=np.zeros(data.shape, bool),
        wavelength_um=wave,
        resolving_power=np.full(n_wave, 4000.0),
        barycentric_velocity_km_s=0.0,
        telluric_corrected=True,
    )


ONE_DIMENSION = """
[[exposure]]
file = "spectrum"
[starlight]
reference = "none"
[search]
velocity_km_s = [-600, 600, 20]
[[template]]
name = "full"
file = "template"
"""


def test_an_extracted_spectrum_is_searched_with_its_far_velocities_as_null():
    result = run(parse_settings(ONE_DIMENSION), cubes=[extracted(15.0)], templates=chosen(("full",)))
    full = result.molecules[0]
    assert "null-from-velocities" in codes(result)
    assert full.velocity_km_s == pytest.approx(0.0, abs=4 * full.velocity_err_km_s)
    assert 8 < full.snr < 17  # 40 splines take a part of the lines
    assert full.position_xy is None
    assert full.verdict in ("detected", "evidence")


def test_extracted_noise_is_not_detected():
    values = []
    for seed in range(12):
        result = run(parse_settings(ONE_DIMENSION), cubes=[extracted(0.0, seed)], templates=chosen(("full",)))
        assert result.molecules[0].verdict == "not detected"
        values.append(result.arrays["snr_curve"][0, ::6])
    n = np.size(values)
    assert np.std(values) == pytest.approx(1.0, abs=4 / np.sqrt(2 * n) + 0.05)
    assert np.mean(values) == pytest.approx(0.0, abs=4 / np.sqrt(n))


def test_cubes_and_spectra_do_not_mix(bright):
    two = scene(draw=BRIGHT, n_exposures=2)
    with pytest.raises(InputError, match="all cubes or all extracted spectra"):
        run(settings(two), cubes=[cubes(bright)[0], extracted(10.0)], templates=chosen(), maps=False)


def test_an_extracted_spectrum_needs_a_star_or_none():
    text = ONE_DIMENSION.replace('reference = "none"', 'reference = "brightest"')
    with pytest.raises(InputError, match="no spaxels to take the star from"):
        run(parse_settings(text), cubes=[extracted(10.0)], templates=chosen(("full",)))


# ---------------------------------------------------------------- repeatable, and independent of the truth


def assert_same(one, two, exact=True):
    assert one.arrays.keys() == two.arrays.keys()
    for name, array in one.arrays.items():
        if array.dtype == object or not exact:
            continue
        assert np.array_equal(array, two.arrays[name], equal_nan=True), name
    for left, right in zip(one.molecules, two.molecules, strict=True):
        assert left == right or exact is False


def test_jobs_do_not_change_a_bit(bright):
    one, two = (search(bright, maps=True, jobs=jobs) for jobs in (1, 2))
    assert_same(one, two)


def test_files_and_memory_agree_and_the_truth_is_never_read(bright, tmp_path):
    for layout in ("hdf5", "um-sigma"):
        path = tmp_path / ("cube.h5" if layout == "hdf5" else "cube.fits")
        cube = cubes(bright)[0]
        write_cube(path, cube, layout=layout)
        told = settings(bright)
        entry = told.exposure[0].model_copy(
            update={"file": path, "telluric_corrected": True, "resolving_power": 4000.0}
        )
        told = told.model_copy(update={"exposure": (entry,)})
        found = run(told, templates=chosen())
        expected = search(bright, maps=True)
        if layout == "hdf5":
            arrays = (found.arrays[name] for name in ("snr_curve", "snr_map", "target/info"))
            for mine, name in zip(arrays, ("snr_curve", "snr_map", "target/info"), strict=True):
                assert np.array_equal(mine, expected.arrays[name], equal_nan=True)
        for left, right in zip(found.molecules, expected.molecules, strict=True):
            # sigma in the file, variance in memory: rounding of float32
            assert left.snr == pytest.approx(right.snr, rel=1e-3)
            assert left.velocity_km_s == pytest.approx(right.velocity_km_s, abs=0.05)
    lie = dict(bright.truth) | {"contrast": 0.0, "velocity_km_s": 999.0}
    (tmp_path / "truth.json").write_text(json.dumps(lie))
    assert_same(found, run(told, templates=chosen()))


def test_inputs_are_not_changed(bright):
    """Cubes are read-only: a run that wrote to them would fail."""
    cube = cubes(bright)[0]
    before = cube.data.copy()
    search(bright)
    assert np.array_equal(cube.data, before)


def test_progress_is_told(bright):
    calls = []
    run(settings(bright), cubes=cubes(bright), templates=chosen(), progress=lambda *args: calls.append(args))
    assert calls[-1] == (1, 1, "done")
    assert any("exposure 1" in what for _, _, what in calls)
    assert all(0 <= done <= total for done, total, _ in calls)


def test_noise_beyond_the_claim_in_the_companions_ring_is_no_signal():
    # residuals of speckles: 1.6 times the claimed noise at the separation of the target, which the target and its
    # nulls must meet with the same weights (with weights of one under the target the std was 1.57)
    values, verdicts = [], []
    for seed in range(10):
        one = scene(draw=(("contrast", 0.0), ("seed", seed)))
        cube = cubes(one)[0]
        star = one.exposures[0].star_xy.mean(axis=0)
        place = tuple(one.exposures[0].companion_xy.mean(axis=0))
        rows, columns = np.indices(cube.shape[1:])
        separation = np.hypot(columns - star[0], rows - star[1])
        ring = np.abs(separation - np.hypot(place[0] - star[0], place[1] - star[1])) < 3.0
        extra = np.sqrt(1.6**2 - 1.0) * np.sqrt(cube.variance) * ring
        noise = np.random.default_rng(seed).standard_normal(cube.shape)
        noisy = cube.with_changes(data=(cube.data + extra * noise).astype(np.float32))
        result = run(settings(one), cubes=[noisy], templates=chosen(), maps=False)
        values.append(result.arrays["snr_curve"][:, ::10].ravel())
        verdicts += [row.verdict for row in result.molecules]
    assert 0.75 < np.std(values) < 1.3
    assert set(verdicts) == {"not detected"}
