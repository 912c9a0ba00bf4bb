"""What an ideal room leaves: the best output in diffuse reverberation.

Each talker's reverberation is taken as a diffuse field, independent of the direct sound, of power rho relative to it:

    rho = 16 pi d^2 / A,    A = 24 ln(10) V / (c T)         (Kuttruff, Room Acoustics; Sabine's A)

d the talker's distance, V the room's volume, T its reverberation time; directivity 1. With P the talkers' power, one
microphone's noise sigma2 and the coherence Gamma of the diffuse field, what is not talker k's direct sound has

    R = sum_(j != k) P h_j h_j^H + K P rho Gamma + sigma2 I

and the time-invariant filter w = R^-1 h_k is best: no other has a larger ratio of direct sound to all else,
P h_k^H R^-1 h_k. The same filter's SIR counts the others' direct sound and reverberation alone, its SNR the noise
alone. Multi-frame prediction and masks, which vary in time, may do better: this is what the array itself can give.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.physics import diffuse_coherence, pairwise_distances, speed_of_sound

__all__ = ["RoomCase", "RoomLimits", "best_in_room", "critical_distance_m", "reverberation_ratio"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class RoomCase:
    """An ideal room: reverberation time, volume, and how far the talkers sit."""

    t60_s: float
    volume_m3: float
    distance_m: float


@dataclass(frozen=True)
class RoomLimits:
    """Best output in a room, in dB: sinr over all that is not the direct sound, sir over the other talkers."""

    sinr_db: Floats
    sir_db: Floats
    snr_db: Floats


def critical_distance_m(case: RoomCase, temperature_c: float = 20.0) -> float:
    """Distance at which direct and reverberant power are equal."""
    absorption = 24.0 * math.log(10.0) * case.volume_m3 / (speed_of_sound(temperature_c) * case.t60_s)
    return math.sqrt(absorption / (16.0 * math.pi))


def reverberation_ratio(case: RoomCase, temperature_c: float = 20.0) -> float:
    """rho: reverberant over direct power."""
    return (case.distance_m / critical_distance_m(case, temperature_c)) ** 2


def best_filters(h: Complexes, gamma: Complexes, power: Floats, rho: float, noise: float) -> tuple[Complexes, ...]:
    """Best filters w (..., frequencies, talkers, channels), conjugated ready to be applied, and covariances of the
    other talkers (..., frequencies, talkers, channels, channels)."""
    m, k = h.shape[-2:]
    columns = np.swapaxes(h, -1, -2)
    rank_one = columns[..., :, None] * columns[..., None, :].conj()
    p = power[:, None, None, None]
    others = p * (rank_one.sum(axis=-3, keepdims=True) - rank_one + (k - 1) * rho * gamma[:, None])
    rest = others + p * rho * gamma[:, None] + noise * np.eye(m)
    w = np.linalg.solve(rest, columns[..., None])[..., 0]
    return np.asarray(w.conj()), np.asarray(others)


def best_in_room(
    h: Complexes,
    positions_m: Floats,
    frequency_hz: Floats,
    power: Floats,
    noise: float,
    rho: float,
    temperature_c: float = 20.0,
) -> RoomLimits:
    """Best output over all frequencies: H (groups, frequencies, channels, talkers) to (groups, talkers) each.

    power  (frequencies,) power density of every talker at a microphone, noise that of the microphone's own noise
    """
    gamma = diffuse_coherence(pairwise_distances(positions_m), frequency_hz, speed_of_sound(temperature_c)).astype(
        np.complex128
    )
    w, others = best_filters(h, gamma, power, rho, noise)
    through = np.einsum("...km,...mk->...k", w, h)
    # Every talker's direct sound passes unchanged; the spectrum that comes out is the talker's own.
    w = w / through[..., None]
    out_others = np.einsum("...km,...kmn,...kn->...k", w, others, w.conj()).real
    out_own = power[:, None] * rho * np.einsum("...km,...mn,...kn->...k", w, gamma, w.conj()).real
    out_noise = noise * np.sum(np.abs(w) ** 2, axis=-1)
    # The least-square gain per frequency keeps a frequency in which nothing can be had from drowning the rest.
    unwanted = out_others + out_own + out_noise
    wiener = power[:, None] / (power[:, None] + unwanted)
    signal = np.sum(wiener**2 * power[:, None], axis=-2)

    def db(part: Floats) -> Floats:
        return np.asarray(10.0 * np.log10(signal / np.sum(wiener**2 * part, axis=-2)))

    return RoomLimits(db(unwanted), db(out_others), db(out_noise))
