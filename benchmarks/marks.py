"""Two marks that know the truth, to stand beside every result and be beaten.

ratio mask          sqrt(|s|^2 / (|s|^2 + |y - s|^2)) on the reference microphone, frames of 1,024 / 256
multichannel Wiener the time-invariant filter per frequency that comes nearest to the truth in the mean square
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.signal import ShortTimeFFT
from scipy.signal.windows import hann

Floats = NDArray[np.float64]

FRAME, HOP = 1024, 256


def _transform() -> ShortTimeFFT:
    return ShortTimeFFT(hann(FRAME, sym=False), HOP, fs=1.0)


def ratio_mask(mixture_at_reference: Floats, truth: Floats) -> Floats:
    """(samples,) and (talkers, samples) in, (talkers, samples) out."""
    stft = _transform()
    y = stft.stft(mixture_at_reference)
    out = []
    for signal in truth:
        s = stft.stft(signal)
        wanted, rest = np.abs(s) ** 2, np.abs(y - s) ** 2
        mask = np.sqrt(wanted / np.maximum(wanted + rest, 1e-30))
        out.append(stft.istft(mask * y, k1=len(signal)))
    return np.array(out)


def multichannel_wiener(mixture: Floats, truth: Floats) -> Floats:
    """(channels, samples) and (talkers, samples) in, (talkers, samples) out."""
    stft = _transform()
    y = stft.stft(mixture).transpose(1, 0, 2)
    s = stft.stft(truth).transpose(1, 0, 2)
    covariance = y @ y.conj().transpose(0, 2, 1)
    loading = 1e-9 * np.trace(covariance, axis1=1, axis2=2).real.max()
    covariance = covariance + loading * np.eye(len(mixture))
    weights = np.linalg.solve(covariance, y @ s.conj().transpose(0, 2, 1))
    return np.asarray(stft.istft((weights.conj().transpose(0, 2, 1) @ y).transpose(1, 0, 2), k1=mixture.shape[1]))
