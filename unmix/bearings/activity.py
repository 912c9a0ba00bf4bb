"""When each talker is active.

A talker is active in a slice of time when enough of its bins are theirs. The shares come from the mixture, so a
slice with two talkers counts for both; pauses shorter than `BRIDGE_S` are bridged, as a breath does not end a turn, and
what is shorter than `SHORTEST_S` is dropped.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.bearings.bins import Steering
from unmix.bearings.mixture import likelihoods, responses
from unmix.bearings.peaks import peak_shares
from unmix.bearings.scan import SLICE_S, Scan
from unmix.bearings.space import SearchSpace

__all__ = ["Shares", "active_stretches", "stretches_to_mask", "talker_shares"]

Floats = NDArray[np.float64]
Mask = NDArray[np.bool_]

BRIDGE_S = 0.4
SHORTEST_S = 0.15
ACTIVE_SHARE = 0.12
_FEWEST = 10


@dataclass(frozen=True)
class Shares:
    """Whose bins are whose.

    ``share`` (slices, talkers) at ``slice_s``; ``outside`` (talkers,), the mean of 1 - q over each talker's own bins.
    """

    slice_s: Floats
    share: Floats
    outside: Floats

    def active(self, talker: int) -> Mask:
        """Slices in which a talker is active."""
        return np.asarray(self.share[:, talker] >= ACTIVE_SHARE)


def talker_shares(
    scan: Scan,
    space: SearchSpace,
    steering: Steering,
    x_at: Callable[[Floats], Floats],
    *,
    distance_m: float | None = None,
) -> Shares:
    """Shares of the kept bins, slice by slice.

    x_at  times (n,) to projections (n, talkers, rank)
    """
    talkers = x_at(scan.slice_s[:1]).shape[1] if len(scan.slice_s) else 0
    share = np.zeros((len(scan.slice_s), talkers))
    outside, own = np.zeros(talkers), np.zeros(talkers)
    if not talkers:
        return Shares(scan.slice_s, share, outside)
    if scan.peaks is not None:
        return Shares(
            scan.slice_s, peak_shares(scan.peaks.chosen(), x_at(scan.slice_s), scan.slice_s, SLICE_S), outside
        )
    for bins, rotation in scan.parts:
        index = np.minimum((bins.time_s / SLICE_S).astype(np.intp), len(scan.slice_s) - 1)
        order = np.argsort(index, kind="stable")
        edges = np.flatnonzero(np.diff(index[order], prepend=-1, append=len(scan.slice_s)))
        x = x_at(scan.slice_s[index[order[edges[:-1]]]])
        still = bool(np.all(x == x[0]))
        waves = _waves(x[0], rotation, space, steering, distance_m) if still else None
        for first, stop, here in zip(edges[:-1], edges[1:], x, strict=True):
            mine = bins.take(order[first:stop])
            q = responses(mine, waves if waves is not None else _waves(here, rotation, space, steering, distance_m))
            best = q.argmax(axis=1)
            np.add.at(outside, best, 1.0 - q[np.arange(len(q)), best])
            np.add.at(own, best, 1.0)
            if len(q) >= _FEWEST:
                share[index[order[first]]] = _few_weights(likelihoods(q, steering.channels).astype(np.float64))
    return Shares(scan.slice_s, share, outside / np.maximum(own, 1.0))


def _waves(
    x: Floats, rotation: Floats, space: SearchSpace, steering: Steering, distance_m: float | None
) -> NDArray[np.complex64]:
    return steering.waves(x @ space.basis.T @ rotation, space.lift(x) @ rotation, distance_m)


def _few_weights(density: Floats) -> Floats:
    """Mixture weights over a few talkers and nobody, by expectation-maximisation."""
    w = np.full(density.shape[1], 0.9 / density.shape[1])
    for _ in range(20):
        joint = density * w
        w = np.asarray((joint / (joint.sum(axis=1) + 1.0 - w.sum())[:, None]).mean(axis=0))
    return w


def active_stretches(
    time_s: Floats, active: Mask, step_s: float, *, bridge_s: float = BRIDGE_S, shortest_s: float = SHORTEST_S
) -> list[tuple[float, float]]:
    """Stretches (start, stop) in seconds of slices ``active`` (slices,) of length ``step_s`` centred at ``time_s``."""
    stretches: list[tuple[float, float]] = []
    for t in time_s[active]:
        start, stop = float(t) - 0.5 * step_s, float(t) + 0.5 * step_s
        if stretches and start - stretches[-1][1] <= bridge_s + 1e-9:
            stretches[-1] = (stretches[-1][0], stop)
        else:
            stretches.append((max(0.0, start), stop))
    return [(a, b) for a, b in stretches if b - a >= shortest_s - 1e-9]


def stretches_to_mask(stretches: list[tuple[float, float]], time_s: Floats) -> Mask:
    """Whether each time lies in one of the stretches: (times,)."""
    mask = np.zeros(len(time_s), dtype=bool)
    for start, stop in stretches:
        mask |= (time_s >= start) & (time_s < stop)
    return mask
