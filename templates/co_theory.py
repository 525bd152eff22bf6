"""CO line strengths from one dipole function fixed by five published figures.

Why: the CO table we have is smooth, but its strength is wrong by a factor that differs with the change of
v (measured against HITRAN 2012: +24 % for dv = 2, -10 % for dv = 1, -30 % for dv = 3), and its first lines
carry wrong rotational factors (P(1) 1.2, P(2) 1.07, R(1) 0.9 of what they should be). One dipole function
with the wave functions of the Rydberg-Klein-Rees potential gives every band and isotopologue, with the
rotational dependence (Herman-Wallis factor), from five measured numbers.

Units: Angstrom, cm-1, u, Debye.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from scipy.interpolate import make_interp_spline
from scipy.linalg import eigh

# 12C16O Dunham coefficients Y[k, l] (Huber & Herzberg 1979; NIST), cm-1.
DUNHAM = {
    (1, 0): 2169.8135802,
    (2, 0): -13.2883076,
    (3, 0): 1.051127e-2,
    (4, 0): 5.7440e-5,
    (5, 0): 9.831e-7,
    (6, 0): -3.1660e-8,
    (0, 1): 1.9312808724,
    (1, 1): -1.75044121e-2,
    (2, 1): 5.487e-7,
    (3, 1): 2.541e-8,
    (0, 2): -6.121468e-6,
    (1, 2): 1.1526e-9,
    (2, 2): -1.8050e-10,
    (0, 3): 5.8272e-12,
    (1, 3): 1.7375e-13,
}
C12, C13, O16, O17, O18 = 12.0, 13.00335483507, 15.99491461957, 16.99913175650, 17.99915961286
PAIRS = {1: (C12, O16), 2: (C13, O16), 3: (C12, O18), 4: (C12, O17)}
REDUCED_MASS = {n: a * b / (a + b) for n, (a, b) in PAIRS.items()}
MASSES_U = tuple(a + b for a, b in PAIRS.values())
KINETIC = 16.857629206  # hbar^2 / 2u in cm-1 Angstrom2
STRENGTH_PER_DEBYE2 = 4.162375e-19  # 8 pi^3 / 3hc, cm2 Debye-2: times nu |m| M^2 / Q gives cm molecule-1
C2 = 1.438776877  # cm K
REFERENCE_K = 296.0
ABUNDANCES = (0.9865444, 0.01108364, 0.001978224, 0.000367867)
# TIPS-2021 Q(296) over the nuclear-spin weight (1, 2, 1, 6) that cancels in the strength.
SUMS_296 = {1: 107.42051, 2: 224.69584 / 2, 3: 112.77575, 4: 661.17735 / 6}
N_V, N_J = 16, 152

# Published figures that fix the dipole function: the v = 0 dipole, C-O+, Debye (Muenter 1975, J. Mol.
# Spectrosc. 55, 490: from memory), and the 12C16O band strengths of HITRAN 2012 at 296 K (Rothman et al.
# 2013; summed by band), cm molecule-1.
DIPOLE_V0 = -0.10980
BAND_STRENGTHS = {(1, 0): 9.9685e-18, (2, 0): 7.5648e-20, (3, 0): 4.5681e-22, (4, 0): 1.5306e-24}
# First guesses of the transition moments; the signs alternate from 1-0 on (Chackerian & Tipping 1983,
# J. Mol. Spectrosc. 99, 431: from memory). The other sign of 4-0 puts its lines off by factors of 2-20.
MOMENT_GUESS = (DIPOLE_V0, 0.1063, -0.0065, 0.00041, -2.0e-5)

BOND = np.arange(0.80, 2.05, 0.007)  # internuclear distance of the wave functions, Angstrom


def term(isotopologue: int, v: np.ndarray, j: np.ndarray) -> np.ndarray:
    """Term value, cm-1 above the bottom of the potential; mass-scaled Dunham sum."""
    rho = np.sqrt(REDUCED_MASS[1] / REDUCED_MASS[isotopologue])
    half, jj = np.asarray(v) + 0.5, np.asarray(j) * (np.asarray(j) + 1.0)
    return sum(y * rho ** (k + 2 * l) * half**k * jj**l for (k, l), y in DUNHAM.items())


def _turning_points(v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Classical inner and outer turning points of 12C16O by the Klein integrals (Rees 1947)."""
    nodes, weights = np.polynomial.legendre.leggauss(200)
    # v' = v - (1/2 + v) s^2 takes the square-root singularity away.
    s, weight = (nodes + 1) / 2, weights / 2
    energy = lambda x: sum(DUNHAM[k, 0] * (x + 0.5) ** k for k in range(1, 7))  # noqa: E731
    rotation = lambda x: sum(DUNHAM[k, 1] * (x + 0.5) ** k for k in range(4))  # noqa: E731
    span = (v + 0.5)[:, None]
    inner = v[:, None] - span * s**2
    root = 2 * span * s * weight / np.sqrt(energy(v)[:, None] - energy(inner))
    scale = np.sqrt(KINETIC / REDUCED_MASS[1])
    f, g = root.sum(1) * scale, (root * rotation(inner)).sum(1) / scale
    centre = np.sqrt(f * f + f / g)
    return centre - f, centre + f


@cache
def potential() -> np.ndarray:
    """Potential on BOND, cm-1; linear beyond the last turning points (v = 37.5)."""
    v = np.concatenate([[-0.45, -0.4, -0.3, -0.2, -0.1], np.arange(0, 38, 0.5)])
    inner, outer = _turning_points(v)
    energy = sum(DUNHAM[k, 0] * (v + 0.5) ** k for k in range(1, 7))
    r = np.concatenate([inner[::-1], [equilibrium()], outer])
    spline = make_interp_spline(r, np.concatenate([energy[::-1], [0.0], energy]), k=5)
    inside = np.clip(BOND, r[0], r[-1])
    return spline(inside) + spline(inside, 1) * (BOND - inside)


def equilibrium() -> float:
    """Equilibrium distance of 12C16O, Angstrom (1.128323: Huber & Herzberg 1979)."""
    return float(np.sqrt(KINETIC / REDUCED_MASS[1] / DUNHAM[0, 1]))


@cache
def wave_functions(isotopologue: int) -> tuple[np.ndarray, np.ndarray]:
    """Energies (J, v) and wave functions (J, r, v), sinc basis (Colbert & Miller 1992);
    the outer lobe is positive."""
    n, step = len(BOND), BOND[1] - BOND[0]
    distance = np.subtract.outer(np.arange(n), np.arange(n))
    off_diagonal = 2.0 * (-1.0) ** distance / np.where(distance == 0, 1, distance) ** 2
    kinetic = np.where(distance == 0, np.pi**2 / 3, off_diagonal)
    scale = KINETIC / REDUCED_MASS[isotopologue]
    energies, functions = np.empty((N_J, N_V)), np.empty((N_J, n, N_V))
    for j in range(N_J):
        hamiltonian = kinetic * scale / step**2 + np.diag(potential() + scale * j * (j + 1) / BOND**2)
        energies[j], psi = eigh(hamiltonian, subset_by_index=[0, N_V - 1])
        large = np.abs(psi) > 0.1 * np.abs(psi).max(axis=0)
        last = n - 1 - np.argmax(large[::-1], axis=0)
        functions[j] = psi * np.sign(psi[last, np.arange(N_V)])
    return energies, functions


def strengths(dipole: np.ndarray, isotopologue: int, v_up: int, v_low: int) -> tuple[np.ndarray, np.ndarray]:
    """Strengths at 296 K of the P and R lines by J", natural abundance included, cm molecule-1.

    Parameters
    ----------
    dipole : ndarray (n_coefficient,)
        Polynomial in x = (r - r_e) / r_e, Debye.
    """
    _, psi = wave_functions(isotopologue)
    moment_function = np.polynomial.polynomial.polyval(BOND / equilibrium() - 1, dipole)
    j = np.arange(N_J - 1)
    common = ABUNDANCES[isotopologue - 1] * STRENGTH_PER_DEBYE2 / SUMS_296[isotopologue]
    energy = term(isotopologue, v_low, j) - term(isotopologue, 0, 0)
    result = []
    for step in (-1, 1):
        upper = np.maximum(j + step, 0)
        moment = np.einsum("jr,r,jr->j", psi[upper, :, v_up], moment_function, psi[j, :, v_low])
        nu = term(isotopologue, v_up, upper) - term(isotopologue, v_low, j)
        boltzmann = np.exp(-C2 * energy / REFERENCE_K) * -np.expm1(-C2 * nu / REFERENCE_K)
        # |m| is the larger J of the two; P(0) does not exist and comes out as zero.
        result.append(common * nu * np.where(step < 0, j, j + 1) * moment**2 * boltzmann)
    return result[0], result[1]


@cache
def dipole_function() -> tuple[float, ...]:
    """Five polynomial coefficients, Debye, that reproduce DIPOLE_V0 and BAND_STRENGTHS."""
    _, psi = wave_functions(1)
    x = BOND / equilibrium() - 1
    pairs = [(0, 0), *BAND_STRENGTHS]
    powers = np.array([[(psi[0, :, up] * x**k) @ psi[0, :, low] for k in range(5)] for up, low in pairs])
    moments = np.array(MOMENT_GUESS)
    for _ in range(20):
        coefficients = np.linalg.solve(powers, moments)
        for index, (band, published) in enumerate(BAND_STRENGTHS.items(), start=1):
            total = sum(branch.sum() for branch in strengths(coefficients, 1, *band))
            moments[index] *= np.sqrt(published / total)
    return tuple(float(value) for value in coefficients)
