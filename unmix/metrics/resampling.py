"""Resampling as the published code of STOI does it, stretch by stretch.

With the window g of `pystoi` (a Kaiser-windowed sinc of 2 H + 1 taps), rates in the ratio p / q and zeros around x,

    y[m] = p sum_n g[H + m q - n p] x[n],

which for a block of outputs is one matrix, the same for every block: its product with the blocks' inputs is many
times faster than a loop over taps, and any stretch of y can be had without the rest.
"""

from __future__ import annotations

from functools import lru_cache
from math import gcd
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["Resampled"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

BLOCK = 96
"""Outputs of a block, about: fewer waste the overlap of their inputs, more waste the zeros of the matrix."""
MOST_PHASES = 1000
"""Rates in a ratio with more output phases than this would need a matrix of gigabytes."""
PIECE = 1 << 17
"""Outputs computed at a time."""
KEEP = 3_000_000
"""Results up to this many samples (five minutes at 10 kHz) are kept whole."""


class Resampled:
    """A signal x (samples,) at another rate; `size` is its length there."""

    def __init__(self, x: Signals, rate_in: int, rate_out: int) -> None:
        common = gcd(rate_in, rate_out)
        self._x = x
        self._p, self._q = rate_out // common, rate_in // common
        self.size = -(-x.size * self._p // self._q)
        self._whole: Signals | None = x if self._p == self._q else None
        if self._whole is None and self._p > MOST_PHASES:
            from pystoi.utils import resample_oct

            self._whole = np.asarray(resample_oct(np.asarray(x, dtype=np.float64), rate_out, rate_in))
        elif self._whole is None and self.size <= KEEP:
            pieces = (self._computed(a, min(a + PIECE, self.size)) for a in range(0, self.size, PIECE))
            self._whole = np.concatenate([*pieces]) if self.size else np.zeros(0)

    def stretch(self, first: int, last: int) -> Floats:
        """Samples first..last - 1 of the result, which must lie within it."""
        if self._whole is not None:
            return np.asarray(self._whole[first:last], dtype=np.float64)
        return self._computed(first, last)

    def _computed(self, first: int, last: int) -> Floats:
        M, low = _matrix(self._p, self._q)
        outputs = M.shape[1]
        hop = outputs // self._p * self._q
        begin, end = first // outputs, -(-last // outputs)
        start = begin * hop + low
        stretch = np.zeros((end - begin - 1) * hop + len(M))
        left, right = max(0, start), min(self._x.size, start + stretch.size)
        stretch[left - start : right - start] = self._x[left:right]
        blocks = np.lib.stride_tricks.sliding_window_view(stretch, len(M))[::hop]
        y = np.ascontiguousarray(blocks) @ M
        return np.asarray(y.reshape(-1)[first - begin * outputs : last - begin * outputs])


@lru_cache(maxsize=8)
def _matrix(p: int, q: int) -> tuple[Floats, int]:
    """Inputs to outputs of one block, (inputs, outputs), and the first input's index relative to the block's start."""
    from pystoi.utils import _resample_window_oct

    g = np.asarray(_resample_window_oct(p, q))
    g = p * g / np.sum(g)
    half = (g.size - 1) // 2
    outputs = p * max(1, round(BLOCK / p))
    low, high = -(half // p), ((outputs - 1) * q + half) // p
    taps = half + np.arange(outputs) * q - np.arange(low, high + 1)[:, None] * p
    inside = (taps >= 0) & (taps < g.size)
    return np.where(inside, g[np.clip(taps, 0, g.size - 1)], 0.0), low
