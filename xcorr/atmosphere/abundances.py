"""Mixing ratios assumed where the user gives none."""

from __future__ import annotations

import numpy as np

from xcorr.atmosphere.chemistry import equilibrium
from xcorr.atmosphere.emission import BUILTIN_MOLECULES
from xcorr.atmosphere.structure import grey_structure

MOLECULE_FLOOR = 1e-5


def photosphere(t_eff: float, log_g: float) -> float:
    """Pressure, bar, where the grey structure has T = T_eff."""
    structure = grey_structure(t_eff, log_g)
    return float(np.exp(np.interp(t_eff, structure.temperature_k, np.log(structure.pressure_bar))))


def default_mixing_ratios(t_eff: float, log_g: float) -> dict[str, float]:
    """Equilibrium at the photosphere (T = T_eff) of solar-composition gas, for the built-in molecules.

    Parameters
    ----------
    t_eff : float
        Effective temperature, K.
    log_g : float
        log10 gravity, cm s-2.

    Returns
    -------
    dict
        Molecule -> mole fraction.
    """
    all_gases = equilibrium(t_eff, photosphere(t_eff, log_g)).as_dict()
    return {name: all_gases[name] for name in BUILTIN_MOLECULES}
