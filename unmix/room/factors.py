"""Talkers' variances as nonnegative factors: lambda_k[f, t] = sum_c b_k[f, c] g_k[c, t].

Multiplicative updates that lower sum p / lambda + log lambda (the Itakura-Saito divergence), as in independent
low-rank matrix analysis [1]_.

.. [1] D. Kitamura, N. Ono, H. Sawada, H. Kameoka, H. Saruwatari, "Determined blind source separation unifying
   independent vector analysis and nonnegative matrix factorization", IEEE/ACM Trans. ASLP 24(9), 2016.
"""

from __future__ import annotations

import numpy as np

from unmix.room.stft import Reals

__all__ = ["Factors"]

_FLOOR = 1e-4


class Factors:
    """Bases (K, frequencies, components) and activations (K, components, frames), updated once per iteration."""

    def __init__(self, frequencies: int, talkers: int, frames: int, components: int, *, seed: int = 0) -> None:
        rng = np.random.default_rng(seed)
        self._bases = rng.uniform(0.5, 1.5, (talkers, frequencies, components)).astype(np.float32)
        self._gains = np.zeros((talkers, components, frames), np.float32)
        self._rng = rng

    def inverse_variance(self, p: Reals) -> Reals:
        """Update on powers (frequencies, K, frames); return 1 / lambda, each talker's powers scaled to mean one."""
        p = p.transpose(1, 0, 2)
        p = p / (p.mean(axis=2, keepdims=True) + np.finfo(p.dtype).tiny)
        p = np.maximum(p, _FLOOR)
        if not self._gains.any():
            # The frame model is the start: every component follows the mean over frequency, with some spread.
            spread = self._rng.uniform(0.7, 1.3, self._gains.shape).astype(np.float32)
            self._gains = p.mean(axis=1)[:, None] * spread / self._gains.shape[1]
        for _ in range(2):
            lam = self._bases @ self._gains
            back = np.swapaxes(self._gains, 1, 2)
            self._bases = self._bases * np.sqrt(((p / np.square(lam)) @ back) / ((1.0 / lam) @ back + 1e-12)) + 1e-9
            lam = self._bases @ self._gains
            back = np.swapaxes(self._bases, 1, 2)
            self._gains = self._gains * np.sqrt((back @ (p / np.square(lam))) / (back @ (1.0 / lam) + 1e-12)) + 1e-9
        lam = np.maximum(self._bases @ self._gains, _FLOOR)
        return np.ascontiguousarray((1.0 / lam).transpose(1, 0, 2))
