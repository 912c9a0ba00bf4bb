"""How loud a signal is, so that two can be compared by ear at the same level.

Integrated loudness of one channel [1]_: K-weighting (a shelf for the head, a high-pass), mean square z_j over blocks of
0.4 s that overlap by three quarters,

    L_j = -0.691 + 10 log10 z_j,    L = -0.691 + 10 log10 mean{z_j : L_j > -70 and L_j > L' - 10},

L' being the same mean over the blocks above -70 only. The standard lists the filters for 48 kHz; here they are the same
analogue prototypes carried over to any rate by the bilinear transform, which at 48 kHz gives the listed coefficients.

.. [1] Recommendation ITU-R BS.1770-4, "Algorithms to measure audio programme loudness and true-peak audio level", 2015.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

__all__ = ["k_weighting", "loudness"]

Floats = NDArray[np.float64]

_SHELF_HZ, _SHELF_DB, _SHELF_Q = 1681.974450955533, 3.999843853973347, 0.7071752369554196
_HIGH_HZ, _HIGH_Q = 38.13547087602444, 0.5003270373238773
_VB_POWER = 0.4996667741545416
BLOCK_S, STEP_S = 0.4, 0.1
SILENT, RELATIVE = -70.0, -10.0


def k_weighting(sample_rate: int) -> Floats:
    """The two filters as second-order sections: (2, 6), each b0 b1 b2 1 a1 a2."""
    k = math.tan(math.pi * _SHELF_HZ / sample_rate)
    vh = 10.0 ** (_SHELF_DB / 20.0)
    vb = vh**_VB_POWER
    a0 = 1.0 + k / _SHELF_Q + k * k
    shelf = [
        (vh + vb * k / _SHELF_Q + k * k) / a0,
        2.0 * (k * k - vh) / a0,
        (vh - vb * k / _SHELF_Q + k * k) / a0,
        1.0,
        2.0 * (k * k - 1.0) / a0,
        (1.0 - k / _SHELF_Q + k * k) / a0,
    ]
    k = math.tan(math.pi * _HIGH_HZ / sample_rate)
    a0 = 1.0 + k / _HIGH_Q + k * k
    high = [1.0, -2.0, 1.0, 1.0, 2.0 * (k * k - 1.0) / a0, (1.0 - k / _HIGH_Q + k * k) / a0]
    return np.array([shelf, high])


def loudness(signal: Floats, sample_rate: int) -> float | None:
    """Integrated loudness of (samples,) in dB relative to full scale (LKFS); None for silence or under 0.4 s."""
    from scipy.signal import sosfilt

    step = round(STEP_S * sample_rate)
    squares = np.square(sosfilt(k_weighting(sample_rate), signal))
    steps = len(squares) // step
    per_block = round(BLOCK_S / STEP_S)
    if steps < per_block:
        return None
    sums = np.cumsum(np.concatenate([[0.0], squares[: steps * step].reshape(steps, step).mean(axis=1)]))
    z = (sums[per_block:] - sums[:-per_block]) / per_block
    z = z[z > 10.0 ** ((SILENT + 0.691) / 10.0)]
    if not len(z):
        return None
    z = z[z > z.mean() * 10.0 ** (RELATIVE / 10.0)]
    return float(-0.691 + 10.0 * np.log10(z.mean()))
