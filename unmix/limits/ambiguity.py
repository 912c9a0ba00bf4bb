"""Where spatial ambiguity starts: the frequency from which two bearings sound alike again.

Two bearings with steering vectors a, b differ the more the lower |a^H b| / M falls below 1. Going up in frequency, a
pair that has been told apart (below `APART`) and comes back (above `ALIKE`) is ambiguous from there on; a line of
microphones half a wavelength apart is the textbook case. Pairs that never differ, as front and back of a line, are no
matter of frequency and are not counted.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.model.delays import wave_delays
from unmix.physics import speed_of_sound, unit_vector

__all__ = ["ambiguity_hz", "mirror_pairs"]

Floats = NDArray[np.float64]

APART, ALIKE = 0.5, 0.99
BEARINGS = 72
STEPS = 800
"""Frequencies tried."""


def ambiguity_hz(array: Array, highest_hz: float, temperature_c: float = 20.0) -> float | None:
    """Frequency above which two horizontal bearings sound alike; None when not below `highest_hz`."""
    delay = _delays(array, temperature_c)
    first, second = np.triu_indices(len(delay), 1)
    difference = delay[first] - delay[second]
    step_hz = highest_hz / STEPS
    turn = np.exp(2j * np.pi * step_hz * difference)
    phase = np.ones_like(turn)
    apart = np.zeros(len(difference), bool)
    for step in range(1, STEPS):
        phase *= turn
        likeness = np.abs(phase.mean(axis=1))
        if np.any(likeness[apart] > ALIKE):
            return float(step * step_hz)
        apart |= likeness < APART
    return None


def mirror_pairs(array: Array, temperature_c: float = 20.0) -> bool:
    """Whether some horizontal bearings cannot be told apart at any frequency, as front and back of a line."""
    delay = _delays(array, temperature_c)
    relative = delay - delay.mean(axis=1, keepdims=True)
    first, second = np.triu_indices(len(delay), 1)
    return bool(np.any(np.abs(relative[first] - relative[second]).max(axis=1) < 1e-8))


def _delays(array: Array, temperature_c: float) -> Floats:
    directions = unit_vector(2.0 * np.pi * np.arange(BEARINGS) / BEARINGS)
    return wave_delays(array.positions_m, directions, None, speed_of_sound(temperature_c))[0]
