"""Small scenes with invented molecules "A" and "B", shared by the tests of the search."""

from functools import cache

import numpy as np

from xcorr.config import parse_settings
from xcorr.simulate import SceneFactory, SceneSettings
from xcorr.template import Template

RANGE = (2.25, 2.38)


@cache
def templates():
    """Line-by-line spectra of a companion: full, and the contributions of A and B (kept without the other).

    Lines are Gaussians at random places, unresolved by the instrument; A crowds the long wavelengths, as a
    band head does, B is everywhere.
    """
    low, high = RANGE[0] / 1.012, RANGE[1] * 1.012
    wave = np.exp(np.arange(np.log(low), np.log(high), 1.0 / 200_000))
    rng = np.random.default_rng(7)
    centres_a = np.concatenate([rng.uniform(2.29, high, 110), rng.uniform(low, high, 30)])
    depth_a = _lines(wave, centres_a, rng.uniform(0.3, 1.5, 140))
    depth_b = _lines(wave, rng.uniform(low, high, 140), rng.uniform(0.3, 1.5, 140))
    continuum = 1.0 + 1.5 * (wave - 2.3)
    full = continuum * np.exp(-depth_a - depth_b)
    return {
        "full": Template("full", wave, full, kind="full"),
        "A": Template("A", wave, full - continuum * np.exp(-depth_b), full, kind="contribution"),
        "B": Template("B", wave, full - continuum * np.exp(-depth_a), full, kind="contribution"),
        "flat": Template("flat", wave, continuum, kind="full"),
    }


def _lines(wave, centres, depths, width=4e-5):
    out = np.zeros(wave.size)
    for centre, depth in zip(centres, depths, strict=True):
        near = slice(*np.searchsorted(wave, [centre - 8 * width, centre + 8 * width]))
        out[near] += depth * np.exp(-0.5 * ((wave[near] - centre) / width) ** 2)
    return out


@cache
def factory(companion="full", **changes):
    """A factory of 16 x 16 x 600 scenes, without an atmosphere unless asked for."""
    base = {"wavelength_range_um": RANGE, "n_wave": 600, "nx": 16, "ny": 16, "transmission": "none"}
    base |= {"contrast": 0.0, "companion_offset_xy": (4.0, -3.0)} | changes
    return SceneFactory(SceneSettings(**base), templates()[companion])


def scene(companion="full", draw=(), **changes):
    """One scene; `draw` holds the changes that need no new factory."""
    return factory(companion, **changes).draw(**dict(draw))


def cubes(one):
    """Cubes of a scene, declared free of tellurics where it has no atmosphere."""
    corrected = one.settings.transmission == "none"
    return tuple(cube.with_changes(telluric_corrected=corrected) for cube in one.cubes)


def settings(one, names=("A", "B"), velocity=(-600, 600, 20), target="", extra=""):
    """Settings that search a scene for given templates; the companion's place as in truth unless given."""
    companion, star = (p.mean(axis=0) for p in (one.exposures[0].companion_xy, one.exposures[0].star_xy))
    target = target or f"companion_xy = [{companion[0]:.6f}, {companion[1]:.6f}]"
    text = f"[target]\n{target}\nstar_xy = [{star[0]:.6f}, {star[1]:.6f}]\n"
    text += "[[exposure]]\nfile = 'exposure'\n" * len(one.cubes)
    text += f"[search]\nmolecules = []\nvelocity_km_s = {list(velocity)}\n"
    text += "".join(f"[[template]]\nname = '{name}'\nfile = 'template'\n" for name in names)
    return parse_settings(text + extra)


def chosen(names=("A", "B")):
    """Templates by name."""
    return tuple(templates()[name] for name in names)
