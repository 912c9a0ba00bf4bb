"""Leakage of a real recording, without references: read off where one talker is alone.

With e_k the signal separated for talker k, and only talker j speaking in a piece of a second or less,

    leakage_kj = 10 log10( max(|e_k|^2 - N_k, 0) / (|e_j|^2 - N_j) ),

N the power of each signal in stretches where nobody speaks, where such are known; else noise counts as leakage. The
figure is the mean over pieces, with its interval. It says how loud talker j comes out of k's file while j alone
speaks. It does not say what comes out while both speak, when a filter driven by who speaks when works less well; nor
anything about distortion of the talker's own voice.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.intervals import Interval, mean_intervals

__all__ = ["CLAIMS", "AloneLeakage", "alone_stretches", "leakage_where_alone"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]
Stretches = list[tuple[float, float]]

PIECE_S, SHORTEST_PIECE_S = 1.0, 0.4
RING_S = 0.3
"""What others said rings on in the room for so long."""
EARLY_S = 0.05
SPOKEN = 1e-4
"""A piece counts when the talker's own file holds more than this share of its loudest piece (-40 dB)."""
LOWEST_DB = -80.0
"""Leakage that noise hides altogether, or less than this, counts as this."""
CLAIMS = (
    "Leakage where one talker is alone says how loud that talker comes out of another's file while nobody else speaks.",
    "It cannot say what leaks while several speak: filters that follow who speaks when do better where one is alone.",
    "It cannot say how good a talker's own voice sounds; only a reference or ears can.",
)


@dataclass(frozen=True)
class AloneLeakage:
    """How loud talker `source` is in the file of `target`, in dB of the level in the own file.

    interval    over pieces, in dB; None inside where there are too few
    seconds     of the source alone that it rests on
    at_floor    pieces in which noise hides the leakage, so that the figure is an upper bound
    """

    source: str
    target: str
    interval: Interval
    seconds: float
    at_floor: int


def alone_stretches(active_s: Mapping[str, Stretches], duration_s: float) -> dict[str, Stretches]:
    """Where each talker speaks and nobody else does, or has just done, by talker."""
    found: dict[str, Stretches] = {}
    for name, own in active_s.items():
        busy = sorted(
            (start - EARLY_S, stop + RING_S)
            for other, stretches in active_s.items()
            if other != name
            for start, stop in stretches
        )
        found[name] = [piece for start, stop in own for piece in _without(start, min(stop, duration_s), busy)]
    return found


def _without(start: float, stop: float, busy: Sequence[tuple[float, float]]) -> Stretches:
    left, at = [], start
    for first, last in busy:
        if first > at:
            left.append((at, min(first, stop)))
        at = max(at, last)
        if at >= stop:
            break
    left += [(at, stop)] if at < stop else []
    return [(a, b) for a, b in left if b - a >= SHORTEST_PIECE_S]


def leakage_where_alone(
    signals: Signals,
    names: Sequence[str],
    alone_s: Mapping[str, Stretches],
    sample_rate: int,
    *,
    quiet_s: Sequence[tuple[float, float]] = (),
) -> list[AloneLeakage]:
    """Leakage of each talker into each other's signal.

    Parameters
    ----------
    signals : (talkers, samples)
        The separated talkers, at one scale.
    names : sequence of str
    alone_s : mapping
        Stretches in which each talker is alone.
    quiet_s : list of (start, stop)
        Stretches in which nobody speaks, for the noise.
    """
    noise = _noise(signals, quiet_s, sample_rate)
    found = []
    for j, source in enumerate(names):
        pieces = _pieces(alone_s.get(source, []), signals.shape[1], sample_rate)
        power = np.array([np.mean(np.square(signals[:, p], dtype=np.float64), axis=1) for p in pieces])
        power = power.reshape(-1, len(names))
        spoken = power[:, j] > max(SPOKEN * power[:, j].max(initial=0.0), 4.0 * noise[j])
        rest = np.maximum(power[spoken] - noise, 0.0)
        seconds = sum((p.stop - p.start) / sample_rate for p, s in zip(pieces, spoken, strict=True) if s)
        for k, target in enumerate(names):
            if k == j:
                continue
            with np.errstate(divide="ignore"):
                leakage = np.maximum(10.0 * np.log10(rest[:, k] / rest[:, j]), LOWEST_DB)
            hidden = int(np.count_nonzero(rest[:, k] < 0.25 * noise[k]))
            [interval] = mean_intervals(leakage[:, None])
            found.append(AloneLeakage(source, target, interval, float(seconds), hidden))
    return found


def _noise(signals: Signals, quiet_s: Sequence[tuple[float, float]], sample_rate: int) -> Floats:
    pieces = _pieces(quiet_s, signals.shape[1], sample_rate)
    if not pieces:
        return np.zeros(len(signals))
    return np.asarray(np.mean([np.mean(np.square(signals[:, p], dtype=np.float64), axis=1) for p in pieces], axis=0))


def _pieces(stretches: Sequence[tuple[float, float]], samples: int, sample_rate: int) -> list[slice]:
    """The stretches in pieces of about a second."""
    found = []
    for start, stop in stretches:
        first, last = round(start * sample_rate), min(round(stop * sample_rate), samples)
        if last - first < SHORTEST_PIECE_S * sample_rate:
            continue
        edges = np.linspace(first, last, max(1, round((last - first) / (PIECE_S * sample_rate))) + 1).astype(int)
        found += [slice(int(a), int(b)) for a, b in pairwise(edges)]
    return found
