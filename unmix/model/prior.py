"""What is believed of a talker before listening: || Q^(1/2) z ||^2, Q a stationary precision.

    none    nothing; where talkers cannot be told apart the minimum-norm answer, or a refusal
    flat    every frequency equally likely
    speech  the long-term average speech spectrum: 1/Q is its all-pole fit, so Q^(1/2) is a short filter

The weight is relative to the mean diagonal of H^T R^-1 H.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.model.mixing import Mixing
from unmix.physics import speech_spectrum_db

__all__ = ["Prior", "PriorKind", "make_prior"]

Floats = NDArray[np.float64]
PriorKind = Literal["none", "flat", "speech"]

_SPEECH_ORDER = 12
_GRID = 2048


@dataclass(frozen=True)
class Prior:
    """Precision Q as a filter: Q = weight * |A(omega)|^2.

    weight  absolute, 0 for none
    taps    causal filter A whose mean square response is 1 at the speech spectrum's peak band ("flat": just 1)
    """

    kind: PriorKind
    weight: float
    taps: Floats

    def precision(self, omega: Floats) -> Floats:
        """Q at `omega` radians per sample."""
        response = np.exp(-1j * np.outer(omega, np.arange(len(self.taps)))) @ self.taps
        return np.asarray(self.weight * np.abs(response) ** 2)

    def autocorrelation(self) -> Floats:
        """Band of the Toeplitz matrix Q: lags 0, 1, ..."""
        full = np.correlate(self.taps, self.taps, mode="full")
        return np.asarray(self.weight * full[len(self.taps) - 1 :])


def make_prior(kind: PriorKind, relative_weight: float, mixing: Mixing, sample_rate: float) -> Prior:
    """A prior for the (whitened) model; `relative_weight` is multiplied by the mean diagonal of H^T R^-1 H."""
    if kind == "none":
        return Prior(kind, 0.0, np.ones(1))
    energy = np.sum(mixing.taps**2, axis=(-1, -2))
    weight = relative_weight * float(np.mean(energy))
    taps = np.ones(1) if kind == "flat" else _speech_whitening(sample_rate)
    return Prior(kind, weight, taps)


def _speech_whitening(sample_rate: float) -> Floats:
    """Prediction-error filter of the average speech spectrum, scaled to 1 where speech is strongest."""
    from scipy.linalg import solve_toeplitz

    frequencies = np.fft.rfftfreq(_GRID, 1.0 / sample_rate)
    power = 10.0 ** (speech_spectrum_db(frequencies) / 10.0)
    lags = np.fft.irfft(power)[: _SPEECH_ORDER + 1]
    lags[0] *= 1.0 + 1e-9
    taps = np.concatenate([[1.0], -solve_toeplitz(lags[:-1], lags[1:])])
    response = np.abs(np.fft.rfft(taps, _GRID))
    return np.asarray(taps / response.min())
