"""`reduced`: the constraint eliminated, banded normal equations, Cholesky.

With E x = 0 put in, a block of N samples has unknowns z_k[t], t = -R..N-1+R, and

    (A^T A + Q) z = A^T y,     A[(m, n), (k, t)] = h_km[t - n].

Ordered by time and then talker, A^T A has half-bandwidth 2 R K + K - 1 and is factored by LAPACK's pbtrf. Where delays
are held for groups of samples, the contribution of a group slides along the band; it is entered at the group's first
sample, taken back after its last, and summed up along time.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError
from unmix.model.mixing import Mixing
from unmix.model.prior import Prior
from unmix.solvers.problem import Problem

__all__ = ["Factor", "factorise", "solve_block"]

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]


class Factor:
    """A factored block: solves any samples recorded under the same delays."""

    def __init__(self, mixing: Mixing, cholesky: Floats, samples: int) -> None:
        self._mixing = mixing
        self._cholesky = cholesky
        self.samples = samples

    def solve(self, whitened: Floats) -> Floats:
        """Talkers (talkers, samples) of a whitened block (channels, samples)."""
        from scipy.linalg import cho_solve_banded

        right = correlate(self._mixing, whitened)
        flat = cho_solve_banded((self._cholesky, True), right.reshape(-1), check_finite=False)
        r = self._mixing.reach
        return np.asarray(flat.reshape(right.shape)[r : r + self.samples].T)


def factorise(problem: Problem, samples: int) -> Factor:
    """Factor the normal equations of a block of `samples` samples.

    Raises UnsolvableError when they are singular: without a prior, two talkers cannot be told apart at zero frequency.
    """
    from scipy.linalg import LinAlgError, cholesky_banded

    band = normal_band(problem.whitened, problem.prior, samples)
    try:
        cholesky = cholesky_banded(band, overwrite_ab=True, lower=True, check_finite=False)
    except LinAlgError:
        raise UnsolvableError(
            'the talkers cannot be told apart at low frequencies without a prior; set prior = "flat", or use '
            'method = "stationary", whose answer is then the one of minimum norm'
        ) from None
    return Factor(problem.whitened, cholesky, samples)


def solve_block(problem: Problem, whitened: Floats) -> Floats:
    """Factor and solve one block: (channels, samples) whitened in, (talkers, samples) out."""
    return factorise(problem, whitened.shape[1]).solve(whitened)


def normal_band(mixing: Mixing, prior: Prior, samples: int) -> Floats:
    """A^T A + Q in LAPACK's lower band storage: (half-bandwidth + 1, unknowns)."""
    taps = mixing.taps if mixing.taps.ndim == 4 else mixing.taps[None]
    groups, k, _, width = taps.shape
    hold = mixing.hold or samples
    flat = np.ascontiguousarray(taps.transpose(0, 2, 3, 1)).reshape(groups, -1, width * k)
    pairs = flat.transpose(0, 2, 1) @ flat
    lags = prior.autocorrelation()
    rows = max(width, len(lags)) * k
    columns = (samples + width - 1) * k
    enter, leave, source = _band_places(groups, hold, samples, width, k)
    values = pairs.reshape(-1)[source]
    stride = columns + k
    changes = np.bincount(enter, values, minlength=rows * stride)
    changes -= np.bincount(leave, values, minlength=rows * stride)
    band = np.cumsum(changes.reshape(rows, -1, k), axis=1)[:, :-1].reshape(rows, columns)
    for lag, value in enumerate(lags):
        band[lag * k, : columns - lag * k] += value
    return np.asarray(band)


@lru_cache(maxsize=8)
def _band_places(groups: int, hold: int, samples: int, width: int, k: int) -> tuple[Indices, Indices, Indices]:
    """Where each product of two taps of each group enters and leaves the band, and where it stands among them all."""
    a, p, b, q = np.meshgrid(np.arange(width), np.arange(k), np.arange(width), np.arange(k), indexing="ij")
    a, p, b, q = (v.ravel() for v in (a, p, b, q))
    lower = (b - a) * k + q - p >= 0
    a, p, b, q = (v[lower] for v in (a, p, b, q))
    row = (b - a) * k + q - p
    stride = (samples + width) * k
    base = row * stride + a * k + p
    first = np.arange(groups) * hold
    last = np.minimum(first + hold, samples)
    enter = (base[None, :] + first[:, None] * k).ravel()
    leave = (base[None, :] + last[:, None] * k).ravel()
    product = ((a * k + p) * width * k + b * k + q)[None, :] + (np.arange(groups) * (width * k) ** 2)[:, None]
    return enter, leave, product.ravel()


def correlate(mixing: Mixing, whitened: Floats) -> Floats:
    """A^T y: (channels, samples) in, (samples + 2R, talkers) out."""
    taps, samples = mixing.taps, whitened.shape[1]
    width = taps.shape[-1]
    if taps.ndim == 3:
        from scipy.signal import fftconvolve

        full = fftconvolve(whitened[None], taps, axes=2).sum(axis=1)
        return np.asarray(full.T)
    groups, k = taps.shape[:2]
    padded = np.zeros((whitened.shape[0], groups * mixing.hold))
    padded[:, :samples] = whitened
    frames = padded.reshape(-1, groups, mixing.hold).transpose(1, 2, 0)
    weighed = frames @ taps.transpose(0, 2, 1, 3).reshape(groups, -1, k * width)
    weighed = weighed.reshape(groups * mixing.hold, k, width)
    out = np.zeros((groups * mixing.hold + width - 1, k))
    for a in range(width):
        out[a : a + len(weighed)] += weighed[:, :, a]
    return out[: samples + width - 1]
