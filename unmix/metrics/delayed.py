"""Delayed copies of long signals: correlations with them and filters of them, frame by frame.

Filters of a few hundred taps need no transform of the whole signal. Signals are cut into frames that overlap by the
taps (overlap-save), which stay in the processor's cache, and an hour needs no more memory at a time than a minute.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["DelayedCopies"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

GROUP = 4
"""Frames transformed at a time: few enough for the processor's cache."""
KEEP_BYTES = 100e6
"""Spectra of the references are kept for the next signals up to this size, else computed anew each time."""


class DelayedCopies:
    """The copies of some `rows` of `references` (references, samples), delayed by 0 to `taps` - 1 samples.

    Zeros stand before the start and behind the end, so that no copy loses a sample. Signals are held back by `guard`
    samples before they are compared with the copies.
    """

    def __init__(self, references: Signals, rows: Sequence[int], taps: int, guard: int = 0) -> None:
        self.references = references
        self.guard = guard
        self.samples = references.shape[1] + guard
        self.rows = list(rows)
        self.taps = taps
        self._kept: dict[int, NDArray[np.complex128]] = {}

    def correlate(self, signals: Signals) -> Floats:
        """D[e, k, l] = sum_n signals[e, n] s_k[n - l], l = 0..L-1: (signals, rows, L), the signals being held back."""
        return self._correlate(signals, self.guard)

    def correlate_with_each_other(self) -> Floats:
        """The same of the rows themselves, nothing held back: (rows, rows, L)."""
        every = self.rows == list(range(len(self.references)))
        return self._correlate(self.references if every else self.references[self.rows], 0)

    def _correlate(self, signals: Signals, guard: int) -> Floats:
        total = 0.0
        for group in range(self._groups):
            spectra = np.conj(scipy.fft.rfft(self._own_frames(signals, group, guard), n=self._frame, axis=-1))
            total = total + np.einsum("etf,ktf->ekf", spectra, self._spectra(group))
        # The references' frames start L - 1 samples before the signals', so lag L - 1 comes first.
        return np.asarray(scipy.fft.irfft(total, n=self._frame, axis=-1)[..., self.taps - 1 :: -1])

    def residual_energy(self, estimates: Signals, filters: Floats) -> Floats:
        """|e - sum_k c_k * s_k|^2 per estimate, held back; `filters` (estimates, rows, L)."""
        energy = np.zeros(len(estimates))
        for group, filtered in enumerate(self.filtered(filters)):
            rest = self._own_frames(estimates, group, self.guard) - filtered
            energy += np.einsum("etn,etn->e", rest, rest)
        return energy

    def filtered(self, filters: Floats) -> Iterator[Floats]:
        """sum_k c_k * s_k for each of several `filters` (sums, rows, L), a stretch at a time: (sums, frames, hop).

        Frames follow each other without overlap, through the filters' tails.
        """
        transfer = scipy.fft.rfft(filters, n=self._frame, axis=-1)
        for group in range(self._groups):
            spectra = np.einsum("ekf,ktf->etf", transfer, self._spectra(group))
            yield scipy.fft.irfft(spectra, n=self._frame, axis=-1)[..., self.taps - 1 :]

    def _own_frames(self, signals: Signals, group: int, guard: int) -> Floats:
        """A group of frames of `signals`, held back by `guard`, side by side: (signals, frames, hop)."""
        size = GROUP * self._hop
        start = group * size - guard
        return _stretch(signals, start, start + size).reshape(len(signals), GROUP, self._hop)

    def _spectra(self, group: int) -> NDArray[np.complex128]:
        """Spectra of the rows' frames, each from L - 1 samples before its hop: (rows, frames, bins)."""
        if group not in self._kept:
            start = group * GROUP * self._hop - (self.taps - 1)
            stretch = _stretch(self.references, start, start + self._frame + (GROUP - 1) * self._hop)[self.rows]
            frames = np.lib.stride_tricks.sliding_window_view(stretch, self._frame, axis=1)[:, :: self._hop]
            spectra = scipy.fft.rfft(frames, axis=-1)
            if self._groups * int(spectra.nbytes) > KEEP_BYTES:
                return np.asarray(spectra)
            self._kept[group] = spectra
        return self._kept[group]

    @property
    def _frame(self) -> int:
        return int(scipy.fft.next_fast_len(16 * self.taps, real=True))

    @property
    def _hop(self) -> int:
        return self._frame - self.taps + 1

    @property
    def _groups(self) -> int:
        """Groups of frames that cover the references and the tails of their filtered copies."""
        return int(np.ceil((self.samples + self.taps - 1) / (GROUP * self._hop)))


def _stretch(signals: Signals, start: int, stop: int) -> Floats:
    """`signals[:, start:stop]` with zeros outside the samples there are."""
    stretch = np.zeros((len(signals), stop - start))
    low, high = max(0, start), min(signals.shape[1], stop)
    if low < high:
        stretch[:, low - start : high - start] = signals[:, low:high]
    return stretch
