"""Mixing ratios assumed where the user gives none."""

from __future__ import annotations

import numpy as np

from xcorr.atmosphere.chemistry import equilibrium
from xcorr.atmosphere.emission import BUILTIN_MOLECULES
from xcorr.atmosphere.structure import grey_structure

MOLECULE_FLOOR = 1e-5
QUENCH_FACTOR = 1.25


def default_mixing_ratios(t_eff: float, log_g: float) -> dict[str, float]:
    """Equilibrium of solar-composition gas at the level where T = 1.25 T_eff, for the built-in molecules.

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
    Vertical mixing freezes CO/CH4 somewhat below the photosphere; that it does is common practice, the
    factor 1.25 is a choice without a source. The level comes from the grey structure, so the ratios depend
    on its opacity: CO/CH4 by the square of the pressure.
    """
    structure = grey_structure(t_eff, log_g)
    level = QUENCH_FACTOR * t_eff
    pressure = np.exp(np.interp(level, structure.temperature_k, np.log(structure.pressure_bar)))
    gases = equilibrium(level, pressure).as_dict()
    return {name: gases[name] for name in BUILTIN_MOLECULES}
