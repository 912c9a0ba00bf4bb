"""Filters with less reach that change the output least.

Where filters V may not see all the samples that they want (a bound on latency, or on length), cutting their tails is
not the best that can be done: the remaining taps can make up for most of it. With C(omega) = sum_j S_j a_j a_j^H + s I
the covariance of what the microphones hear, S_j the talkers' spectra, a_j how talker j reaches the microphones, and s
the microphones' noise,

    minimise over W with the allowed taps   E |(W - V) y|^2 = sum_omega (W - V) C (W - V)^H

whose normal equations W C = V C on the allowed taps (the finite Wiener filter for the output of V; N. Wiener,
"Extrapolation, interpolation, and smoothing of stationary time series", 1949) are block-Toeplitz. They are solved by
conjugate gradients (M. R. Hestenes and E. Stiefel, 1952), products by FFT, preconditioned by C^-1 on the same grid
(circulants as in G. Strang, "A proposal for Toeplitz matrix calculations", 1986). As reach grows, W becomes V.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.live.bank import fitted
from unmix.model.delays import Paths
from unmix.physics import speech_spectrum_db
from unmix.solvers.baselines import steering
from unmix.solvers.stationary import FilterBank

__all__ = ["NOISE_DB", "Refit", "refit"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

NOISE_DB = -40.0
"""The microphones' noise relative to the talkers, all of them: it keeps the noise gain near that of the variant."""
TOLERANCE = 1e-4
MOST_STEPS = 120


def refit(
    bank: FilterBank,
    paths: Paths,
    sample_rate: float,
    *,
    before: int,
    after: int,
    spectra: Floats | None = None,
) -> FilterBank:
    """The filters with `before` samples of the future and `after` of the past whose output is nearest to the bank's.

    spectra  (talkers, frequencies from zero to Nyquist) power; the average speech spectrum when None

    `cut_share` of the result is the share of the bank's magnitude that lies outside.
    """
    if before >= bank.before and after >= bank.after:
        return fitted(bank, before=before, after=after)
    return Refit(bank, paths, sample_rate, spectra=spectra).within(before, after)


class Refit:
    """A bank and what its microphones hear, ready to be given any reach; parameters as of `refit`."""

    def __init__(self, bank: FilterBank, paths: Paths, sample_rate: float, *, spectra: Floats | None = None) -> None:
        self._bank = bank
        grid = 1 << int(np.ceil(np.log2(2 * bank.taps.shape[-1])))
        omega = np.asarray(2.0 * np.pi * np.arange(grid // 2 + 1) / grid, np.float64)
        self._covariance = _covariance(paths, omega, sample_rate, spectra)
        self._lags = np.fft.irfft(self._covariance, grid, axis=0)
        wanted = np.fft.rfft(bank.taps, grid, axis=-1).transpose(2, 0, 1)
        self._right = np.fft.irfft(wanted @ self._covariance, grid, axis=0)

    def within(self, before: int, after: int) -> FilterBank:
        """The filters with this reach; cut or padded where the bank reaches no further."""
        bank = self._bank
        before_, after_ = min(before, bank.before), min(after, bank.after)
        cut = fitted(bank, before=before_, after=after_)
        if before_ == bank.before and after_ == bank.after:
            return fitted(bank, before=before, after=after)
        first, length = bank.before - before_, before_ + after_ + 1
        taps = self._solved(self._right[first : first + length], cut.taps.transpose(2, 0, 1))
        made = FilterBank(np.ascontiguousarray(taps.transpose(1, 2, 0)), before_, cut.cut_share, bank.note)
        return fitted(made, before=before)

    def _solved(self, right: Floats, start: Floats) -> Floats:
        """W C = right on the allowed taps: (taps, talkers, channels)."""
        length = len(right)
        size = max(2, 1 << int(np.ceil(np.log2(2 * length))))
        embedded = np.zeros((size, *self._lags.shape[1:]))
        embedded[:length] = self._lags[:length]
        if length > 1:
            embedded[1 - length :] = self._lags[1 - length :]
        every = (len(self._covariance) - 1) // (size // 2)
        inverse = np.asarray(np.linalg.inv(self._covariance[::every]), np.complex128)
        return _conjugate_gradients(np.fft.rfft(embedded, axis=0), inverse, right, start, size)


def _covariance(paths: Paths, omega: Floats, sample_rate: float, spectra: Floats | None) -> Complexes:
    """C: (frequencies, channels, channels)."""
    hertz = omega * sample_rate / (2.0 * np.pi)
    if spectra is None:
        power = np.tile(10.0 ** (speech_spectrum_db(hertz) / 10.0), (paths.talkers, 1))
    else:
        known = np.linspace(0.0, np.pi, spectra.shape[1])
        power = np.stack([np.interp(omega, known, row) for row in spectra])
        # Of equal power: whom the recording has loudest shall not have the filters to themselves.
        power = power / power.mean(axis=1, keepdims=True)
    a = steering(paths, omega, sample_rate)
    noise = 10.0 ** (NOISE_DB / 10.0) * power.mean() * paths.talkers
    heard = np.einsum("fmk,kf,fnk->fmn", a, power, a.conj(), optimize=True)
    return np.asarray(heard + noise * np.eye(a.shape[1]))


def _conjugate_gradients(covariance: Complexes, inverse: Complexes, right: Floats, start: Floats, grid: int) -> Floats:
    """Solve W C = right, all talkers at once; C embedded in a circulant of `grid`, `inverse` nearly its inverse."""
    length = len(right)

    def applied(taps: Floats, matrix: Complexes) -> Floats:
        return np.asarray(np.fft.irfft(np.fft.rfft(taps, grid, axis=0) @ matrix, grid, axis=0)[:length])

    def product(a: Floats, b: Floats) -> Floats:
        return np.asarray(np.einsum("tkm,tkm->k", a, b))

    taps = start
    residual = right - applied(taps, covariance)
    ahead = preconditioned = applied(residual, inverse)
    size = product(residual, preconditioned)
    enough = TOLERANCE**2 * product(right, applied(right, inverse))
    for _ in range(MOST_STEPS):
        if np.all(size <= enough):
            break
        turned = applied(ahead, covariance)
        step = size / np.maximum(product(ahead, turned), 1e-300)
        taps = taps + step[:, None] * ahead
        residual = residual - step[:, None] * turned
        preconditioned = applied(residual, inverse)
        following = product(residual, preconditioned)
        ahead = preconditioned + (following / np.maximum(size, 1e-300))[:, None] * ahead
        size = following
    return taps
