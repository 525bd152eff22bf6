"""Emergent spectra: cross sections, collisions and the formal solution, block by block in wavelength."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.atmosphere.chemistry import H2_FRACTION, HE_FRACTION
from xcorr.atmosphere.structure import Structure, grey_structure
from xcorr.errors import InputError
from xcorr.kernels.radiative import emergent_flux, gauss_angles
from xcorr.lines import LineList, cross_section, load_cia, load_lines, load_methane, load_partition
from xcorr.units import ATOMIC_MASS_KG, BOLTZMANN_J_K, LIGHT_M_S, PLANCK_J_S, to_plain

BUILTIN_MOLECULES = ("H2O", "CO", "CH4")
_BLOCK = 60_000  # wavelengths at once: bounds memory at about 30 MB per molecule
_H2_MASS_U, _HE_MASS_U, _METHANE_MASS_U = 2.01588, 4.002602, 16.0313


def planck(wavelength_um: Any, temperature_k: Any) -> NDArray[np.float64]:
    """Planck's B_lambda, W m-2 sr-1 um-1, of broadcast wavelengths (um) and temperatures (K)."""
    metre = to_plain(wavelength_um, "um") * 1e-6
    exponent = PLANCK_J_S * LIGHT_M_S / (metre * BOLTZMANN_J_K * to_plain(temperature_k, "K"))
    # beyond exp(700) the flux underflows anyway
    return 1e-6 * 2.0 * PLANCK_J_S * LIGHT_M_S**2 / metre**5 / np.expm1(np.minimum(exponent, 700.0))


def emergent_spectrum(
    wavelength_um: Any,
    *,
    t_eff: Any | None = None,
    log_g: float | None = None,
    mixing_ratios: Mapping[str, float],
    n_layers: int = 60,
    n_angles: int = 6,
    structure: Structure | None = None,
    lines: Mapping[str, LineList] | None = None,
    wing_cm: float = 25.0,
) -> NDArray[np.float64]:
    """Flux that leaves a plane-parallel atmosphere without scattering.

    Parameters
    ----------
    wavelength_um : array (n,) or Quantity
        Vacuum, strictly ascending. Lines are sampled, not integrated: use a grid of R >= 200,000.
    t_eff : float or Quantity, log_g : float
        Effective temperature (K) and log10 gravity (cm s-2) of a grey structure; or give `structure`.
    mixing_ratios : mapping
        Molecule -> mole fraction, constant with depth; the rest is H2 and He in solar proportion.
    n_layers, n_angles : int
        Layers of the grey structure; Gauss angles in one hemisphere.
    structure : Structure, optional
        Pressures and temperatures to use instead of the grey ones.
    lines : mapping, optional
        Line lists of further molecules, or to use instead of the shipped ones.
    wing_cm : float
        Where line wings are cut.

    Returns
    -------
    float64 array (n,)
        F_lambda at the top, W m-2 um-1.

    Raises
    ------
    InputError
        For unusable grids, parameters, mixing ratios, or a molecule without data.

    Notes
    -----
    Cold methane absorbs only inside its table (1.4-2.5 um), elsewhere not at all. Collisions use the nearest
    table below the coldest one (1000 K; a factor 3 too strong at 300 K and 4100 cm-1) and above the hottest.
    Layers hotter than the partition sums (3000 K) take the line strengths of the hottest tabulated
    temperature; they lie far below any photosphere.
    """
    grid = to_plain(wavelength_um, "um")
    if structure is None:
        if t_eff is None or log_g is None:
            raise InputError("t_eff and log_g are both needed", f"{t_eff}, {log_g}", "or give a structure")
        structure = grey_structure(float(to_plain(t_eff, "K")), float(log_g), n_layers=n_layers)
    spectra = emergent_spectra(
        grid, structure, {"": dict(mixing_ratios)}, n_angles=n_angles, lines=lines, wing_cm=wing_cm
    )
    return spectra[""]


def emergent_spectra(
    wavelength_um: NDArray[np.float64],
    structure: Structure,
    mixtures: Mapping[str, Mapping[str, float]],
    *,
    n_angles: int = 6,
    lines: Mapping[str, LineList] | None = None,
    wing_cm: float = 25.0,
    silent: Mapping[str, str] | None = None,
) -> dict[str, NDArray[np.float64]]:
    """Emergent fluxes of several mixtures on one structure; cross sections are computed once.

    Parameters
    ----------
    wavelength_um : float64 array (n,)
        Vacuum, strictly ascending.
    structure : Structure
    mixtures : mapping
        label -> (molecule -> mole fraction).
    n_angles, lines, wing_cm
        As in `emergent_spectrum`.
    silent : mapping, optional
        label -> a molecule of that mixture that is present but does not absorb.

    Returns
    -------
    dict
        label -> F_lambda (n,), W m-2 um-1.
    """
    if wavelength_um.ndim != 1 or wavelength_um.size < 2 or np.any(np.diff(wavelength_um) <= 0):
        raise InputError("wavelengths must ascend strictly", f"shape {wavelength_um.shape}", "sort them")
    lists = _line_lists(mixtures, lines or {})
    out = {label: np.empty(wavelength_um.size) for label in mixtures}
    # an uneven last block of one sample cannot be a grid: share the samples evenly
    for block in np.array_split(np.arange(wavelength_um.size), -(-wavelength_um.size // _BLOCK)):
        part = slice(block[0], block[-1] + 1)
        fluxes = _block(wavelength_um[part], structure, mixtures, n_angles, lists, wing_cm, silent or {})
        for label, flux in fluxes.items():
            out[label][part] = flux
    return out


def _line_lists(
    mixtures: Mapping[str, Mapping[str, float]], given: Mapping[str, LineList]
) -> dict[str, LineList | str]:
    """The line list, or the name of the effective cross section, of every molecule in use."""
    found: dict[str, LineList | str] = {}
    for mixture in mixtures.values():
        total = sum(mixture.values())
        if any(not value >= 0.0 for value in mixture.values()) or total >= 1.0:
            raise InputError("mixing ratios must be >= 0 and add up to less than 1", f"{dict(mixture)}")
        for molecule in mixture:
            if molecule in given:
                found[molecule] = given[molecule]
            elif molecule in BUILTIN_MOLECULES:
                found[molecule] = molecule if molecule == "CH4" else load_lines(molecule)
            else:
                raise InputError(
                    f"no line data of {molecule} ship with the program",
                    molecule,
                    f"use {', '.join(BUILTIN_MOLECULES)}, or give a line list",
                )
    return found


def _block(
    wavelength: NDArray[np.float64],
    structure: Structure,
    mixtures: Mapping[str, Mapping[str, float]],
    n_angles: int,
    lists: Mapping[str, LineList | str],
    wing_cm: float,
    silent: Mapping[str, str],
) -> dict[str, NDArray[np.float64]]:
    sigma = {
        molecule: _layer_cross_sections(source, 1e4 / wavelength, structure, wing_cm)
        for molecule, source in lists.items()
    }
    collisions = _collision_coefficient(1e4 / wavelength, structure)
    source = np.stack([planck(wavelength, temperature) for temperature in structure.temperature_k])
    mu, weight = gauss_angles(n_angles)
    out: dict[str, NDArray[np.float64]] = {}
    done: dict[tuple, NDArray[np.float64]] = {}
    for label, mixture in mixtures.items():
        # equal mixtures are solved once: a molecule above its floor makes "with X" the full spectrum
        same = (*sorted(mixture.items()), silent.get(label))
        if same in done:
            out[label] = done[same]
            continue
        column, density = _layer_columns(structure, mixture, lists)
        hydrogen = (1.0 - sum(mixture.values())) ** 2
        depth = collisions * (hydrogen * column * density)[:, None]
        for molecule, ratio in mixture.items():
            if ratio > 0.0 and silent.get(label) != molecule:
                depth += (ratio * column)[:, None] * sigma[molecule]
        flux = np.empty(wavelength.size)
        emergent_flux(depth, source, mu, weight, flux)
        out[label] = done[same] = flux
    return out


def _layer_cross_sections(
    lines: LineList | str, wavenumber: NDArray[np.float64], structure: Structure, wing_cm: float
) -> NDArray[np.float64]:
    """cm2 / molecule, (n_layer, n); one row, to be broadcast, where it does not depend on the layer."""
    if isinstance(lines, str):
        table = load_methane()
        inside = (wavenumber >= table.wavenumber_per_cm[0]) & (wavenumber <= table.wavenumber_per_cm[-1])
        if not np.any(inside):
            return np.zeros((1, wavenumber.size))
        return np.nan_to_num(cross_section(lines, wavenumber, 260.0, 1.0), nan=0.0)[None, :]
    hottest = _hottest_k(lines)
    return np.stack(
        [
            cross_section(lines, wavenumber, min(temperature, hottest), pressure, wing_cm=wing_cm)
            for temperature, pressure in zip(
                structure.layer_temperature_k, structure.layer_pressure_bar, strict=True
            )
        ]
    )


def _hottest_k(lines: LineList) -> float:
    """Where the partition sums of the isotopologues in use end."""
    table = load_partition(lines.molecule)
    return min(table.limit_k(int(number)) for number in np.unique(lines.isotopologue))


def _collision_coefficient(wavenumber: NDArray[np.float64], structure: Structure) -> NDArray[np.float64]:
    """H2-H2 and H2-He absorption, cm5 per pair of gas particles (metals apart), (n_layer, n).

    Logarithmic in temperature and coefficient between tables, nearest table outside; linear in wavenumber.
    """
    helium = HE_FRACTION / H2_FRACTION
    total = np.zeros((structure.pressure_bar.size - 1, wavenumber.size))
    for pair, partner in (("H2-H2", 1.0), ("H2-He", helium)):
        table = load_cia()[pair]
        coefficient = np.stack(
            [
                np.interp(wavenumber, table.wavenumber_per_cm, row, left=0.0, right=0.0)
                for row in table.coefficient_cm5()
            ]
        )
        logarithm = np.log(np.maximum(coefficient, 1e-80))
        place = np.interp(
            np.log(structure.layer_temperature_k), np.log(table.temperature_k), np.arange(len(coefficient))
        )
        low = np.minimum(place.astype(int), len(coefficient) - 2)
        part = (place - low)[:, None]
        total += H2_FRACTION**2 * partner * np.exp((1 - part) * logarithm[low] + part * logarithm[low + 1])
    return total


def _layer_columns(
    structure: Structure, mixture: Mapping[str, float], lists: Mapping[str, LineList | str]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Particles per cm2 in each layer and particles per cm3 at its middle."""
    rest = 1.0 - sum(mixture.values())
    mean_mass = rest * ((1.0 - HE_FRACTION) * _H2_MASS_U + HE_FRACTION * _HE_MASS_U)
    for molecule, ratio in mixture.items():
        source = lists[molecule]
        mean_mass += ratio * (_METHANE_MASS_U if isinstance(source, str) else float(source.masses_u[0]))
    gravity_si = 10.0**structure.log_g * 0.01
    pascal = np.diff(structure.pressure_bar) * 1e5
    column = pascal / (gravity_si * mean_mass * ATOMIC_MASS_KG) * 1e-4
    density = structure.layer_pressure_bar * 1e5 / (BOLTZMANN_J_K * structure.layer_temperature_k) * 1e-6
    return column, density
