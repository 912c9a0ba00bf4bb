"""Push chunks of a recording in, get the talkers out, in memory that does not grow with the recording.

A separator has `push(chunk) -> talkers` and `flush() -> talkers`; what comes out, joined, has the recording's length
and is aligned with it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from unmix.solvers.snapshots import SnapshotSolver
from unmix.solvers.stationary import FilterBank

__all__ = ["BlockSeparator", "FilterBankSeparator", "Separator", "SnapshotSeparator", "run"]

Floats = NDArray[np.float64]
SolveBlock = Callable[[Floats, int], Floats]


class Separator(Protocol):
    """What turns a recording into talkers, chunk by chunk."""

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return the (talkers, n') samples that are ready."""

    def flush(self) -> Floats:
        """The rest, after the last chunk."""


def run(separator: Separator, chunks: Iterable[Floats]) -> Iterator[Floats]:
    """Carry all chunks through a separator and flush it."""
    for chunk in chunks:
        yield separator.push(chunk)
    yield separator.flush()


class BlockSeparator:
    """Overlapping blocks: each is solved with a margin on both sides, and only its middle is kept.

    solve   (channels, n) samples and the first one's place in the recording in, (talkers, n) out
    block   samples kept of each solve
    margin  samples solved on either side and discarded; there is none before the first sample and after the last
    """

    def __init__(self, solve: SolveBlock, *, channels: int, talkers: int, block: int, margin: int) -> None:
        self._solve, self._block, self._margin = solve, block, margin
        self._talkers = talkers
        self._held = np.zeros((channels, 0))
        self._held_from = 0
        self._done = 0

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return the talkers of every block that now has its margin."""
        self._held = np.concatenate([self._held, chunk], axis=1)
        ready = []
        while self._held_from + self._held.shape[1] >= self._done + self._block + self._margin:
            ready.append(self._emit(self._done + self._block))
        return np.concatenate(ready, axis=1) if ready else np.zeros((self._talkers, 0))

    def flush(self) -> Floats:
        """Solve what is left; the last block may be up to twice as long, so that no sliver is solved alone."""
        end = self._held_from + self._held.shape[1]
        return self._emit(end) if end > self._done else np.zeros((self._talkers, 0))

    def _emit(self, stop: int) -> Floats:
        last = min(stop + self._margin, self._held_from + self._held.shape[1])
        solved = self._solve(self._held[:, : last - self._held_from], self._held_from)
        kept = solved[:, self._done - self._held_from : stop - self._held_from]
        self._done = stop
        drop = max(0, stop - self._margin - self._held_from)
        self._held = self._held[:, drop:]
        self._held_from += drop
        return kept


class FilterBankSeparator:
    """A filter bank applied by overlap-save FFT; the recording counts as zero beyond its ends."""

    def __init__(self, bank: FilterBank, *, workers: int = 1) -> None:
        from scipy.fft import next_fast_len, rfft

        self._bank, self._workers = bank, workers
        length = bank.taps.shape[-1]
        self._size = next_fast_len(max(4 * length, 8192), real=True)
        self._step = self._size - length + 1
        self._spectrum = rfft(bank.taps, self._size, axis=-1)
        # As many zeros of the past as a filter sees: the first output is then the recording's first sample.
        self._held = np.zeros((bank.taps.shape[1], bank.after))

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return the (talkers, n') samples that are ready."""
        self._held = np.concatenate([self._held, chunk], axis=1)
        length = self._bank.taps.shape[-1]
        ready = []
        while self._held.shape[1] >= self._size:
            ready.append(self._filter(self._held[:, : self._size]))
            self._held = self._held[:, self._size - length + 1 :]
        return self._join(ready)

    def flush(self) -> Floats:
        """The rest, with zeros for the future."""
        length = self._bank.taps.shape[-1]
        held = np.concatenate([self._held, np.zeros((len(self._held), self._bank.before))], axis=1)
        self._held = held[:, held.shape[1] :]
        ready = []
        for at in range(0, max(0, held.shape[1] - length + 1), self._step):
            piece = held[:, at : at + self._size]
            valid = piece.shape[1] - length + 1
            ready.append(self._filter(piece)[:, :valid])
        return self._join(ready)

    def _filter(self, piece: Floats) -> Floats:
        from scipy.fft import irfft, rfft

        spectrum = rfft(piece, self._size, axis=-1, workers=self._workers)
        talkers = np.einsum("kmf,mf->kf", self._spectrum, spectrum)
        length = self._bank.taps.shape[-1]
        return np.asarray(irfft(talkers, self._size, axis=-1, workers=self._workers)[:, length - 1 :])

    def _join(self, ready: list[Floats]) -> Floats:
        return np.concatenate(ready, axis=1) if ready else np.zeros((self._bank.taps.shape[0], 0))


class SnapshotSeparator:
    """Every snapshot alone: one talker, nothing held back."""

    def __init__(self, solver: SnapshotSolver) -> None:
        self._solver = solver

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return (1, n)."""
        return self._solver.solve(chunk)[0][:1]

    def flush(self) -> Floats:
        """Nothing is held back."""
        return np.zeros((1, 0))
