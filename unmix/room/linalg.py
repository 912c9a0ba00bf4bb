"""Small matrices by the thousand: products, loaded solves that cannot fail, lagged copies."""

from __future__ import annotations

from collections.abc import Sequence
from typing import cast

import numpy as np

from unmix.room.stft import Complexes, Reals

__all__ = ["adjoint", "lagged", "loaded", "power", "safe_solve", "weighted_conjugate"]

_TINY = 1e-30


def adjoint(a: Complexes) -> Complexes:
    """Conjugate transpose of the last two axes."""
    return np.conjugate(np.swapaxes(a, -1, -2))


def loaded(a: Complexes, share: float) -> Complexes:
    """Hermitian ``a`` (..., n, n) plus ``share`` of its mean diagonal; positive definite even when ``a`` is zero."""
    n = a.shape[-1]
    level = np.trace(a, axis1=-2, axis2=-1).real * (share / n) + _TINY
    out = a.copy()
    out[..., np.arange(n), np.arange(n)] += level[..., None]
    return out


def safe_solve(a: Complexes, b: Complexes) -> Complexes:
    """Solutions of a x = b (..., n, n) and (..., n, m); least squares of minimum norm where ``a`` is singular."""
    try:
        x = np.linalg.solve(a, b)
        bad = ~np.isfinite(x).all(axis=(-2, -1))
    except np.linalg.LinAlgError:
        x = np.zeros(np.broadcast_shapes(a.shape[:-2], b.shape[:-2]) + b.shape[-2:], np.result_type(a, b))
        bad = np.ones(a.shape[:-2], bool)
    if bad.any():
        finite = np.nan_to_num(a[bad], nan=0.0, posinf=0.0, neginf=0.0)
        x[bad] = np.linalg.pinv(finite) @ np.nan_to_num(b[bad], nan=0.0, posinf=0.0, neginf=0.0)
    return x


def lagged(signals: Complexes, lags: Sequence[int]) -> Complexes:
    """Copies of (frequencies, channels, frames) delayed by each lag, as (frequencies, lags * channels, frames)."""
    f, m, t = signals.shape
    out = np.zeros((f, len(lags) * m, t), signals.dtype)
    for i, lag in enumerate(lags):
        rows = out[:, i * m : (i + 1) * m]
        if lag >= 0:
            rows[:, :, lag:] = signals[:, :, : max(t - lag, 0)]
        else:
            rows[:, :, : max(t + lag, 0)] = signals[:, :, -lag:]
    return out


def weighted_conjugate(s: Complexes, weight: Reals) -> Complexes:
    """conj(s) * weight for s (frequencies, channels, frames) and real weight (frequencies, 1, frames), in one pass.

    Its transpose is the right factor of sum_t weight s s^H, and the product is the whole cost.
    """
    pairs = np.repeat(weight.astype(s.real.dtype), 2, axis=2)
    pairs[:, :, 1::2] *= -1.0
    return cast("Complexes", (np.ascontiguousarray(s).view(pairs.dtype) * pairs).view(s.dtype))


def power(a: Complexes) -> Reals:
    """Squared magnitude."""
    return np.square(a.real) + np.square(a.imag)
