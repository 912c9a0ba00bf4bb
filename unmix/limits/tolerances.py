"""What tolerances of gain, phase and position cost: leakage of one talker into the other.

The solve believes H and the microphones do H + dH, dH_mj = H_mj (a_m + i phi_m + i k u_j . p_m) to first order, a in
nepers. Talker j then comes out for talker k with [B dH]_kj, B = (H^H H)^-1 H^H. Independent errors of standard
deviations a, phi, p (per axis) give the expected leakage

    E |[B dH]_kj|^2 = sum_m |B_km|^2 |H_mj|^2 (a^2 + phi^2 + (omega p / c)^2),

which `monte_carlo` checks by drawing arrays, with the exact exponential. Errors of the reference microphone move a
talker's own level alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.physics import speed_of_sound, unit_vector

__all__ = ["Tolerances", "first_order_leakage", "monte_carlo_leakage"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class Tolerances:
    """Standard deviations of each microphone's errors: gain in dB, phase in radians, position in metres per axis."""

    gain_db: float = 0.5
    phase: float = float(np.radians(3.0))
    position_m: float = 1e-3

    @property
    def neper(self) -> float:
        """The gain's deviation as a natural logarithm."""
        return self.gain_db * float(np.log(10.0)) / 20.0


def first_order_leakage(
    h: Complexes, frequency_hz: Floats, tolerances: Tolerances, temperature_c: float = 20.0
) -> Floats:
    """Expected power of the other talkers in each output, over that of the talker: H (..., frequencies, channels,
    talkers) to (..., frequencies, talkers)."""
    wave = 2.0 * np.pi * frequency_hz / speed_of_sound(temperature_c)
    variance = tolerances.neper**2 + tolerances.phase**2 + (wave * tolerances.position_m) ** 2
    b = np.abs(np.linalg.pinv(h)) ** 2
    leaked = b @ np.abs(h) ** 2
    others = leaked.sum(axis=-1) - np.einsum("...kk->...k", leaked)
    return np.asarray(others * variance[:, None])


def monte_carlo_leakage(
    h: Complexes,
    azimuth: Floats,
    frequency_hz: Floats,
    tolerances: Tolerances,
    *,
    draws: int = 200,
    seed: int = 1,
    temperature_c: float = 20.0,
) -> Floats:
    """The same from `draws` random arrays: (groups, frequencies, channels, talkers), azimuth (groups, talkers)."""
    rng = np.random.default_rng(seed)
    wave = 2.0 * np.pi * frequency_hz / speed_of_sound(temperature_c)
    b = np.linalg.pinv(h)
    m = h.shape[-2]
    total = np.zeros((*h.shape[:-2], h.shape[-1]))
    for _ in range(draws):
        gain, phase = rng.standard_normal((2, m))
        plain = np.asarray(tolerances.neper * gain + 1j * tolerances.phase * phase)
        shift = tolerances.position_m * rng.standard_normal((m, 3)) @ unit_vector(azimuth).transpose(0, 2, 1)
        error = np.exp(plain[:, None] + 1j * wave[:, None, None] * shift[:, None])
        power = np.abs(b @ (error * h)) ** 2
        total += power.sum(axis=-1) - np.einsum("...kk->...k", power)
    return np.asarray(total / draws)
