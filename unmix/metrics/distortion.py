"""Distortion ratios: BSS Eval version 3 and SI-SDR.

An estimate e is split against K references s_1..s_K, each of which may pass through any causal filter of L taps
[1]_. With P_j the projection on the L delayed copies of s_j and P that on all K L of them,

    s_target = P_j e,    e_interf = P e - P_j e,    e_artif = e - P e
    SDR = |s_target|^2 / |e_interf + e_artif|^2
    SIR = |s_target|^2 / |e_interf|^2
    SAR = |s_target + e_interf|^2 / |e_artif|^2

The three parts are orthogonal, so their energies are all that is needed. The delayed copies' Gram matrix G (K L x K L,
block Toeplitz) depends on the references alone: a `ReferenceSet` factors it once and splits any number of estimates.
With D the correlations of e with the delayed copies, G c = D and G_jj c_j = D_j,

    |s_target|^2 = c_j' G_jj c_j,    |e_interf|^2 = (c - c_j)' G (c - c_j),

both free of cancellation; |e_artif|^2 is summed over the filtered signals themselves.

SI-SDR [2]_ allows one gain instead of a filter: a = <e, s> / |s|^2, SI-SDR = |a s|^2 / |a s - e|^2.

.. [1] E. Vincent, R. Gribonval, C. Fevotte, "Performance measurement in blind audio source separation", IEEE Trans.
   Audio, Speech and Language Processing 14(4), 2006.
.. [2] J. Le Roux, S. Wisdom, H. Erdogan, J. R. Hershey, "SDR - half-baked or well done?", ICASSP 2019.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import scipy.fft
import scipy.linalg
import scipy.signal
from numpy.typing import NDArray

from unmix.metrics.delayed import DelayedCopies

__all__ = ["FILTER_LENGTH", "Distortion", "ReferenceSet", "describe_unusable", "si_sdr_db"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

FILTER_LENGTH = 512
ROUNDING_DB = 200.0
"""Beyond this ratio what is left is the rounding of double precision, not an error of the estimate."""
EXACT = "nothing is left but rounding: the estimate is the reference, filtered"

DEPENDENT = 1e-4
"""A reference of whose innovation the others leave less than this (-40 dB) is a filtered copy of them."""

CHUNK = 1 << 18
"""Samples worked on at a time."""

SINGULAR, RIDGE = 1e-14, 1e-13
"""Where pivots differ by more than this (a reference lacks energy in part of its band) G gets a ridge."""


def describe_unusable(signal: Signals) -> str | None:
    """Why no ratio can be formed with `signal` (samples,): empty, silent, not finite; None when it is usable."""
    if signal.size == 0:
        return "is empty"
    if not np.isfinite(signal).all():
        return "holds NaN or infinite samples"
    if not signal.any():
        return "is silent"
    return None


@dataclass(frozen=True)
class Distortion:
    """Ratios of every estimate against every reference, (estimates, references), in dB; NaN where undefined.

    `undefined` gives the reason, keyed by (figure, estimate, reference). `filters` are those that make an estimate's
    parts of the references, for `ReferenceSet.parts`: keyed by (estimate, reference), two rows of filters each.
    """

    sdr_db: Floats
    sir_db: Floats
    sar_db: Floats
    undefined: dict[tuple[str, int, int], str]
    filters: dict[tuple[int, int], Floats] = field(default_factory=dict)


class ReferenceSet:
    """References against which any number of estimates are split; the Gram matrix is built and factored once.

    Parameters
    ----------
    references : (references, samples)
        Aligned with the estimates to come, see `unmix.metrics.alignment`. A silent or non-finite one is left out:
        figures against it are undefined, those against the others are as if it were not there.
    filter_length : int
        Taps L of the allowed filter.
    guard : int
        Samples by which estimates are held back first, the filters being causal.

    Attributes
    ----------
    ridged : bool
        Whether a reference is so nearly band-limited that a ridge was needed to factor G.
    """

    def __init__(self, references: Signals, *, filter_length: int = FILTER_LENGTH, guard: int = 0) -> None:
        self.references = references
        self.filter_length = filter_length
        self.unusable = {
            k: f"the reference {why}" for k, s in enumerate(references) if (why := describe_unusable(s)) is not None
        }
        self._usable = [k for k in range(len(references)) if k not in self.unusable]
        self.ridged = False
        self.dependent = False
        self._partial_factors: dict[int, Floats] = {}
        self._copies = DelayedCopies(references, self._usable, filter_length, guard)
        self._too_short = self._copies.samples < max(1, len(self._usable)) * filter_length
        if self._usable and not self._too_short:
            self._factor()

    def _factor(self) -> None:
        K = len(self._usable)
        # r[i, j, d] = sum_n s_i[n] s_j[n - d]; the delayed copies l of s_i and l' of s_j have the product r at l' - l.
        r = self._copies.correlate_with_each_other()
        scale = r[np.arange(K), np.arange(K), 0]
        self._scale = np.sqrt(scale)
        r = r / (self._scale[:, None, None] * self._scale[None, :, None])
        self._lags = np.concatenate([r, np.zeros((K, K, 1)), r.transpose(1, 0, 2)[..., :0:-1]], axis=2)
        self._own_factors = [self._cholesky(self._gram([k])) for k in range(K)]
        self._factor_all = self._own_factors[0] if K == 1 else self._cholesky(self._gram(range(K)))
        # Pivots are innovations: of a delayed copy given its reference's later ones, and given all references before.
        given_own = np.concatenate([np.diag(c) for c in self._own_factors])
        self.dependent = bool(np.min(np.diag(self._factor_all) / given_own) ** 2 < DEPENDENT)

    def _gram(self, chosen: Sequence[int]) -> Floats:
        """Lower triangle of the Gram matrix of the chosen usable references' delayed copies."""
        L = self.filter_length
        G = np.empty((len(chosen) * L, len(chosen) * L), order="F")
        for row, i in enumerate(chosen):
            for column, j in enumerate(chosen[: row + 1]):
                block = np.roll(self._lags[i, j], L - 1)[: 2 * L - 1]
                G[row * L : (row + 1) * L, column * L : (column + 1) * L] = _toeplitz(block)
        return G

    def _cholesky(self, G: Floats) -> Floats:
        """Lower Cholesky factor of G, of which the lower triangle counts, ridged when singular to working precision."""
        factor, failed = scipy.linalg.lapack.dpotrf(G, lower=1, clean=0)
        if not failed:
            pivots = np.diag(factor) ** 2
            if pivots.min() > SINGULAR * pivots.max():
                return np.asarray(factor)
        self.ridged = True
        ridged = G + RIDGE * len(G) * np.eye(len(G))
        return np.asarray(scipy.linalg.cholesky(ridged, lower=True, check_finite=False))

    def split(self, estimates: Signals) -> Distortion:
        """SDR, SIR, SAR of `estimates` (estimates, samples) against every reference; samples as the references'."""
        shape = (len(estimates), len(self.references))
        sdr, sir, sar = (np.full(shape, np.nan) for _ in range(3))
        undefined: dict[tuple[str, int, int], str] = {}
        kept: dict[tuple[int, int], Floats] = {}
        bad = {e: why for e, signal in enumerate(estimates) if (why := describe_unusable(signal)) is not None}
        good = [e for e in range(len(estimates)) if e not in bad]
        if good and self._usable and not self._too_short:
            used = estimates if len(good) == len(estimates) else estimates[good]
            target, interference, artifacts, filters = self._energies(used)
            cells = np.ix_(good, self._usable)
            sdr[cells] = _ratio_db(target, interference + artifacts[:, None])
            sir[cells] = _ratio_db(target, interference)
            sar[cells] = _ratio_db(target + interference, artifacts[:, None])
            kept = {(e, k): filters[row, i] for row, e in enumerate(good) for i, k in enumerate(self._usable)}
        for e, k in np.ndindex(*shape):
            for figure, values in (("sdr_db", sdr), ("sir_db", sir), ("sar_db", sar)):
                reason = self._why_undefined(figure, e, k, bad, float(values[e, k]))
                if reason is not None:
                    values[e, k] = np.nan
                    undefined[figure, e, k] = reason
        return Distortion(sdr, sir, sar, undefined, kept)

    def _why_undefined(self, figure: str, e: int, k: int, bad: dict[int, str], value: float) -> str | None:
        if k in self.unusable:
            return self.unusable[k]
        if e in bad:
            return f"the estimate {bad[e]}"
        if self._too_short:
            needed = len(self._usable) * self.filter_length
            return f"too short: {self._copies.samples} samples, and the filters have {needed} taps"
        if figure == "sir_db" and len(self._usable) == 1:
            return "there is one reference, so nothing can interfere"
        if figure == "sir_db" and self.dependent:
            return "a reference is a filtered copy of the others, so interference cannot be told from the talker"
        if np.isnan(value):
            return "the estimate is orthogonal to the reference"
        if value > ROUNDING_DB:
            return EXACT
        return None

    def explained(self, estimates: Signals) -> tuple[Floats, Floats]:
        """What each reference explains of each estimate, by itself and beyond all others; (estimates, references) each.

        Energies |P_k e|^2 and |P e - Q_k e|^2, Q_k the projection on all references but s_k. NaN for references and
        estimates that cannot be used.
        """
        by_itself, alone = (np.full((len(estimates), len(self.references)), np.nan) for _ in range(2))
        good = [e for e, signal in enumerate(estimates) if describe_unusable(signal) is None]
        if not good or not self._usable or self._too_short:
            return by_itself, alone
        D = self._scaled_correlations(estimates if len(good) == len(estimates) else estimates[good])
        c = self._joint_filters(D).T.reshape(D.shape)
        for i, k in enumerate(self._usable):
            own = scipy.linalg.cho_solve((self._own_factors[i], True), D[:, i].T, check_finite=False)
            by_itself[good, k] = np.einsum("le,el->e", own, D[:, i])
            others = [j for j in range(len(self._usable)) if j != i]
            difference = c.copy()
            if others:
                without = D[:, others].reshape(len(D), -1).T
                filters = scipy.linalg.cho_solve((self._factor_without(i), True), without, check_finite=False)
                difference[:, others] -= filters.T.reshape(len(D), len(others), -1)
            alone[good, k] = self._quadratic(difference, self._lags)
        return by_itself, alone

    def parts(self, split: Distortion, estimate: int, talker: int) -> Iterator[Floats]:
        """s_target and e_interf of an estimate that was split, against a reference: stretch by stretch, (2, n) each.

        For a pair of which the ratios are defined. Together the stretches are as long as an estimate held back.
        """
        left = self._copies.samples
        for stretch in self._copies.filtered(split.filters[estimate, talker]):
            yield stretch.reshape(2, -1)[:, :left]
            left -= stretch[0].size
            if left <= 0:
                return

    def _factor_without(self, i: int) -> Floats:
        """Factor of G without the rows and columns of usable reference i."""
        K = len(self._usable)
        if K == 2:
            return self._own_factors[1 - i]
        if i not in self._partial_factors:
            self._partial_factors[i] = self._cholesky(self._gram([j for j in range(K) if j != i]))
        return self._partial_factors[i]

    def _joint_filters(self, D: Floats) -> Floats:
        """c with G c = D, one column per estimate: (K L, estimates)."""
        c = scipy.linalg.cho_solve((self._factor_all, True), D.reshape(len(D), -1).T, check_finite=False)
        return np.asarray(c)

    def _energies(self, estimates: Signals) -> tuple[Floats, Floats, Floats, Floats]:
        """|s_target|^2 and |e_interf|^2, (estimates, usable references), |e_artif|^2, (estimates,), and filters.

        Of each estimate and reference these make s_target and e_interf: (estimates, references, 2, references, L).
        """
        E, K, L = len(estimates), len(self._usable), self.filter_length
        D = self._scaled_correlations(estimates)
        c = self._joint_filters(D)
        target, parts = np.empty((E, K)), np.zeros((E, K, 2, K, L))
        differences = np.repeat(c[:, None, :], K, axis=1)
        for j in range(K):
            own = slice(j * L, (j + 1) * L)
            c_j = scipy.linalg.cho_solve((self._own_factors[j], True), D[:, j].T, check_finite=False)
            target[:, j] = np.einsum("le,el->e", c_j, D[:, j])
            differences[own, j] -= c_j
            parts[:, j, 0, j] = c_j.T
        parts[:, :, 1] = differences.reshape(K, L, K, E).transpose(3, 2, 0, 1)
        interference = self._quadratic(parts[:, :, 1], self._lags)
        filters = c.T.reshape(E, K, L) / self._scale[:, None]
        artifacts = self._copies.residual_energy(estimates, filters)
        return target, interference, artifacts, parts / self._scale[:, None]

    def _quadratic(self, c: Floats, lags: Floats) -> Floats:
        """c' G c of filters c (..., references, L) through the transform of G's correlations `lags`: (...).

        G being Toeplitz block by block, sum over i, j, l, l' of c_i[l] c_j[l'] r_ij[l' - l] is a sum over bins of
        C_i conj(C_j) R_ij. Rounding below zero counts as zero.
        """
        R = scipy.fft.rfft(lags, axis=-1)
        R[..., 1:-1] *= 2.0
        C = scipy.fft.rfft(c, n=lags.shape[-1], axis=-1)
        filtered = np.einsum("ijf,...jf->...if", R.conj(), C)
        energy = np.einsum("...if,...if->...", C.conj(), filtered).real / lags.shape[-1]
        return np.asarray(np.maximum(energy, 0.0))

    def _scaled_correlations(self, estimates: Signals) -> Floats:
        return np.asarray(self._copies.correlate(estimates) / self._scale[:, None])


def _toeplitz(lags: Floats) -> Floats:
    """The Toeplitz matrix whose element (l, l') is the correlation at lag l' - l, from -(L - 1) to L - 1; a view."""
    return np.lib.stride_tricks.sliding_window_view(lags, (lags.size + 1) // 2)[::-1]


def _ratio_db(numerator: Floats, denominator: Floats) -> Floats:
    """10 log10 of the ratio: infinite where nothing stands below the line, NaN where nothing stands above it."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = 10.0 * np.log10(np.where(numerator > 0.0, numerator, np.nan) / denominator)
    return np.asarray(ratio)


def si_sdr_db(estimate: Signals, reference: Signals) -> tuple[float | None, str | None]:
    """Scale-invariant signal-to-distortion ratio of one estimate, and the reason when it is undefined.

    Both (samples,), aligned to a fraction of a sample. The mean is not removed.
    """
    for name, signal in (("reference", reference), ("estimate", estimate)):
        why = describe_unusable(signal)
        if why is not None:
            return None, f"the {name} {why}"
    gain = sum(float(e @ s) for e, s in _chunks(estimate, reference)) / sum(
        float(s @ s) for _, s in _chunks(estimate, reference)
    )
    numerator = denominator = 0.0
    for e, s in _chunks(estimate, reference):
        target = gain * s
        numerator += float(target @ target)
        denominator += float(np.sum(np.square(target - e)))
    if numerator <= 10.0 ** (-ROUNDING_DB / 10.0) * denominator:
        return None, "the estimate is orthogonal to the reference"
    if denominator <= 10.0 ** (-ROUNDING_DB / 10.0) * numerator:
        return None, "nothing is left but rounding: the estimate is the reference, scaled"
    return 10.0 * float(np.log10(numerator / denominator)), None


def _chunks(*signals: Signals) -> Iterator[tuple[Floats, ...]]:
    """Signals (samples,) in double precision, a stretch at a time."""
    for first in range(0, signals[0].size, CHUNK):
        yield tuple(np.asarray(s[first : first + CHUNK], dtype=np.float64) for s in signals)
