"""Tap length from a stated loss in SIR: both tails are cut at the same share of the filters' magnitude.

A cut is taken when no talker's SIR falls by more than the stated loss and the cut changes no output by more than
-40 dB. The second holds for variants of low SIR, which some cuts would even raise while making another filter of it,
and for one talker, who has no SIR.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.export.sir import energies, sir_of_energies_db
from unmix.live.bank import fitted
from unmix.model.delays import Paths
from unmix.solvers.stationary import FilterBank

__all__ = ["Shortened", "shorten", "shorten_to"]

Floats = NDArray[np.float64]

LARGEST_CHANGE_DB = -40.0
"""What a cut may change of a talker's output, relative to it."""
_STEPS = 24


@dataclass(frozen=True)
class Shortened:
    """A bank cut to length.

    loss_db    largest loss in SIR over talkers, against the whole bank; zero for one talker
    change_db  largest change of an output, relative to it
    """

    bank: FilterBank
    loss_db: float
    change_db: float


def shorten(
    bank: FilterBank,
    paths: Paths,
    spectra: Floats,
    sample_rate: float,
    *,
    loss_db: float,
    before: int | None = None,
) -> Shortened:
    """The shortest cut of a bank that costs no talker more than `loss_db`.

    before  most samples of the future kept, which is the latency. Where that alone costs more than is allowed, as much
    again is allowed on top of it for the past.
    """
    judge = _Judge(bank, paths, spectra, sample_rate)
    best = judge(bank if before is None else fitted(bank, before=min(bank.before, before)))
    forced = before is not None and before < bank.before
    most_loss = loss_db + (max(0.0, best.loss_db) if forced else 0.0)
    most_change = max(LARGEST_CHANGE_DB, best.change_db + 1.0) if forced else LARGEST_CHANGE_DB
    whole = best.bank
    low, high = np.log(1e-9), np.log(0.5)
    for _ in range(_STEPS):
        share = 0.5 * (low + high)
        tried = judge(_cut(whole, float(np.exp(share))))
        if tried.loss_db <= most_loss and tried.change_db <= most_change:
            best, low = tried, share
        else:
            high = share
    return best


def shorten_to(bank: FilterBank, taps: int) -> FilterBank:
    """The bank cut to at most `taps` taps, whatever that costs."""
    low, high = np.log(1e-12), np.log(0.999)
    best = bank
    for _ in range(2 * _STEPS):
        share = 0.5 * (low + high)
        cut = _cut(bank, float(np.exp(share)))
        if cut.taps.shape[-1] <= taps:
            best, high = cut, share
        else:
            low = share
    return best if best.taps.shape[-1] <= taps else fitted(bank, before=0, after=taps - 1)


def _cut(bank: FilterBank, share: float) -> FilterBank:
    """The bank without the tails that hold less than `share` of every talker's magnitude, half on either side."""
    magnitude = np.abs(bank.taps).sum(axis=1)
    part = (magnitude / np.maximum(magnitude.sum(axis=-1, keepdims=True), 1e-300)).max(axis=0)
    early = int(np.searchsorted(np.cumsum(part), 0.5 * share))
    late = int(np.searchsorted(np.cumsum(part[::-1]), 0.5 * share))
    before = max(0, bank.before - early)
    return fitted(bank, before=before, after=max(0, bank.after - late))


class _Judge:
    """Compares cuts with the whole bank."""

    def __init__(self, bank: FilterBank, paths: Paths, spectra: Floats, sample_rate: float) -> None:
        self._bank, self._given = bank, (paths, spectra, sample_rate)
        self._energy = energies(bank, *self._given)

    def __call__(self, cut: FilterBank) -> Shortened:
        loss = 0.0
        if len(self._energy) > 1:
            kept = sir_of_energies_db(energies(cut, *self._given))
            loss = float((sir_of_energies_db(self._energy) - kept).max())
        placed = fitted(cut, before=self._bank.before).taps
        missing = self._bank.taps.shape[-1] - placed.shape[-1]
        change = self._bank.taps - np.pad(placed, ((0, 0), (0, 0), (0, missing)))
        error = energies(FilterBank(change, self._bank.before, 0.0), *self._given).sum(axis=1)
        return Shortened(cut, loss, float(10.0 * np.log10(max((error / np.diag(self._energy)).max(), 1e-30))))
