"""Talkers' variances as nonnegative factors: lambda_k[f, t] = sum_c b_k[f, c] g_k[c, t].

Multiplicative updates that lower sum p / lambda + log lambda (the Itakura-Saito divergence), as in independent
low-rank matrix analysis [1]_.

.. [1] D. Kitamura, N. Ono, H. Sawada, H. Kameoka, H. Saruwatari, "Determined blind source separation unifying
   independent vector analysis and nonnegative matrix factorization", IEEE/ACM Trans. ASLP 24(9), 2016.
"""

from __future__ import annotations

import numpy as np

from unmix.room.bands import Bands
from unmix.room.stft import Reals

__all__ = ["Factors"]

_FLOOR = 1e-4
_TINY = 1e-9
_ROUNDS = 2


class Factors:
    """Bases (K, frequencies, components) and activations (K, components, frames), updated once per iteration."""

    def __init__(self, frequencies: int, talkers: int, frames: int, components: int, *, seed: int = 0) -> None:
        rng = np.random.default_rng(seed)
        self._bases = rng.uniform(0.5, 1.5, (talkers, frequencies, components)).astype(np.float32)
        self._gains = np.zeros((talkers, components, frames), np.float32)
        self._rng = rng

    def inverse_variance(self, p: Reals, bands: Bands) -> Reals:
        """Update on powers (frequencies, K, frames); return 1 / lambda, each talker's powers scaled to mean one.

        Bases are updated band by band; the activations take the sums over all bands.
        """
        p = p.transpose(1, 0, 2)
        p = p / (p.mean(axis=2, keepdims=True) + np.finfo(p.dtype).tiny)
        p = np.maximum(p, _FLOOR)
        if not self._gains.any():
            # The frame model is the start: every component follows the mean over frequency, with some spread.
            spread = self._rng.uniform(0.7, 1.3, self._gains.shape).astype(np.float32)
            self._gains = p.mean(axis=1)[:, None] * spread / self._gains.shape[1]

        def update(b: slice) -> tuple[Reals, Reals]:
            inverse, weighted = self._ratios(p[:, b], b)
            back = np.swapaxes(self._gains, 1, 2)
            self._bases[:, b] *= np.sqrt((weighted @ back) / (inverse @ back + _TINY))
            self._bases[:, b] += _TINY
            inverse, weighted = self._ratios(p[:, b], b)
            across = np.swapaxes(self._bases[:, b], 1, 2)
            return across @ weighted, across @ inverse

        for _ in range(_ROUNDS):
            sums = bands.each(update)
            above, below = sum(s[0] for s in sums), sum(s[1] for s in sums)
            self._gains = self._gains * np.sqrt(above / (below + _TINY)) + _TINY
        out = np.empty((p.shape[1], p.shape[0], p.shape[2]), p.dtype)

        def invert(b: slice) -> None:
            out[b] = (1.0 / np.maximum(self._bases[:, b] @ self._gains, _FLOOR)).transpose(1, 0, 2)

        bands.each(invert)
        return out

    def _ratios(self, p: Reals, b: slice) -> tuple[Reals, Reals]:
        """1 / lambda and p / lambda^2 of one band."""
        inverse = 1.0 / (self._bases[:, b] @ self._gains)
        return inverse, p * np.square(inverse)
