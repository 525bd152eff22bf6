"""Built-in templates: contributions, caveats, coverage, and a cache that may fail."""

import numpy as np
import pytest

from xcorr.atmosphere import (
    MOLECULE_FLOOR,
    builtin_template,
    cache,
    catalogue,
    emergent_spectra,
    grey_structure,
)
from xcorr.atmosphere import builtin as module
from xcorr.errors import CoverageError, InputError, SettingsError

RANGE = (2.285, 2.305)


@pytest.fixture(autouse=True)
def own_cache(tmp_path, monkeypatch):
    """Each test starts with an empty cache of its own, on disk and in memory."""
    monkeypatch.setenv("XCORR_CACHE", str(tmp_path / "cache"))
    module._spectra.cache_clear()
    return tmp_path / "cache"


def _make(name="CO", **changed):
    arguments = {"wavelength_range_um": RANGE, "t_eff": 1700.0, "log_g": 5.0, "n_layers": 20}
    return builtin_template(name, **(arguments | changed))


def _codes(template):
    return {note.code for note in template.notes}


def test_contribution_is_full_with_minus_full_without():
    co, full = _make("CO"), _make("full")
    assert (co.kind, full.kind) == ("contribution", "full")
    np.testing.assert_allclose(co.reference_flux, full.flux, rtol=1e-12)  # CO is above the floor here
    ratios = {"H2O": 2e-4, "CO": 4e-4}
    whole = _make("full", mixing_ratios=ratios)
    part = _make("CO", mixing_ratios=ratios)
    silent = emergent_spectra(
        whole.wavelength_um, grey_structure(1700.0, 5.0, n_layers=20), {"": ratios}, silent={"": "CO"}
    )[""]
    np.testing.assert_allclose(part.flux, whole.flux - silent, atol=1e-12 * whole.flux.max())
    # the same but for the mass of the missing CO: 5e-3 of the column
    without = _make("full", mixing_ratios={"H2O": 2e-4})
    np.testing.assert_allclose(part.flux, whole.flux - without.flux, atol=6e-3 * whole.flux.max())


def test_co_is_the_drop_at_the_band_head():
    # K-band CO is seen as the drop at 2.3 um (common practice, no source); the head is at 2.2935 um
    co = _make("CO")
    share = co.flux / co.reference_flux
    before = share[(co.wavelength_um > 2.289) & (co.wavelength_um < 2.293)].mean()
    behind = share[(co.wavelength_um > 2.294) & (co.wavelength_um < 2.298)].mean()
    assert behind < before - 0.1


def test_grid_is_fine_padded_and_shared():
    first, second = _make("CO"), _make("CO", wavelength_range_um=(2.29, 2.30))
    step = np.diff(np.log(first.wavelength_um))
    assert 1.0 / step.max() >= 200_000
    beta = 1500.0 / 299792.458
    assert first.wavelength_um[0] <= RANGE[0] / (1 + beta)
    assert first.wavelength_um[-1] >= RANGE[1] * (1 + beta)
    assert np.isin(second.wavelength_um, first.wavelength_um).all()


def test_alone_is_the_molecule_and_nothing_else():
    alone = _make("H2O", form="alone")
    only = _make("full", mixing_ratios={"H2O": module.default_mixing_ratios(1700.0, 5.0)["H2O"]})
    assert alone.kind == "spectrum"
    np.testing.assert_allclose(alone.flux, only.flux, rtol=1e-12)


def test_absent_methane_can_still_be_looked_for():
    methane, full = _make("CH4"), _make("full")
    assert "mixing-ratio-floor" in _codes(methane)
    assert "cold-methane" in _codes(methane)
    assert "mixing-ratio-floor" not in _codes(full)
    assert f"{MOLECULE_FLOOR:.2e}" in methane.description
    assert np.min(methane.flux / methane.reference_flux) < -0.01


def test_caveats():
    assert "hot-lines-incomplete" in _codes(_make("H2O", t_eff=1700.0))
    assert "hot-lines-incomplete" not in _codes(_make("H2O", t_eff=1000.0))
    assert "cold-methane" in _codes(_make("full", t_eff=900.0))
    assert "cold-methane" not in _codes(_make("CO", t_eff=900.0))
    assert "warm-collisions" in _codes(_make("CO", t_eff=700.0))


def test_methane_ends_with_its_table():
    template = _make("CH4", wavelength_range_um=(2.49, 2.51), t_eff=900.0)
    assert 0.2 < template.covered.mean() < 0.8
    assert not template.covered[template.wavelength_um > 2.5].any()
    assert "methane-outside-range" in _codes(_make("full", wavelength_range_um=(2.49, 2.51), t_eff=900.0))
    with pytest.raises(CoverageError, match="CH4"):
        _make("CH4", wavelength_range_um=(1.10, 1.11))


def test_a_molecule_without_features_is_no_template():
    with pytest.raises(CoverageError, match="no features"):
        _make("CO", wavelength_range_um=(1.20, 1.21))
    with pytest.raises(CoverageError, match="cover"):
        _make("full", wavelength_range_um=(7.0, 7.1))


def test_result_comes_back_from_the_disk(own_cache, monkeypatch):
    first = _make()
    assert len(list(own_cache.glob("*.npz"))) == 1
    assert not list(own_cache.glob(".*"))
    module._spectra.cache_clear()
    monkeypatch.setattr(module, "emergent_spectra", _never)
    second = _make()
    np.testing.assert_array_equal(first.flux, second.flux)
    assert first.sha256 == second.sha256


def _never(*arguments, **named):
    raise AssertionError("computed although it was cached")


@pytest.mark.parametrize("damage", ["truncate", "garbage", "flip"])
def test_damaged_file_is_computed_anew(own_cache, damage):
    first = _make()
    path = next(own_cache.glob("*.npz"))
    content = bytearray(path.read_bytes())
    if damage == "truncate":
        path.write_bytes(content[: len(content) // 2])
    elif damage == "garbage":
        path.write_bytes(b"not a zip file")
    else:
        content[len(content) // 2] ^= 0xFF
        path.write_bytes(content)
    assert cache.load(path.stem) is None
    module._spectra.cache_clear()
    np.testing.assert_array_equal(_make().flux, first.flux)
    assert cache.load(path.stem) is not None


def test_unwritable_cache_is_no_obstacle(tmp_path, monkeypatch):
    # a plain file where the folder should be: unwritable for every user, root included
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("XCORR_CACHE", str(tmp_path / "file" / "cache"))
    assert np.all(np.isfinite(_make().flux))
    assert cache.store("key", {"a": np.zeros(3)}) is False


def test_every_parameter_has_its_own_digest():
    changes = [{}, {"t_eff": 1650.0}, {"log_g": 4.9}, {"n_layers": 21}, {"form": "alone"}]
    changes += [{"mixing_ratios": {"CO": 1e-4}}, {"wavelength_range_um": (2.285, 2.304)}]
    assert len({_make("CO", **change).sha256 for change in changes}) == len(changes)


def test_code_and_data_are_part_of_the_digest(monkeypatch):
    before = _make().sha256
    monkeypatch.setattr(cache, "code_digest", lambda: "another program")
    assert _make().sha256 != before


@pytest.mark.parametrize(
    ("name", "changed", "error"),
    [
        ("NH3", {}, SettingsError),
        ("CO", {"form": "sideways"}, SettingsError),
        ("CO", {"mixing_ratios": {"H2O": 1e-4}}, SettingsError),
        ("CO", {"wavelength_range_um": (2.3, 2.2)}, InputError),
        ("CO", {"wavelength_range_um": 2.3}, InputError),
        ("CO", {"t_eff": 50.0}, InputError),
    ],
)
def test_bad_input(name, changed, error):
    with pytest.raises(error):
        _make(name, **changed)


def test_catalogue_names_sources_and_caveats():
    entries = {entry.name: entry for entry in catalogue()}
    assert set(entries) == {"H2O", "CO", "CH4", "full"}
    for entry in entries.values():
        assert entry.source
        assert entry.wavelength_range_um[0] < entry.wavelength_range_um[1]
    assert any("cold methane" in caveat for caveat in entries["CH4"].caveats)
    assert any("hot lines incomplete" in caveat for caveat in entries["H2O"].caveats)
