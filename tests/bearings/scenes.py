"""Small recordings with exact delays, and directions to compare with."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from tests.conftest import circle, delayed, speech
from unmix.array import Array
from unmix.model.delays import paths_from_bearings
from unmix.physics import unit_vector

Floats = NDArray[np.float64]

RATE = 16000
VOICES = ("novel-reader", "card-reader", "robot-commands", "arctic-a0007")


def line(microphones: int = 4, spacing_m: float = 0.05) -> Array:
    """A straight line along y."""
    positions = np.zeros((microphones, 3))
    positions[:, 1] = (np.arange(microphones) - 0.5 * (microphones - 1)) * spacing_m
    return Array.from_positions(positions)


def solid() -> Array:
    """Five microphones that lie in no plane."""
    return Array.from_positions(
        np.array([[0.0, 0.0, 0.0], [0.05, 0.0, 0.0], [0.0, 0.05, 0.0], [0.0, 0.0, 0.05], [-0.03, -0.03, 0.02]])
    )


def recorded(
    azimuths_deg: Sequence[float],
    *,
    seconds: float = 4.0,
    elevations_deg: float | Sequence[float] = 0.0,
    array: Array | None = None,
    snr_db: float = 30.0,
    signals: Floats | None = None,
    seed: int = 5,
) -> Floats:
    """Real speech as plane waves, with microphone noise: (channels, samples)."""
    array = circle() if array is None else array
    elevations = np.radians(np.broadcast_to(elevations_deg, len(azimuths_deg)))
    paths = paths_from_bearings(array, np.radians(azimuths_deg), elevations, np.full(len(azimuths_deg), np.nan))
    if signals is None:
        signals = np.stack([speech(VOICES[k], seconds) for k in range(len(azimuths_deg))])
    clean = delayed(signals, paths, RATE).sum(axis=0)
    noise = 0.05 * 10 ** (-snr_db / 20) * np.random.default_rng(seed).standard_normal(clean.shape)
    return np.asarray(clean + noise)


def apart_deg(a: float | Floats, b: float | Floats) -> Floats:
    """Angles between azimuths in radians, in degrees."""
    return np.asarray(np.degrees(np.abs(np.angle(np.exp(1j * (np.asarray(a) - np.asarray(b)))))))


def directions(*azimuths_deg: float) -> Floats:
    """Unit vectors (n, 3) in the horizontal plane."""
    return unit_vector(np.radians(np.array(azimuths_deg, dtype=np.float64)))
