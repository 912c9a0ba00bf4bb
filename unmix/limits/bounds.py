"""Cramer-Rao bounds on the bearings and on the signals themselves.

Bearings: `unmix.bearings.bound`, summed over frequency; a band of width B heard for T seconds gives B T snapshots.
Signals: at known bearings no unbiased estimate has less error than sigma2 [(H^H H)^-1]_kk, which the solve reaches.
Bearings that must be found from the same sound add [2]_

    sum_a | [H^+ d_a]_k |^2 P_a C_aa,        d_a the derivative of talker a's column, C the bearings' bound,

the part of a bearing's error that moves one talker into the other.

.. [2] By the Schur complement of the joint Fisher information; S. M. Kay, "Fundamentals of Statistical Signal
   Processing: Estimation Theory", 1993, section 3.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.bound import white_noise_bound
from unmix.errors import UnsolvableError
from unmix.limits.ladder import noise_gain
from unmix.physics import speed_of_sound, unit_vector

__all__ = ["SignalBound", "bearing_bounds", "signal_bound"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class SignalBound:
    """Least error of talker signals relative to their power, in dB (frequencies, talkers): bearings known, found."""

    known_db: Floats
    found_db: Floats


def azimuth_delays(array: Array, azimuth: Floats, temperature_c: float = 20.0) -> tuple[Floats, Floats]:
    """Delays relative to the reference (talkers, channels) of plane waves, and their derivatives by azimuth."""
    relative = array.positions_m - array.positions_m[array.reference_channel]
    c = speed_of_sound(temperature_c)
    return -unit_vector(azimuth) @ relative.T / c, -unit_vector(azimuth + 0.5 * np.pi) @ relative.T / c


def bearing_bounds(
    array: Array,
    azimuth: Floats,
    frequency_hz: Floats,
    power: Floats,
    noise: float,
    snapshots: float,
    temperature_c: float = 20.0,
) -> Floats | None:
    """Covariance (talkers, talkers) of azimuths in radians that no unbiased estimate goes below; None if singular.

    power, snapshots  power density of each talker at a microphone, number of snapshots, per frequency
    """
    delay, slope = azimuth_delays(array, azimuth, temperature_c)
    covariance = power[:, None, None] * np.eye(len(azimuth))
    try:
        return white_noise_bound(delay, slope[..., None], frequency_hz, covariance.astype(complex), noise, snapshots)
    except UnsolvableError:
        return None


def signal_bound(
    array: Array,
    azimuth: Floats,
    frequency_hz: Floats,
    power: Floats,
    noise: float,
    snapshots: float,
    temperature_c: float = 20.0,
) -> SignalBound:
    """Bound on the signals of talkers at `azimuth` (talkers,), radians; arguments as of `bearing_bounds`."""
    delay, slope = azimuth_delays(array, azimuth, temperature_c)
    omega = 2.0 * np.pi * frequency_hz[:, None, None]
    h = np.exp(-1j * omega * delay.T)
    d = -1j * omega * slope.T * h
    known = noise * noise_gain(h) / power[:, None]
    bearings = bearing_bounds(array, azimuth, frequency_hz, power, noise, snapshots, temperature_c)
    if bearings is None:
        return SignalBound(10.0 * np.log10(known), np.full_like(known, np.inf))
    moved = np.abs(np.linalg.pinv(h) @ d) ** 2
    found = known + moved @ np.diag(bearings)
    return SignalBound(10.0 * np.log10(known), 10.0 * np.log10(found))
