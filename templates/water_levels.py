"""Which levels an H2O line joins, found from its wavenumber and a rounded lower energy; hence ortho or para.

The level list (Barber et al. 2006, BT2) knows the symmetry of every level: blocks 1 and 2 are para, 3 and 4
ortho, and lines join 1 with 2 or 3 with 4, with a change of J of at most 1. Its upper energies are off by up
to 0.5 cm-1, too much to tell two assignments apart by the residual alone. But all lines to one upper level
share its error: true candidates of a level crowd at one residual, false ones scatter. Crowds give the
levels' errors, these sharpen the crowds, and so on with narrower widths.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

BLOCK_PARTNER = {1: 2, 2: 1, 3: 4, 4: 3}
FIRST_ORTHO_BLOCK = 3
REACH_PER_CM = 0.5  # largest error of an upper level at first
ENERGY_ROUNDING_PER_CM = 4.3  # half of 0.001 eV, and the error of the lower levels
LATE_REACH_PER_CM, LATE_ENERGY_PER_CM = 1.5, 5.0  # for lines that have no candidate within the former
HIGHEST_LOWER_PER_CM, HIGHEST_UPPER_PER_CM = 6000.0, 19500.0
WIDTHS_PER_CM = (0.03, 0.02, 0.01, 0.006, 0.004)  # of a crowd, round by round
ROUNDS_PER_WIDTH = 2
UNTWIST_ROUNDS, LEAST_GAIN = 6, 2e-4
MEMBERS_FOR_AN_OFFSET, LINES_FOR_A_CORRECTION = 4, 3


@dataclass(frozen=True)
class Levels:
    """Rotational-vibrational levels: J, block (1-4) and energy, cm-1, each (n_level,)."""

    j: np.ndarray
    block: np.ndarray
    energy: np.ndarray

    @property
    def ortho(self) -> np.ndarray:
        """1 where ortho, else 0."""
        return (self.block >= FIRST_ORTHO_BLOCK).astype(np.int8)


@dataclass(frozen=True)
class Candidates:
    """Level pairs that a line may join; arrays (n_candidate,) of indices and, in cm-1, of the residual
    E(upper) - E(lower) - wavenumber."""

    line: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    residual: np.ndarray


def read_levels(text: bytes) -> Levels:
    """All levels of the list (columns: number, J, block, number in block, energy, labels)."""
    table = np.loadtxt(text.decode().splitlines(), usecols=(1, 2, 4))
    return Levels(table[:, 0].astype(int), table[:, 1].astype(int), table[:, 2])


def find_candidates(
    wavenumber: np.ndarray, energy: np.ndarray, half_width: float, levels: Levels, reach: float
) -> Candidates:
    """Every pair of levels that fits a line: lower energy within half_width, wavenumber within reach."""
    groups = {}
    for block in BLOCK_PARTNER:
        for j in range(levels.j.max() + 1):
            of_both = np.flatnonzero(
                (levels.block == block) & (levels.j == j) & (levels.energy < HIGHEST_UPPER_PER_CM)
            )
            groups[block, j] = of_both[np.argsort(levels.energy[of_both], kind="stable")]
    by_energy = np.argsort(energy, kind="stable")
    found = []
    for lower in np.flatnonzero(levels.energy < HIGHEST_LOWER_PER_CM):
        start = levels.energy[lower]
        first, last = np.searchsorted(energy[by_energy], [start - half_width, start + half_width])
        lines = by_energy[first:last]
        j = levels.j[lower]
        for upper_j in range(max(j - 1, 0), j + 2):
            if not lines.size or (j == 0 and upper_j == 0):
                continue
            group = groups.get((BLOCK_PARTNER[levels.block[lower]], upper_j), np.array([], dtype=int))
            target, ladder = start + wavenumber[lines], levels.energy[group]
            low, high = np.searchsorted(ladder, target - reach), np.searchsorted(ladder, target + reach)
            count = high - low
            rows = np.repeat(np.arange(len(lines)), count)
            steps = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
            upper = group[low[rows] + steps]
            found.append((lines[rows], np.full(len(rows), lower), upper, levels.energy[upper] - target[rows]))
    return Candidates(*(np.concatenate(column) for column in zip(*found, strict=True)))


def best_of_each(group: np.ndarray, order: np.ndarray) -> np.ndarray:
    """Of each group the member that comes first in the order."""
    return order[np.unique(group[order], return_index=True)[1]]


def medians(group: np.ndarray, values: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Groups in ascending order, the median of each, and how many values it has."""
    order = np.lexsort((values, group))
    names, first, count = np.unique(group[order], return_index=True, return_counts=True)
    ranked = values[order]
    return names, (ranked[first + (count - 1) // 2] + ranked[first + count // 2]) / 2, count


def crowd(upper: np.ndarray, residual: np.ndarray, width: float, weight: np.ndarray) -> np.ndarray:
    """Weight of all candidates of the same upper level within +-width of each candidate's residual."""
    span = 2 * (np.abs(residual).max() + width + 1)
    order = np.lexsort((residual, upper))
    place = (upper * span + residual)[order]
    total = np.concatenate([[0.0], np.cumsum(weight[order])])
    size = np.empty(len(upper))
    size[order] = (
        total[np.searchsorted(place, place + width, "right")] - total[np.searchsorted(place, place - width)]
    )
    return size


def sharpen(found: Candidates, n_line: int, n_level: int) -> tuple[np.ndarray, np.ndarray]:
    """Crowd size of each candidate, and the residuals with the lower levels corrected.

    A candidate that is not the best of its own line does not count in the crowds of others.
    """
    correction = np.zeros(n_level)
    for width in np.repeat(WIDTHS_PER_CM, ROUNDS_PER_WIDTH):
        residual = found.residual - correction[found.lower]
        size = crowd(found.upper, residual, width, np.ones(len(residual)))
        for _ in range(2):
            best = np.zeros(n_line)
            np.maximum.at(best, found.line, size)
            size = crowd(found.upper, residual, width, (size >= best[found.line]).astype(float))
        peak = best_of_each(found.upper, np.lexsort((-size, found.upper)))
        centre, members = np.full(n_level, np.nan), np.zeros(n_level)
        centre[found.upper[peak]], members[found.upper[peak]] = residual[peak], size[peak]
        near = np.abs(residual - centre[found.upper]) <= width
        near = np.flatnonzero(near & (members[found.upper] >= MEMBERS_FOR_AN_OFFSET))
        near = near[best_of_each(found.line[near], np.lexsort((-size[near], found.line[near])))]
        names, middle, _ = medians(found.upper[near], residual[near])
        centre[names] = middle
        names, middle, count = medians(found.lower[near], residual[near] - centre[found.upper[near]])
        use = (count >= LINES_FOR_A_CORRECTION) & (names > 0)  # level 0, the ground state, is the zero
        correction[names[use]] += middle[use]
    return size, found.residual - correction[found.lower]


def one_to_one(found: Candidates, order: np.ndarray, n_line: int, n_level: int) -> np.ndarray:
    """Candidate chosen for each line (-1: none), best first, each pair of levels used by one line only."""
    pair = found.lower.astype(np.int64) * n_level + found.upper
    chosen, used = np.full(n_line, -1), set()
    for candidate in order:
        line = found.line[candidate]
        if chosen[line] < 0 and pair[candidate] not in used:
            chosen[line] = candidate
            used.add(pair[candidate])
    rest = best_of_each(found.line, order)
    rest = rest[chosen[found.line[rest]] < 0]
    chosen[found.line[rest]] = rest
    return chosen


def untwist(found: Candidates, residual: np.ndarray, chosen: np.ndarray, n_level: int) -> np.ndarray:
    """Two lines side by side (an ortho and a para line of one doublet) may have each other's pair of levels:
    exchange them where this brings both nearer to the offsets of their upper levels."""
    chosen = chosen.copy()
    pair = list(zip(found.lower.tolist(), found.upper.tolist(), strict=True))
    place = {(line, *pair[k]): k for k, line in enumerate(found.line.tolist())}
    for _ in range(UNTWIST_ROUNDS):
        taken = chosen[chosen >= 0]
        centre = np.full(n_level, np.nan)
        names, middle, _ = medians(found.upper[taken], residual[taken])
        centre[names] = middle
        distance = np.abs(residual - centre[found.upper])
        owner = {pair[k]: found.line[k] for k in taken}
        exchanged = 0
        for mine_new, line in enumerate(found.line):
            other = owner.get(pair[mine_new], line)
            mine, theirs = chosen[line], chosen[other]
            if other == line or mine < 0 or theirs < 0:
                continue
            theirs_new = place.get((other, *pair[mine]), -1)
            if pair[theirs] != pair[mine_new] or theirs_new < 0:
                continue
            if distance[mine_new] + distance[theirs_new] < distance[mine] + distance[theirs] - LEAST_GAIN:
                chosen[line], chosen[other] = mine_new, theirs_new
                owner[pair[mine_new]], owner[pair[theirs_new]] = line, other
                exchanged += 1
        if not exchanged:
            break
    return chosen


@dataclass(frozen=True)
class Assignment:
    """Of each line (n_line,): 1 ortho, 0 para, -1 unknown; energy of its lower level, cm-1 (NaN if unknown);
    how many lines of its upper level agree with it; whether the other kind was a candidate, too."""

    ortho: np.ndarray
    lower_energy: np.ndarray
    support: np.ndarray
    contested: np.ndarray


def assign(wavenumber: np.ndarray, energy: np.ndarray, levels: Levels) -> Assignment:
    """Level pairs of all lines from wavenumber and rounded lower energy, (n_line,), cm-1."""
    n_line, n_level = len(wavenumber), len(levels.j)
    found = find_candidates(wavenumber, energy, ENERGY_ROUNDING_PER_CM, levels, REACH_PER_CM)
    size, residual = sharpen(found, n_line, n_level)
    order = np.lexsort((np.abs(residual), -size))
    chosen = untwist(found, residual, one_to_one(found, order, n_line, n_level), n_level)
    known = np.flatnonzero(chosen >= 0)
    ortho, lower_energy = np.full(n_line, -1, dtype=np.int8), np.full(n_line, np.nan)
    support, kinds = np.zeros(n_line), np.zeros((n_line, 2), dtype=bool)
    lower = found.lower[chosen[known]]
    ortho[known], lower_energy[known], support[known] = (
        levels.ortho[lower],
        levels.energy[lower],
        size[chosen[known]],
    )
    kinds[found.line, levels.ortho[found.lower]] = True
    late = np.flatnonzero(chosen < 0)
    if late.size:
        more = find_candidates(wavenumber[late], energy[late], LATE_ENERGY_PER_CM, levels, LATE_REACH_PER_CM)
        nearest = best_of_each(more.line, np.lexsort((np.abs(more.residual), more.line)))
        ortho[late[more.line[nearest]]] = levels.ortho[more.lower[nearest]]
        lower_energy[late[more.line[nearest]]] = levels.energy[more.lower[nearest]]
        kinds[late[more.line], levels.ortho[more.lower]] = True
    return Assignment(ortho, lower_energy, support, kinds.all(axis=1))
