"""Sums of one exposure at any set of positions, with templates of different coverage kept apart."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xcorr.columns import TemplateColumns
from xcorr.exposure import PreparedExposure
from xcorr.kernels.projection import whiten_overlaps
from xcorr.kernels.summation import psf_sums
from xcorr.psf import Stamps, make_stamps
from xcorr.search import (
    CONTINUUM_RIDGE,
    PositionSums,
    ProjectedTemplates,
    corrections,
    position_sums,
    support_overlaps,
)
from xcorr.starlight import StarlightFit

POSITION_BLOCK = 1024
"""Positions of one block: fixed, so that the last bits do not depend on memory or jobs."""


@dataclass(frozen=True)
class Channel:
    """An exposure restricted to channels that a group of templates shares, and those templates projected.

    Attributes
    ----------
    members : tuple of int
        Template indices.
    exposure : PreparedExposure
    templates : ProjectedTemplates
    """

    members: tuple[int, ...]
    exposure: PreparedExposure
    templates: ProjectedTemplates


@dataclass(frozen=True)
class Sums:
    """num and info of positions: each template on its own channels, and all together on the common ones.

    Attributes
    ----------
    num, info : float64 arrays (n_position, n_molecule, n_velocity)
        Solo.
    joint : PositionSums
    rivals : tuple of tuple of int
        Templates that are fitted together. A spectrum of all molecules is no rival of its own parts and stands
        alone; the first set explains the companion's light.
    """

    num: NDArray[np.float64]
    info: NDArray[np.float64]
    joint: PositionSums
    rivals: tuple[tuple[int, ...], ...]

    def __add__(self, other: Sums) -> Sums:
        return Sums(self.num + other.num, self.info + other.info, self.joint + other.joint, self.rivals)

    def snr(self) -> NDArray[np.float64]:
        """Raw solo S/N, NaN without information."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(self.info > 0, self.num / np.sqrt(self.info), np.nan)

    def amplitude(self) -> NDArray[np.float64]:
        """Solo amplitude, NaN without information."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(self.info > 0, self.num / self.info, np.nan)

    def conditional(self) -> NDArray[np.float64]:
        """Raw conditional S/N: amplitude over error of the joint fit."""
        return conditional_snr(self.joint, self.rivals)


def conditional_snr(sums: PositionSums, rivals: tuple[tuple[int, ...], ...]) -> NDArray[np.float64]:
    """Amplitude over error of the joint fit of each set of rivals, NaN without information."""
    out = np.full(sums.num.shape, np.nan)
    for members in rivals:
        amplitude, error = sums.subset(members).joint()
        out[:, members] = np.where(np.isfinite(error), amplitude / error, np.nan)
    return out


class ExposureEngine:
    """All sums of one exposure; keeps the projected templates of each coverage group.

    Parameters
    ----------
    exposure : PreparedExposure
    columns : TemplateColumns
    """

    def __init__(self, exposure: PreparedExposure, columns: TemplateColumns) -> None:
        self.exposure = exposure
        self.columns = columns
        whole = tuple(m for m, kind in enumerate(columns.kinds) if kind == "full")
        parts = tuple(m for m in range(len(columns.kinds)) if m not in whole)
        self.rivals = tuple(members for members in (parts, *((m,) for m in whole)) if members)
        used = exposure.mean_weights > 0
        patterns = (columns.covered & used).astype(np.uint8)
        groups: dict[bytes, list[int]] = {}
        for m, pattern in enumerate(patterns):
            groups.setdefault(pattern.tobytes(), []).append(m)
        everything = tuple(range(len(patterns)))
        common = columns.covered.all(axis=0)
        self.joint = self._channel(everything, common)
        self.solo = (
            [self.joint]
            if len(groups) == 1
            else [self._channel(tuple(members), columns.covered[members[0]]) for members in groups.values()]
        )

    def _channel(self, members: tuple[int, ...], covered: NDArray[np.bool_]) -> Channel:
        exposure = self.exposure.restricted(covered)
        return Channel(members, exposure, self.columns.project(exposure, members))

    def stamps(self, positions_xy: NDArray) -> Stamps:
        """Spaxels and profiles of positions in this exposure's pixels."""
        exposure = self.exposure
        return make_stamps(
            exposure.psf, np.atleast_2d(positions_xy), exposure.shape, exposure.wavelength_um, exposure.usable
        )

    def sums(self, positions_xy: NDArray) -> Sums:
        """Solo and joint sums at positions (n_position, 2)."""
        stamps = self.stamps(positions_xy)
        joint = _blocks(self.joint, stamps)
        if len(self.solo) == 1:
            return Sums(joint.num, joint.diagonal, joint, self.rivals)
        num, info = np.empty_like(joint.num), np.empty_like(joint.num)
        for channel in self.solo:
            part = _blocks(channel, stamps)
            num[:, channel.members] = part.num
            info[:, channel.members] = part.diagonal
        return Sums(num, info, joint, self.rivals)

    def solo_sums(self, positions_xy: NDArray, keep: Callable[[slice, NDArray, NDArray], None]) -> None:
        """Solo sums of many positions (a map), handed over block by block.

        Parameters
        ----------
        positions_xy : array (n_position, 2)
        keep : callable
            Takes the positions' slice, num and info (n_block, n_molecule, n_velocity).
        """
        n_molecule = len(self.columns.columns)
        for begin in range(0, len(positions_xy), POSITION_BLOCK):
            block = slice(begin, min(begin + POSITION_BLOCK, len(positions_xy)))
            stamps = self.stamps(positions_xy[block])
            shape = (block.stop - block.start, n_molecule, self.columns.columns.shape[1])
            num, info = np.empty(shape), np.empty(shape)
            for channel in self.solo:
                part = _one_block(channel, stamps)
                num[:, channel.members] = part.num
                info[:, channel.members] = part.diagonal
            keep(block, num, info)

    def gram(self, position_xy: NDArray) -> NDArray[np.float64]:
        """Full information matrix between all templates and velocities at one position.

        Returns
        -------
        float64 array (n_molecule, n_velocity, n_molecule, n_velocity)
            Between templates of different coverage: on the common channels.
        """
        stamps = self.stamps(position_xy)
        n_molecule, n_velocity = self.columns.columns.shape[:2]
        full = _gram(self.joint, stamps).reshape(n_molecule, n_velocity, n_molecule, n_velocity)
        if len(self.solo) > 1:
            for channel in self.solo:
                own = _gram(channel, stamps).reshape(len(channel.members), n_velocity, -1, n_velocity)
                for i, m in enumerate(channel.members):
                    for j, n in enumerate(channel.members):
                        full[m, :, n] = own[i, :, j]
        return full

    def spectrum(self, position_xy: NDArray) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """PSF-weighted residual spectrum of one position and its variance, in units of the PSF's total flux.

        Returns
        -------
        flux, variance : float64 arrays (n_wave,), NaN where nothing is usable
        """
        first, second = _first_and_second(self.exposure, self.stamps(position_xy))
        with np.errstate(invalid="ignore", divide="ignore"):
            return (
                np.where(second[0] > 0, first[0] / second[0], np.nan).astype(np.float64),
                np.where(second[0] > 0, 1.0 / second[0], np.nan).astype(np.float64),
            )


def _subset(channel: Channel, stamps: Stamps) -> tuple[NDArray, NDArray, StarlightFit, Stamps]:
    """Weights, residuals and fit of the spaxels that the stamps touch, and the stamps renumbered."""
    exposure = channel.exposure
    touched = np.unique(stamps.spaxels[stamps.spaxels >= 0])
    if touched.size == len(exposure.weights):
        return exposure.weights, exposure.residual, exposure.fit, stamps
    renumber = np.full(len(exposure.weights) + 1, -1, np.int64)
    renumber[touched] = np.arange(touched.size)
    fit = exposure.fit
    part = StarlightFit(
        fit.residual[touched],
        fit.band[touched],
        fit.scale[touched],
        fit.border[touched],
        fit.corner[touched],
        fit.corner_scale[touched],
    )
    own = Stamps(renumber[stamps.spaxels], stamps.profiles, stamps.node, stamps.fraction)
    return exposure.weights[touched], part.residual, part, own


def _one_block(channel: Channel, stamps: Stamps) -> PositionSums:
    weights, residual, fit, own = _subset(channel, stamps)
    taken = corrections(weights, fit, channel.exposure.nuisance, channel.templates)
    return position_sums(weights, residual, own, channel.templates, taken)


def _blocks(channel: Channel, stamps: Stamps) -> PositionSums:
    """Sums of all positions, block by block."""
    parts = [
        _one_block(channel, stamps[begin : begin + POSITION_BLOCK])
        for begin in range(0, len(stamps.spaxels), POSITION_BLOCK)
    ]
    return PositionSums(
        np.concatenate([part.num for part in parts]), np.concatenate([part.info for part in parts])
    )


def _first_and_second(exposure: PreparedExposure, stamps: Stamps) -> tuple[NDArray, NDArray]:
    shape = (len(stamps.spaxels), exposure.wavelength_um.size)
    first, second = np.empty(shape, np.float32), np.empty(shape, np.float32)
    psf_sums(
        exposure.residual,
        exposure.weights,
        stamps.spaxels,
        stamps.profiles,
        stamps.node,
        stamps.fraction,
        first,
        second,
    )
    return first, second


def _gram(channel: Channel, stamps: Stamps) -> NDArray[np.float64]:
    """T'WPT at one position, companion continuum eliminated, (n_column, n_column)."""
    weights, _, fit, own = _subset(channel, stamps)
    templates, nuisance = channel.templates, channel.exposure.nuisance
    n_column = templates.columns.shape[0] * templates.columns.shape[1]
    flat = np.vstack([templates.columns.reshape(n_column, -1), templates.continuum])
    _, second = _first_and_second(channel.exposure, stamps)
    full = (flat * second[0]) @ flat.T
    overlaps, extras = support_overlaps(weights, nuisance, flat)
    whiten_overlaps(overlaps, extras, fit.band, fit.scale, fit.border, fit.corner, fit.corner_scale)
    rows = np.concatenate([overlaps, extras]) if len(extras) else overlaps
    inside = own.spaxels[0] >= 0
    share = np.zeros(len(weights), np.float32)
    share[own.spaxels[0][inside]] = np.sqrt((own.profiles[0][inside] ** 2).mean(axis=1))
    rows *= share[:, None]
    stacked = rows.reshape(-1, len(flat))
    full -= stacked.T @ stacked
    kept = full[:n_column, :n_column]
    if len(templates.continuum):
        cross = full[:n_column, n_column:]
        inner = full[n_column:, n_column:].copy()
        energy = np.diagonal(inner).copy()
        # a column without information here, or no usable spaxel at all, takes nothing
        inner[np.diag_indices_from(inner)] = np.where(energy > 0, energy * (1.0 + CONTINUUM_RIDGE), 1.0)
        kept = kept - cross @ np.linalg.solve(inner, cross.T)
    return kept


def add(parts: Sequence[Sums]) -> Sums:
    """Sum over exposures."""
    total = parts[0]
    for part in parts[1:]:
        total = total + part
    return total
