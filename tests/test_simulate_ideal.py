"""The information limit against dense matrices written out in full."""

import numpy as np
import pytest
from scipy.interpolate import BSpline

from xcorr.simulate import Correlation, SceneFactory, SceneSettings, SignalModel, ideal_snr, information

N_WAVE, NY, NX = 90, 4, 5
CORRELATED = Correlation(rho_channel=0.35, slow_fraction=0.3, slow_scale_channels=8.0, rho_y=0.29, rho_x=0.12)


def tiny_model(correlation=None, bad_fraction=0.0, seed=4):
    rng = np.random.default_rng(seed)
    wave = np.arange(N_WAVE)
    reference = 50.0 * (1.0 + 0.3 * np.sin(wave / 15.0)) * np.exp(-rng.exponential(0.2, N_WAVE))
    y, x = np.mgrid[0:NY, 0:NX]
    # A footprint without steep wings, so that no spaxel may be neglected.
    image = np.exp(-0.15 * ((y - 1.3) ** 2 + (x - 2.2) ** 2)) * (1.0 + 0.002 * wave[:, None, None])
    lines = 1.0 - 0.5 * rng.random(N_WAVE)
    return SignalModel(
        signal=image * lines[:, None, None],
        variance=rng.uniform(0.5, 4.0, (N_WAVE, NY, NX)),
        good=rng.random((N_WAVE, NY, NX)) >= bad_fraction,
        reference=reference,
        # Telluric lines the star's spectrum does not share, so that the dense columns are well conditioned.
        continuum=image * (reference / 50.0 * np.exp(-rng.exponential(0.1, N_WAVE)))[:, None, None],
        correlation=correlation or Correlation(),
    )


def dense_columns(model, knots, companion_knots):
    """Every nuisance column over all samples, order (wave, y, x)."""

    def splines(count):
        inner = np.linspace(0, N_WAVE - 1, count - 2)
        t = np.r_[[inner[0]] * 3, inner, [inner[-1]] * 3]
        return np.column_stack([BSpline(t, np.eye(count)[k], 3)(np.arange(N_WAVE)) for k in range(count)])

    columns = []
    for spaxel in range(NY * NX):
        for spline in splines(knots).T:
            column = np.zeros((N_WAVE, NY * NX))
            column[:, spaxel] = spline * model.reference
            columns.append(column.ravel())
    columns += [(model.continuum * s[:, None, None]).ravel() for s in splines(companion_knots).T]
    return np.column_stack(columns)


def dense_covariance(model):
    c = model.correlation
    wave, y, x = np.meshgrid(*(np.arange(n) for n in (N_WAVE, NY, NX)), indexing="ij")
    dw, dy, dx = (np.abs(np.subtract.outer(q.ravel(), q.ravel())) for q in (wave, y, x))
    slow = np.exp(-dw / c.slow_scale_channels)
    kernel = (1 - c.slow_fraction) * float(c.rho_channel) ** dw + c.slow_fraction * slow
    kernel = kernel * float(c.rho_y) ** dy * float(c.rho_x) ** dx
    sigma = np.sqrt(model.variance.ravel())
    return kernel * np.outer(sigma, sigma)


def brute_force(model, knots, companion_knots):
    """s' C^-1 P s by whitening with a Cholesky factor and orthogonalising with QR."""
    use = model.good.ravel()
    factor = np.linalg.cholesky(dense_covariance(model)[np.ix_(use, use)])
    signal = np.linalg.solve(factor, model.signal.ravel()[use])
    columns = np.linalg.solve(factor, dense_columns(model, knots, companion_knots)[use])
    columns = columns[:, np.linalg.norm(columns, axis=0) > 0]
    basis = np.linalg.qr(columns / np.linalg.norm(columns, axis=0))[0]
    rest = signal - basis @ (basis.T @ signal)
    return float(rest @ rest)


@pytest.mark.parametrize("bad_fraction", [0.0, 0.03])
@pytest.mark.parametrize("correlation", [Correlation(), Correlation(rho_channel=0.35), CORRELATED])
def test_equals_the_dense_calculation(correlation, bad_fraction):
    model = tiny_model(correlation, bad_fraction)
    expected = brute_force(model, 10, 5)
    # Rounding, and conjugate gradients that stop at steps of 1e-7; no spaxel is faint enough to be neglected.
    assert information(model, 10, 5) == pytest.approx(expected, rel=1e-6)


def test_columns_matter():
    """Control: without the companion continuum columns the information is another one."""
    model = tiny_model()
    assert information(model, 10, 5) < 0.995 * information(model, 10, 4)
    assert brute_force(model, 10, 5) < 0.995 * brute_force(model, 10, 4)


def test_a_featureless_companion_has_no_information():
    model = tiny_model()
    flat = SignalModel(model.continuum, *(getattr(model, k) for k in list(vars(model))[1:]))
    assert information(flat, 10, 5) < 1e-8 * (flat.signal**2 / flat.variance).sum()


def test_noise_drawn_scatters_as_the_limit_says():
    """Generalised least squares on drawn noise: the scatter of the amplitude is 1 / ideal S/N."""
    model = tiny_model(CORRELATED)
    inverse = np.linalg.inv(dense_covariance(model))
    columns, signal = dense_columns(model, 10, 5), model.signal.ravel()
    weighted = inverse @ columns
    coupling = np.linalg.lstsq(columns.T @ weighted, weighted.T @ signal, rcond=None)[0]
    estimator = (inverse @ signal - weighted @ coupling) / information(model, 10, 5)
    rng, draws = np.random.default_rng(12), 1500
    found = np.empty(draws)
    for k in range(draws):
        noise = CORRELATED.draw(rng, model.signal.shape) * np.sqrt(model.variance)
        found[k] = estimator @ noise.ravel()
    scatter = found.std() * np.sqrt(information(model, 10, 5))
    assert scatter == pytest.approx(1.0, abs=4.0 / np.sqrt(2 * draws))


def scene_settings(**changes):
    base = {"wavelength_range_um": (2.2, 2.4), "n_wave": 500, "nx": 16, "ny": 16, "transmission": "synthetic"}
    return SceneSettings(**(base | {"ideal_snr": 15.0, "companion_offset_xy": (3.3, -2.1)} | changes))


def lines_spectrum():
    wave = np.exp(np.arange(np.log(2.17), np.log(2.43), 1 / 200_000))
    rng = np.random.default_rng(2)
    flux = np.ones(wave.size)
    for centre, depth in zip(rng.uniform(2.17, 2.43, 250), rng.uniform(0.1, 0.9, 250), strict=True):
        flux *= 1.0 - depth * np.exp(-0.5 * ((wave - centre) / 3e-5) ** 2)
    return wave, flux


@pytest.mark.parametrize("wanted", [3.0, 15.0, 200.0])
def test_contrast_solved_for_gives_the_wanted_limit(wanted):
    scene = SceneFactory(scene_settings(), lines_spectrum()).draw(ideal_snr=wanted)
    # The spaxels of the solution are those that matter for a faint companion.
    assert scene.truth["ideal_snr"] == pytest.approx(wanted, rel=5e-4)
    assert ideal_snr(scene) == pytest.approx(scene.truth["ideal_snr"], rel=1e-9)


def test_contrast_solved_for_with_correlated_noise_and_two_exposures():
    settings = scene_settings(correlation=CORRELATED, n_exposures=2, bad_fraction_flagged=0.01)
    scene = SceneFactory(settings, lines_spectrum()).draw()
    # One correction by the ratio of correlated to white noise.
    assert scene.truth["ideal_snr"] == pytest.approx(15.0, rel=5e-3)
    parts = [part["ideal_snr"] for part in scene.truth["exposures"]]
    assert np.hypot(*parts) == pytest.approx(scene.truth["ideal_snr"], rel=1e-12)


@pytest.mark.parametrize(("correlation", "low"), [(Correlation(), 1e-4), (CORRELATED, 5e-4)])
def test_neglected_spaxels_hold_what_is_claimed(monkeypatch, correlation, low):
    """All spaxels against the kept ones in a scene with halo and speckles."""
    scene = SceneFactory(scene_settings(), lines_spectrum()).draw(correlation=correlation)
    for name in ("NEGLECTED", "NEGLECTED_CORRELATED"):
        monkeypatch.setattr(f"xcorr.simulate.ideal.{name}", 0.0)
    assert ideal_snr(scene) == pytest.approx(scene.truth["ideal_snr"], rel=low)
    assert ideal_snr(scene) > scene.truth["ideal_snr"]
