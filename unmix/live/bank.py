"""A K x M filter bank as a live stage; changes are cross-faded, and how rough they were is measured.

While old and new filters u and v overlap, out[n] = (1 - w[n]) u[n] + w[n] v[n] with w[n] = sin^2 rising over the fade.
The change itself then adds at most |w[n+1] - w[n]| |v[n] - u[n]| between neighbouring samples, where a switch would
add |v[n] - u[n]| at once.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from unmix.live.convolver import Kernel, convolver_for
from unmix.live.stage import State
from unmix.scene import Talker
from unmix.solvers.stationary import FilterBank

__all__ = ["BankStage", "Change", "fitted"]

Floats = NDArray[np.float64]


class Design(Protocol):
    """Makes filters for talkers."""

    def __call__(self, talkers: Sequence[Talker]) -> FilterBank:
        """Whole."""

    def within(self, talkers: Sequence[Talker], *, before: int, after: int) -> FilterBank:
        """With `before` samples of the future and at most `after` of the past."""


@dataclass(frozen=True)
class Change:
    """How a change of bearings went.

    at_sample     where its fade began, counted in output samples
    step          largest difference between neighbouring samples that the fade itself added, full scale 1.0
    switch_step   what switching at once could have added
    cut_share     share of the new filters' magnitude that lies outside the latency and memory fixed at the start
    done          whether the fade is over
    """

    at_sample: int
    step: float
    switch_step: float
    cut_share: float
    done: bool


def fitted(bank: FilterBank, *, before: int, after: int | None = None) -> FilterBank:
    """The bank with exactly `before` samples of the future and at most `after` of the past.

    Taps outside are cut (counted in `cut_share`); where the bank reaches less far into the future it is padded.
    """
    stop = bank.taps.shape[-1] if after is None else min(bank.taps.shape[-1], bank.before + after + 1)
    start = max(0, bank.before - before)
    taps = bank.taps[..., start:stop]
    if before > bank.before:
        taps = np.pad(taps, ((0, 0), (0, 0), (before - bank.before, 0)))
    total = np.abs(bank.taps).sum(axis=(1, 2))
    cut = 1.0 - np.abs(taps).sum(axis=(1, 2)) / np.maximum(total, 1e-300)
    share = max(bank.cut_share, float(cut.max())) if start > 0 or stop < bank.taps.shape[-1] else bank.cut_share
    return FilterBank(np.ascontiguousarray(taps), before, share, bank.note)


class BankStage:
    """Filters of talkers at rest, applied causally: the samples of the future that they see are its latency.

    design     makes the filters for talkers
    fade       samples that a change of bearings takes
    lookahead  most samples of the future; as many as filters want when None
    """

    def __init__(self, design: Design, talkers: Sequence[Talker], *, fade: int, lookahead: int | None = None) -> None:
        bank = design(talkers)
        if lookahead is not None and lookahead < bank.before:
            bank = design.within(talkers, before=lookahead, after=bank.after)
        self.latency = bank.before
        self.talkers, self.channels = bank.taps.shape[:2]
        self.cut_share = bank.cut_share
        self._design, self._fade = design, max(1, fade)
        self._weight = np.sin(0.5 * np.pi * (np.arange(self._fade) + 0.5) / self._fade) ** 2
        self._convolver = convolver_for(self.channels, bank.taps.shape[-1])
        self._current = self._convolver.kernel(bank.taps)
        self._next: Kernel | None = None
        self._waiting: tuple[Kernel, float] | None = None
        self._faded = 0
        self._position = 0
        self.change: Change | None = None

    @property
    def bank(self) -> FilterBank:
        """The filters that are applied, or that are being faded in."""
        taps = (self._waiting[0] if self._waiting else self._next or self._current).taps
        return FilterBank(taps, self.latency, self.cut_share)

    def prepare(self, talkers: Sequence[Talker]) -> Callable[[], None]:
        """Design filters for other bearings; then a fade to them, which waits for one that runs."""
        most = self._convolver.capacity - self.latency - 1
        bank = self._design.within(talkers, before=self.latency, after=most)
        kernel = self._convolver.kernel(bank.taps)

        def change() -> None:
            self._waiting = (kernel, bank.cut_share)
            if self._next is None:
                self._begin()

        return change

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return (talkers, n), late by `latency`."""
        out = np.empty((self.talkers, chunk.shape[1]))
        at = 0
        while at < chunk.shape[1]:
            count = min(chunk.shape[1] - at, self._convolver.room)
            if self._next is not None:
                count = min(count, self._fade - self._faded)
            out[:, at : at + count] = self._piece(chunk[:, at : at + count])
            at += count
        return out

    def flush(self) -> Floats:
        """The last `latency` samples; a change that still waited or faded is then complete."""
        rest = self.push(np.zeros((self.channels, self.latency)))
        self._convolver.reset()
        while self._next is not None:
            self._finish()
        self._position = 0
        return rest

    def _piece(self, piece: Floats) -> Floats:
        self._position += piece.shape[1]
        if self._next is None:
            return self._convolver.apply(piece, (self._current,))[0]
        old, new = self._convolver.apply(piece, (self._current, self._next))
        weight = self._weight[self._faded : self._faded + piece.shape[1]]
        self._measure(new - old, weight)
        self._faded += piece.shape[1]
        if self._faded == self._fade:
            self._finish()
        return old + weight * (new - old)

    def _measure(self, difference: Floats, weight: Floats) -> None:
        if self.change is None:
            return
        before = self._weight[self._faded - 1] if self._faded else 0.0
        jump = np.abs(difference)
        step = float((np.diff(weight, prepend=before) * jump).max(initial=0.0))
        self.change = replace(
            self.change,
            step=max(self.change.step, step),
            switch_step=max(self.change.switch_step, float(jump.max(initial=0.0))),
        )

    def _begin(self) -> None:
        if self._waiting is None:
            return
        self._next, self.cut_share = self._waiting
        self._waiting, self._faded = None, 0
        self.change = Change(self._position, 0.0, 0.0, self.cut_share, False)

    def _finish(self) -> None:
        if self._next is not None:
            self._current, self._next = self._next, None
        if self.change is not None:
            self.change = replace(self.change, done=True)
        self._begin()

    def state(self) -> State:
        """The input's past, the filters, and where a change stands."""
        arrays: State = {f"input.{name}": value for name, value in self._convolver.state().items()}
        arrays["taps"] = self._current.taps
        arrays["faded"], arrays["position"] = np.array(self._faded), np.array(self._position)
        arrays["cut_share"] = np.array(self.cut_share)
        if self._next is not None:
            arrays["next"] = self._next.taps
        if self._waiting is not None:
            arrays["waiting"], arrays["waiting_cut"] = self._waiting[0].taps, np.array(self._waiting[1])
        return arrays

    def restore(self, state: State) -> None:
        """Go on from a state; how rough a change was is measured from here on."""
        past = {name.removeprefix("input."): value for name, value in state.items() if name.startswith("input.")}
        kernel = self._convolver.kernel
        current = kernel(state["taps"])
        following = kernel(state["next"]) if "next" in state else None
        waiting = (kernel(state["waiting"]), float(state["waiting_cut"])) if "waiting" in state else None
        self._convolver.restore(past)
        self._current, self._next, self._waiting = current, following, waiting
        self._faded, self._position = int(state["faded"]), int(state["position"])
        self.cut_share = float(state["cut_share"])
        self.change = None if following is None else Change(self._position, 0.0, 0.0, self.cut_share, False)
