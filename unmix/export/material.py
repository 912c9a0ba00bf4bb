"""Speech to measure with: the demo's clips as talkers, each faded in and out so that delays cut nothing off."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.audio import read_audio, resample
from unmix.render.demo import demo_spec_path

__all__ = ["speech_material"]

Floats = NDArray[np.float64]

VOICES = ("mate", "engineer", "bosun")
RMS = 0.05
FADE_S = 0.1
SILENCE_S = 0.25


def speech_material(talkers: int, sample_rate: int, seconds: float = 5.0) -> Floats:
    """(talkers, samples) of speech at an RMS of 0.05, with silence at the end; beyond three talkers voices recur.

    Raises FileError when the demo's clips are not installed.
    """
    folder = demo_spec_path().parent
    samples = round(seconds * sample_rate)
    silence, fade = round(SILENCE_S * sample_rate), round(FADE_S * sample_rate)
    window = np.ones(samples)
    rise = np.sin(0.5 * np.pi * (np.arange(fade) + 0.5) / fade) ** 2
    window[:fade] = rise
    window[samples - silence - fade : samples - silence] = rise[::-1]
    window[samples - silence :] = 0.0
    rows = []
    for index in range(talkers):
        clip, rate = read_audio(folder / f"{VOICES[index % len(VOICES)]}.flac")
        voice = np.roll(np.resize(resample(clip, rate, sample_rate)[0], samples), index // len(VOICES) * samples // 3)
        rows.append(voice * window)
    signals = np.stack(rows)
    return np.asarray(RMS * signals / np.sqrt(np.mean(signals**2, axis=1, keepdims=True)))
