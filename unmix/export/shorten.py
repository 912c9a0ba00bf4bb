"""Tap length from a stated loss in SIR.

Reach is taken where the filters are largest: both tails go at the same share of their magnitude, and the taps that
remain are made anew so that the output changes least (`unmix.live.refit`). A length is taken when no talker's SIR falls
by more than the stated loss, no output changes by more than -40 dB, and noise gains at most half a decibel. The second
holds for variants of low SIR, which some cuts would even raise while making another filter of it, and for one talker,
who has no SIR.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.export.sir import energies, sir_of_energies_db
from unmix.live.bank import fitted
from unmix.live.design import LONGEST_REFIT
from unmix.live.refit import Refit, refit
from unmix.model.delays import Paths
from unmix.solvers.stationary import FilterBank

__all__ = ["Shortened", "shorten", "shorten_to"]

Floats = NDArray[np.float64]

LARGEST_CHANGE_DB = -40.0
"""What a cut may change of a talker's output, relative to it."""
LARGEST_NOISE_RISE_DB = 0.5
_STEPS = 12
_LEAST_SHARE, _MOST_SHARE = 1e-6, 0.5


@dataclass(frozen=True)
class Shortened:
    """A bank cut to length.

    loss_db        largest loss in SIR over talkers, against the whole bank; zero for one talker
    change_db      largest change of an output, relative to it
    noise_rise_db  largest rise of the noise gain
    """

    bank: FilterBank
    loss_db: float
    change_db: float
    noise_rise_db: float


def shorten(
    bank: FilterBank,
    paths: Paths,
    spectra: Floats,
    sample_rate: float,
    *,
    loss_db: float,
    before: int | None = None,
) -> Shortened:
    """The shortest bank that costs no talker more than `loss_db`.

    before  most samples of the future kept, which is the latency. Where that alone costs more than is allowed, as much
    again is allowed on top of it for the past.
    """
    judge = _Judge(bank, paths, spectra, sample_rate)
    bound = bank.before if before is None else min(before, bank.before)
    best = judge.within(bound, min(bank.after, LONGEST_REFIT) if bound < bank.before else bank.after)
    most_loss = loss_db + max(0.0, best.loss_db)
    most_change = max(LARGEST_CHANGE_DB, best.change_db + 1.0)
    most_noise = LARGEST_NOISE_RISE_DB + max(0.0, best.noise_rise_db)
    low, high = np.log(_LEAST_SHARE), np.log(_MOST_SHARE)
    for _ in range(_STEPS):
        share = 0.5 * (low + high)
        early, late = _reach(bank, float(np.exp(share)))
        tried = judge.within(min(early, bound), min(late, LONGEST_REFIT))
        good = tried.loss_db <= most_loss and tried.change_db <= most_change and tried.noise_rise_db <= most_noise
        if good:
            best, low = tried, share
        else:
            high = share
    return best


def shorten_to(bank: FilterBank, taps: int, paths: Paths, spectra: Floats, sample_rate: float) -> FilterBank:
    """The bank with at most `taps` taps, whatever that costs."""
    if taps >= bank.taps.shape[-1]:
        return bank
    low, high = np.log(1e-12), np.log(0.999)
    before, after = 0, taps - 1
    for _ in range(40):
        share = 0.5 * (low + high)
        early, late = _reach(bank, float(np.exp(share)))
        if early + late + 1 <= taps:
            (before, after), high = (early, late), share
        else:
            low = share
    return refit(bank, paths, sample_rate, before=before, after=after, spectra=spectra)


def _reach(bank: FilterBank, share: float) -> tuple[int, int]:
    """Samples of the future and of the past outside which less than `share` of every talker's magnitude lies."""
    magnitude = np.abs(bank.taps).sum(axis=1)
    part = (magnitude / np.maximum(magnitude.sum(axis=-1, keepdims=True), 1e-300)).max(axis=0)
    early = int(np.searchsorted(np.cumsum(part), 0.5 * share))
    late = int(np.searchsorted(np.cumsum(part[::-1]), 0.5 * share))
    return max(0, bank.before - early), max(0, bank.after - late)


class _Judge:
    """Compares shorter banks with the whole one."""

    def __init__(self, bank: FilterBank, paths: Paths, spectra: Floats, sample_rate: float) -> None:
        self._bank, self._given = bank, (paths, spectra, sample_rate)
        self._energy = energies(bank, *self._given)
        self._refit = Refit(bank, paths, sample_rate, spectra=spectra)

    def within(self, before: int, after: int) -> Shortened:
        """The bank with this reach, made anew, and what it costs."""
        bank = self._refit.within(before, after)
        loss = 0.0
        if len(self._energy) > 1:
            kept = sir_of_energies_db(energies(bank, *self._given))
            loss = float((sir_of_energies_db(self._energy) - kept).max())
        placed = fitted(bank, before=self._bank.before).taps
        change = self._bank.taps - np.pad(placed, ((0, 0), (0, 0), (0, self._bank.taps.shape[-1] - placed.shape[-1])))
        error = energies(FilterBank(change, self._bank.before, 0.0), *self._given).sum(axis=1)
        noise = 10.0 * np.log10((bank.taps**2).sum(axis=(1, 2)) / (self._bank.taps**2).sum(axis=(1, 2)))
        relative = float(10.0 * np.log10(max((error / np.diag(self._energy)).max(), 1e-30)))
        return Shortened(bank, loss, relative, float(noise.max()))
