"""Latency as a device shows it: an impulse from one talker goes in, and where it comes out is looked up.

The impulse is that talker's sound wave: every microphone hears it with its own delay and gain, fractions of samples
included. Latency counts from the sample at which the reference microphone receives it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.live.stage import LiveStage
from unmix.model.delays import Paths
from unmix.solvers.baselines import steering

__all__ = ["impulse_images", "measured_latency"]

Floats = NDArray[np.float64]


def impulse_images(paths: Paths, talker: int, *, at: int, samples: int, sample_rate: float) -> Floats:
    """(channels, samples): what the microphones hear of a band-limited impulse of unit height at sample `at`."""
    omega = np.asarray(2.0 * np.pi * np.fft.rfftfreq(samples), np.float64)
    heard = steering(paths, omega, sample_rate)[:, :, talker].T
    return np.asarray(np.fft.irfft(heard * np.exp(-1j * omega * at), samples, axis=-1))


def measured_latency(
    stage: LiveStage, paths: Paths, *, sample_rate: float, chunk: int = 32, settle: int = 0
) -> tuple[int, ...]:
    """Samples from an impulse at the reference microphone to the peak of its talker's output, for each talker.

    stage   at the start of a stream, and again when this returns
    settle  samples of silence pushed first
    """
    lead = settle + 512
    total = lead + 2 * stage.latency + 1024
    found = []
    for talker in range(paths.talkers):
        heard = impulse_images(paths, talker, at=lead, samples=total, sample_rate=sample_rate)
        out = np.concatenate([stage.push(heard[:, at : at + chunk]) for at in range(0, total, chunk)], axis=1)
        stage.flush()
        found.append(int(np.abs(out[talker]).argmax()) - lead)
    return tuple(found)
