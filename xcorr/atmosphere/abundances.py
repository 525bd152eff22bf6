"""Mixing ratios assumed where the user gives none."""

from __future__ import annotations

import numpy as np

from xcorr.atmosphere.chemistry import equilibrium
from xcorr.atmosphere.emission import BUILTIN_MOLECULES
from xcorr.atmosphere.structure import grey_structure

MOLECULE_FLOOR = 1e-5
QUENCH_FACTOR = 1.25
QUENCH_TEMPERATURE_K = 1600.0


def default_mixing_ratios(t_eff: float, log_g: float) -> dict[str, float]:
    """Equilibrium of solar-composition gas where T = max(1.25 T_eff, 1600 K), for the built-in molecules.

    Parameters
    ----------
    t_eff : float
        Effective temperature, K.
    log_g : float
        log10 gravity, cm s-2.

    Returns
    -------
    dict
        Molecule -> mole fraction, taken to be constant with depth.

    Notes
    -----
    Vertical mixing freezes CO/CH4 below the photosphere, where the reaction becomes slower than the mixing;
    that it does is common practice, the factor 1.25 and the 1600 K are choices without a source. The level
    comes from the grey structure, so the ratios depend on its opacity: CO/CH4 by the square of the pressure.
    """
    structure = grey_structure(t_eff, log_g)
    level = min(max(QUENCH_FACTOR * t_eff, QUENCH_TEMPERATURE_K), float(structure.temperature_k[-1]))
    pressure = np.exp(np.interp(level, structure.temperature_k, np.log(structure.pressure_bar)))
    gases = equilibrium(level, pressure).as_dict()
    return {name: gases[name] for name in BUILTIN_MOLECULES}
