"""Spectral tools: grids, air and vacuum, Doppler, barycentric velocity, line-spread functions, channels."""

from xcorr.spectral.air import air_to_vacuum, vacuum_to_air
from xcorr.spectral.barycentric import barycentric_velocity
from xcorr.spectral.broadening import convolve_lsf, rotational_broadening
from xcorr.spectral.channels import channel_edges, log_grid, to_channels
from xcorr.spectral.columns import covered_channels, shifted_columns
from xcorr.spectral.doppler import (
    compose_velocities,
    doppler_factor,
    doppler_shift,
    observed_velocity,
    velocity_of_factor,
)
from xcorr.spectral.lsf import LsfOperator

__all__ = [
    "LsfOperator",
    "air_to_vacuum",
    "barycentric_velocity",
    "channel_edges",
    "compose_velocities",
    "convolve_lsf",
    "covered_channels",
    "doppler_factor",
    "doppler_shift",
    "log_grid",
    "observed_velocity",
    "rotational_broadening",
    "shifted_columns",
    "to_channels",
    "vacuum_to_air",
    "velocity_of_factor",
]
