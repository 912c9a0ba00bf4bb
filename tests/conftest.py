"""Shared scenes: small arrays, exact delays, real speech; everything seeded."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from unmix.array import Array
from unmix.audio import read_audio
from unmix.model.delays import Paths, paths_from_bearings

Floats = NDArray[np.float64]

SPEECH = Path(__file__).parent / "data" / "speech"


def circle(microphones: int = 6, radius_m: float = 0.04, *, centre: bool = True) -> Array:
    """A ring of microphones, the reference in its middle (or the first of the ring)."""
    angle = 2.0 * np.pi * np.arange(microphones) / microphones
    ring = np.stack([radius_m * np.cos(angle), radius_m * np.sin(angle), np.zeros(microphones)], axis=1)
    return Array.from_positions(np.vstack([np.zeros((1, 3)), ring]) if centre else ring)


def speech(name: str, seconds: float, sample_rate: int = 16000) -> Floats:
    """A clip of real speech, repeated to the length asked for, at an RMS of 0.05."""
    signal, rate = read_audio(SPEECH / f"{name}.flac")
    if rate != sample_rate:
        from unmix.audio import resample

        signal = resample(signal, rate, sample_rate)
    signal = np.resize(signal[0], round(seconds * sample_rate))
    return np.asarray(0.05 * signal / signal.std())


def delayed(signals: Floats, paths: Paths, sample_rate: int) -> Floats:
    """Exact images (talkers, channels, samples) of talkers at rest, by phase shifts of a padded transform."""
    samples = signals.shape[1]
    size = 1 << (samples + 4096).bit_length()
    spectrum = np.fft.rfft(signals, size)
    omega = 2.0 * np.pi * np.fft.rfftfreq(size, 1.0 / sample_rate)
    phase = np.exp(-1j * omega * paths.delay_s[..., None])
    return np.asarray(np.fft.irfft(spectrum[:, None] * paths.gain[..., None] * phase, size)[..., :samples])


@pytest.fixture(scope="session")
def two_talkers() -> Paths:
    """Two talkers 75 degrees apart at 1.2 m from seven microphones."""
    return paths_from_bearings(circle(), np.radians([20.0, 95.0]), 0.0, 1.2)


@pytest.fixture
def rng() -> np.random.Generator:
    """Seeded random numbers."""
    return np.random.default_rng(20260)


Make = Callable[..., Floats]
