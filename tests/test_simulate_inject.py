"""Companions injected into cubes: flux, velocity, position, noise and the S/N asked for."""

import numpy as np
import pytest

import xcorr
from xcorr.cube import Cube
from xcorr.errors import CoverageError, InputError
from xcorr.simulate import Correlation, SceneFactory, SceneSettings, SignalModel, information, inject
from xcorr.template import Template
from xcorr.units import LIGHT_KM_S

WAVE = np.linspace(2.25, 2.38, 400)


def template(kind="lines"):
    wave = np.exp(np.arange(np.log(2.22), np.log(2.41), 1 / 200_000))
    if kind == "line":
        flux = np.exp(-0.5 * ((wave - 2.3) / 2e-4) ** 2)
    else:
        rng, flux = np.random.default_rng(5), np.ones(wave.size)
        for centre in rng.uniform(2.22, 2.41, 120):
            flux *= 1.0 - 0.7 * np.exp(-0.5 * ((wave - centre) / 3e-5) ** 2)
    return Template("invented", wave, flux)


def empty_cube(nx=15, ny=13, **changes):
    shape = (WAVE.size, ny, nx)
    base = {
        "data": np.zeros(shape, np.float32),
        "variance": np.full(shape, 2.0, np.float32),
        "mask": np.zeros(shape, bool),
        "wavelength_um": WAVE.copy(),
        "resolving_power": 4000.0,
        "barycentric_velocity_km_s": 0.0,
    }
    return Cube(**(base | changes))


def test_public_name():
    assert xcorr.inject is inject


def test_amplitude_is_the_mean_flux_and_the_position_the_centroid():
    cube = empty_cube()
    after = inject(cube, template(), position_xy=(6.3, 5.8), amplitude=7.0, psf_fwhm_pixels=2.2)
    added = after.data.astype(float)
    assert added.sum(axis=(1, 2)).mean() == pytest.approx(7.0, rel=1e-4)
    y, x = np.mgrid[0:13, 0:15]
    assert (added * x).sum() / added.sum() == pytest.approx(6.3, abs=2e-3)
    assert (added * y).sum() / added.sum() == pytest.approx(5.8, abs=2e-3)
    assert not cube.data.any()
    assert after.notes[-1].code == "injected-companion"


def test_file_units_are_scaled_as_the_cube_is():
    plain = inject(empty_cube(), template(), position_xy=(6, 6), amplitude=7.0, psf_fwhm_pixels=2.2)
    scaled = inject(
        empty_cube(scale_exponent=3), template(), position_xy=(6, 6), amplitude=7.0e-3, psf_fwhm_pixels=2.2
    )  # fmt: skip
    assert np.allclose(scaled.data, plain.data, rtol=1e-6)


@pytest.mark.parametrize("frame", ["observatory", "barycentric"])
def test_velocity_in_is_velocity_out(frame):
    cube = empty_cube(frame=frame, barycentric_velocity_km_s=25.0)
    after = inject(
        cube, template("line"), position_xy=(6, 6), velocity_km_s=90.0, amplitude=1.0, psf_fwhm_pixels=2.0
    )
    line = after.data.sum(axis=(1, 2), dtype=float)
    found = (line * WAVE).sum() / line.sum() / 2.3
    expected = 1.0 + 90.0135 / LIGHT_KM_S
    if frame == "observatory":
        expected /= 1.0 + 25.0 / LIGHT_KM_S
    assert found == pytest.approx(expected, abs=0.05 / LIGHT_KM_S)


def test_equals_the_scene_simulator():
    """A scene with a companion, and the same scene without plus an injected one."""
    t = template()
    settings = SceneSettings(
        wavelength_range_um=(2.25, 2.38), n_wave=400, nx=15, ny=13, transmission="synthetic", contrast=1e-2,
        halo_fraction=0.0, n_speckles=0, drift_xy_pixels=(0.0, 0.0), companion_velocity_km_s=-33.0,
        barycentric_velocity_km_s=(11.0,), background_electrons=1.0, read_noise_electrons=0.0,
    )  # fmt: skip
    factory = SceneFactory(settings, t)
    wanted = factory.draw().exposures[0]
    air = factory._render._grid, factory._render._transmission
    got = inject(
        empty_cube(barycentric_velocity_km_s=11.0), t, position_xy=wanted.companion_xy, velocity_km_s=-33.0,
        amplitude=1e-2, star_flux=1e6, psf_fwhm_pixels=settings.psf_fwhm_pixels, transmission=air,
    )  # fmt: skip
    # Another grid of the same step: unresolved lines differ by 1e-3 of the peak at most.
    assert np.abs(got.data - wanted.companion).max() < 1e-3 * wanted.companion.max()


def test_snr_asked_for_is_the_information_limit():
    cube, t = empty_cube(), template()
    flat = Template("flat", t.wavelength_um, np.ones(t.flux.size))
    quiet = inject(cube, t, position_xy=(6.3, 5.8), snr=12.0, psf_fwhm_pixels=2.2)
    model = SignalModel(
        signal=quiet.data, variance=cube.variance, good=~cube.mask, reference=np.ones(WAVE.size),
        continuum=inject(cube, flat, position_xy=(6.3, 5.8),
                         amplitude=1.0, psf_fwhm_pixels=2.2).data,
        correlation=Correlation(),
    )  # fmt: skip
    assert np.sqrt(information(model)) == pytest.approx(12.0, rel=1e-3)


def test_photon_noise_enters_data_and_variance():
    cube = empty_cube(nx=40, ny=40, gain_e_per_unit=4.0)
    kwargs = {"position_xy": (20, 20), "amplitude": 5e4, "psf_fwhm_pixels": 12.0}
    noisy = inject(cube, template(), seed=3, **kwargs)
    quiet = inject(cube, template(), photon_noise=False, **kwargs)
    extra = noisy.variance - cube.variance
    assert np.allclose(extra, quiet.data / 4.0, rtol=1e-4, atol=1e-4)
    bright = extra > 1.0
    pull = (noisy.data - quiet.data)[bright] / np.sqrt(extra[bright])
    assert abs(pull.std() - 1.0) < 4.0 / np.sqrt(2 * bright.sum())
    assert np.array_equal(noisy.data, inject(cube, template(), seed=3, **kwargs).data)


def test_psf_image_is_moved_with_its_flux():
    y, x = np.mgrid[-8:9, -8:9]
    psf = np.exp(-0.5 * (x**2 + y**2) / 1.5**2)
    psf /= psf.sum()
    cube = empty_cube(nx=21, ny=21)
    added = inject(cube, template(), position_xy=(9.4, 10.7), amplitude=1.0, psf=psf).data.sum(
        axis=0, dtype=float
    )
    rows, columns = np.mgrid[0:21, 0:21]
    # Cubic splines of a profile sampled at 1.5 pixels per sigma.
    assert added.sum() == pytest.approx(WAVE.size, rel=1e-3)
    assert (added * columns).sum() / added.sum() == pytest.approx(9.4, abs=0.01)
    assert (added * rows).sum() / added.sum() == pytest.approx(10.7, abs=0.01)


def test_spectrum_with_several_orders():
    wave = np.concatenate([np.linspace(2.25, 2.30, 150), np.linspace(2.29, 2.38, 250)])
    order = np.repeat([0, 1], [150, 250]).astype(np.int16)
    cube = empty_cube(nx=1, ny=1, wavelength_um=wave, order=order)
    got = inject(cube, template(), amplitude=3.0).data[:, 0, 0]
    assert got.mean() == pytest.approx(3.0, rel=1e-5)
    both = slice(130, 150), (wave > 2.293) & (wave < 2.2995) & (order == 1)
    # The overlap tells the same spectrum twice, but for the other channel width.
    assert got[both[0]].mean() == pytest.approx(got[both[1]].mean(), rel=0.05)


def test_masked_samples_stay_empty_and_uncovered_channels_are_left_alone():
    mask = np.zeros((WAVE.size, 13, 15), bool)
    mask[100] = True
    t = template()
    short = Template("short", t.wavelength_um[t.wavelength_um < 2.35], t.flux[t.wavelength_um < 2.35])
    got = inject(empty_cube(mask=mask), short, position_xy=(6, 6), amplitude=2.0, psf_fwhm_pixels=2.0)
    assert not got.data[100].any()
    assert not got.data[WAVE > 2.352].any()
    assert got.data[200].any()


def test_real_cube_takes_an_injection(reference_data):
    """kmos_yj_faint.fits: real noise, NaN border, no star (reference none)."""
    from astropy.io import fits

    with fits.open(reference_data / "cubes" / "kmos_yj_faint.fits") as file:
        data, noise = (np.array(file[k].data, np.float64) for k in (1, 2))
        header = file[1].header
        wave = header["CRVAL3"] + (np.arange(data.shape[0]) + 1 - header["CRPIX3"]) * header["CDELT3"]
    mask = ~np.isfinite(data) | ~np.isfinite(noise) | ~(noise > 0)
    scale = 1.0 / np.median(noise[~mask])
    cube = Cube(
        data=np.where(mask, 0, data * scale).astype(np.float32),
        variance=np.where(mask, 1, (noise * scale) ** 2).astype(np.float32),
        mask=mask, wavelength_um=wave, resolving_power=3400.0, barycentric_velocity_km_s=0.0,
    )  # fmt: skip
    grid = np.exp(np.arange(np.log(0.98), np.log(1.38), 1 / 200_000))
    flux = 1.0 + 0.3 * np.sin(grid * 3e4) * (1.0 + 0.2 * np.sin(grid * 210.0))
    after = inject(
        cube, Template("invented", grid, flux), position_xy=(7.0, 7.0), snr=12.0, psf_fwhm_pixels=3.5
    )
    added = (after.data - cube.data).astype(float)
    # Raw s'Ws exceeds the square of the S/N, which is what is left beside the columns.
    assert np.sqrt((added**2 / cube.variance).sum()) > 12.0
    assert not added[cube.mask].any()


@pytest.mark.parametrize(
    ("changes", "error", "words"),
    [
        ({"amplitude": None}, InputError, "either amplitude or snr"),
        ({"psf_fwhm_pixels": None}, InputError, "either psf"),
        ({"position_xy": None}, InputError, "position"),
        ({"position_xy": (40.0, 2.0)}, CoverageError, "outside the field"),
        ({"photon_noise": True}, InputError, "gain"),
        ({"resolving_power": 0.0}, InputError, "resolving power"),
    ],
)
def test_wrong_arguments_are_named(changes, error, words):
    base = {"position_xy": (6, 6), "amplitude": 1.0, "psf_fwhm_pixels": 2.0}
    with pytest.raises(error, match=words):
        inject(empty_cube(), template(), **(base | changes))


def test_template_elsewhere_is_refused():
    t = template()
    far = Template("far", t.wavelength_um * 2.0, t.flux)
    with pytest.raises(CoverageError, match="fewer than half"):
        inject(empty_cube(), far, position_xy=(6, 6), amplitude=1.0, psf_fwhm_pixels=2.0)
