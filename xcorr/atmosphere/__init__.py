"""Structure, chemistry and radiative transfer: built-in templates and the Earth's transmission."""

from xcorr.atmosphere.abundances import MOLECULE_FLOOR, default_mixing_ratios
from xcorr.atmosphere.builtin import CatalogueEntry, builtin_template, catalogue
from xcorr.atmosphere.chemistry import Equilibrium, equilibrium
from xcorr.atmosphere.emission import BUILTIN_MOLECULES, emergent_spectra, emergent_spectrum, planck
from xcorr.atmosphere.structure import (
    Structure,
    eddington_temperature,
    grain_opacity,
    grey_structure,
    rosseland_opacity,
)
from xcorr.atmosphere.transmission import Transmission, load_transmission

__all__ = [
    "BUILTIN_MOLECULES",
    "MOLECULE_FLOOR",
    "CatalogueEntry",
    "Equilibrium",
    "Structure",
    "Transmission",
    "builtin_template",
    "catalogue",
    "default_mixing_ratios",
    "eddington_temperature",
    "emergent_spectra",
    "emergent_spectrum",
    "equilibrium",
    "grain_opacity",
    "grey_structure",
    "load_transmission",
    "planck",
    "rosseland_opacity",
]
