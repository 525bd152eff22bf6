"""Template columns of an exposure: t(v) = c * channel{ LSF (x) [F(v) T] } and the companion continuum."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import CoverageError, InputError
from xcorr.exposure import PreparedExposure
from xcorr.search import ProjectedTemplates, project_templates
from xcorr.spectral import LsfOperator, covered_channels, observed_velocity, shifted_columns
from xcorr.starlight import spline_basis
from xcorr.template import Template


@dataclass(frozen=True)
class TemplateColumns:
    """Template columns of one exposure, before projection.

    Attributes
    ----------
    columns : float64 array (n_molecule, n_velocity, n_wave)
        t(v) in data units for amplitude one, without the PSF; 0 where not covered.
    continuum : float64 array (n_continuum, n_wave)
    covered : bool array (n_molecule, n_wave)
        Channels that each template defines at every searched velocity.
    kinds : tuple of str
        `Template.kind` of each.
    """

    columns: NDArray[np.float64]
    continuum: NDArray[np.float64]
    covered: NDArray[np.bool_]
    kinds: tuple[str, ...]

    def project(self, exposure: PreparedExposure, molecules: Sequence[int]) -> ProjectedTemplates:
        """Project some of the molecules with the exposure's mean weights."""
        return project_templates(
            self.columns[list(molecules)], self.continuum, exposure.mean_weights, exposure.nuisance
        )


def template_columns(
    exposure: PreparedExposure,
    templates: Sequence[Template],
    velocity_km_s: NDArray,
    searched: slice = slice(None),
) -> TemplateColumns:
    """Columns t(v) = c * channel{ LSF (x) [F(v) T] } of every template, and the companion continuum.

    Parameters
    ----------
    exposure : PreparedExposure
    templates : sequence of Template
    velocity_km_s : array (n_velocity,)
        Barycentric.
    searched : slice
        Velocities at which the templates must cover a channel; beyond (null velocities) an end value is held.

    Raises
    ------
    CoverageError
        If a template covers fewer than half of the usable channels at every searched velocity.
    """
    shifts = observed_velocity(velocity_km_s, exposure.template_frame_km_s)
    used = exposure.mean_weights > 0
    n_wave = exposure.wavelength_um.size
    columns = np.zeros((len(templates), velocity_km_s.size, n_wave))
    covered = np.zeros((len(templates), n_wave), bool)
    for m, template in enumerate(templates):
        operator = _operator_for(exposure, template)
        covered[m] = covered_channels(operator, template.wavelength_um, shifts[searched], template.covered)
        if covered[m][used].mean() < 0.5:
            raise CoverageError(
                f"template {template.name!r} covers too few channels of {exposure.source or 'the exposure'}",
                f"{100 * covered[m][used].mean():.0f} per cent of {int(used.sum())} at every searched velocity",
                "give a template of wider range, or restrict [[exposure]].wavelength_range_um or the velocities",
            )
        columns[m] = _one_template(exposure, operator, template, shifts, used & covered[m])
        columns[m][:, ~covered[m]] = 0.0
    smooth = spline_basis(exposure.wavelength_um, exposure.order, exposure.companion_knots).dense().T \
        if exposure.companion_knots else np.zeros((0, n_wave))  # fmt: skip
    continuum = smooth * exposure.transmission * exposure.throughput
    return TemplateColumns(columns, continuum, covered, tuple(template.kind for template in templates))


def _operator_for(exposure: PreparedExposure, template: Template) -> LsfOperator:
    """The exposure's operator, or for a template of finite resolution the LSF that is still missing."""
    own = template.resolving_power
    operator = exposure.operator
    if own is None or own > 10.0 * operator.resolving_power.max():
        return operator
    missing = 1.0 / operator.resolving_power**2 - 1.0 / own**2
    # a template not sharper than the data gets the pixel only; one tenth of the LSF keeps the kernel sampled
    resolving = 1.0 / np.sqrt(np.maximum(missing, 0.01 / operator.resolving_power**2))
    return LsfOperator.build(
        operator.wavelength_hi_um, operator.wavelength_um, resolving, edges_um=operator.edges_um
    )


def _one_template(
    exposure: PreparedExposure,
    operator: LsfOperator,
    template: Template,
    shifts: NDArray,
    used: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """t(v) of one template, normalised by the mean of its reference over the used channels at v = 0."""
    flux = np.where(template.covered, template.flux, 0.0)
    reference = np.where(template.covered, template.reference_flux, 0.0)
    at_rest = shifted_columns(operator, template.wavelength_um, reference, np.zeros(1))[0]
    level = at_rest[used].mean()
    if not level > 0:
        raise InputError(
            f"template {template.name!r} has no positive mean over the used channels",
            f"{level:.3g}",
            "check its flux column and units",
        )
    columns = shifted_columns(
        operator, template.wavelength_um, flux / level, shifts, multiply=exposure.transmission_hi
    )
    if exposure.transmission_hi is None:
        columns *= exposure.transmission
    return columns * exposure.throughput
