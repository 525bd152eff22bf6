"""Spectral tools: grids, air and vacuum, Doppler shifts, barycentric velocity, line-spread functions, channels."""

from xcorr.spectral.air import air_to_vacuum, vacuum_to_air
from xcorr.spectral.barycentric import barycentric_velocity
from xcorr.spectral.doppler import (
    compose_velocities,
    doppler_factor,
    doppler_shift,
    observed_velocity,
    velocity_of_factor,
)

__all__ = [
    "air_to_vacuum",
    "barycentric_velocity",
    "compose_velocities",
    "doppler_factor",
    "doppler_shift",
    "observed_velocity",
    "vacuum_to_air",
    "velocity_of_factor",
]
