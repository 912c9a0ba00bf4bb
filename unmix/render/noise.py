"""Noise at the microphones: their own, and a diffuse field's."""

from __future__ import annotations

from typing import Literal

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.physics import diffuse_coherence, pairwise_distances, speech_spectrum_db

__all__ = ["diffuse_noise", "sensor_noise"]

Floats = NDArray[np.float64]


def sensor_noise(rng: np.random.Generator, channels: int, samples: int) -> Floats:
    """White Gaussian noise of RMS 1, independent between microphones: (channels, samples)."""
    return rng.standard_normal((channels, samples))


def diffuse_noise(
    rng: np.random.Generator,
    positions_m: Floats,
    samples: int,
    sample_rate: int,
    *,
    speed_m_s: float,
    spectrum: Literal["white", "speech"] = "white",
) -> Floats:
    """Gaussian noise of a spherically isotropic field, expected RMS 1 at every microphone: (channels, samples).

    Independent noises n are mixed per frequency, x(f) = G(f)^(1/2) n(f), G the coherence sin(k d)/(k d) of the
    microphones and G^(1/2) its symmetric root, so that E[x x^H] = G. Roots are taken on a grid on which k d of the
    farthest pair advances by less than 0.1 and interpolated between; the coherence is then off by less than 2e-3.
    An isotropic field looks the same however the array is turned.
    """
    channels = len(positions_m)
    length = scipy.fft.next_fast_len(samples, real=True)
    frequencies = scipy.fft.rfftfreq(length, 1.0 / sample_rate)
    noise = scipy.fft.rfft(rng.standard_normal((channels, length)), axis=1)
    distances = pairwise_distances(positions_m)
    nyquist = sample_rate / 2.0
    steps = max(8, int(np.ceil(20.0 * np.pi * distances.max() * nyquist / speed_m_s)))
    grid = np.linspace(0.0, nyquist, steps + 1)
    roots = _symmetric_roots(diffuse_coherence(distances, grid, speed_m_s))
    mixed = np.empty_like(noise)
    edges = np.searchsorted(frequencies, grid)
    edges[0], edges[-1] = 0, frequencies.size
    for step in range(steps):
        band = slice(edges[step], edges[step + 1])
        upper = (frequencies[band] - grid[step]) / (grid[1] - grid[0])
        mixed[:, band] = (1.0 - upper) * (roots[step] @ noise[:, band]) + upper * (roots[step + 1] @ noise[:, band])
    if spectrum == "speech":
        shape = 10.0 ** (speech_spectrum_db(frequencies) / 20.0)
        mixed *= shape / np.sqrt(np.mean(shape**2))
    return np.asarray(scipy.fft.irfft(mixed, length, axis=1)[:, :samples])


def _symmetric_roots(matrices: Floats) -> Floats:
    """Symmetric square roots of positive semidefinite matrices (count, n, n)."""
    values, vectors = np.linalg.eigh(matrices)
    scaled = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :]
    return np.asarray(scaled @ vectors.transpose(0, 2, 1))
