"""Close microphones as references: the other talkers' bleed estimated, taken out, and how much of it is left.

A close microphone hears its own talker loudly and the others faintly, through the room:

    c_k = r_k + sum_{j != k} b_kj * r_j,

r_k what it would hear of its talker alone. Where only talker j speaks, c_k = b_kj * c_j but for noise, so b_kj is the
filter that least squares finds there; then r = c - sum b_kj * r_j, iterated from r = c.

Filters are fitted on one half of each talker's stretches alone and tried on the other: what is left there is the bleed
that remains. References made from either half give two sets of figures, whose difference is the uncertainty that the
bleed leaves in them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.fft
import scipy.linalg
import scipy.signal
from numpy.typing import NDArray

from unmix.errors import InputError

__all__ = ["Bleed", "CleanedReferences", "clean_references"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]
Stretches = list[tuple[float, float]]

REACH_S, AHEAD_S = 0.064, 0.004
"""Length of the filters, and how much of it lies before the arrival at the talker's own microphone."""
RIDGE = 1e-3
"""Of the autocorrelation at zero: what is 30 dB below the spectrum's mean is not extrapolated."""
ROUNDS = 4
LEAST_ALONE_S = 0.8


@dataclass(frozen=True)
class Bleed:
    """The bleed of talker `source` in the close microphone of `target`.

    before_db  level where the source is alone, in dB of the source's in its own microphone
    left_db    the same after taking out the filtered source, on stretches that the filter was not fitted on
    seconds    of the source alone
    """

    source: str
    target: str
    before_db: float
    left_db: float
    seconds: float


@dataclass(frozen=True)
class CleanedReferences:
    """References (talkers, samples) without the bleed, and from either half of the stretches alone."""

    references: Floats
    halves: tuple[Floats, Floats]
    bleed: tuple[Bleed, ...]


def clean_references(
    close: Signals, names: Sequence[str], alone_s: Mapping[str, Stretches], sample_rate: int
) -> CleanedReferences:
    """Take the bleed out of close microphones (talkers, samples).

    Raises InputError naming a talker who is never alone for long enough: the bleed cannot be known then.
    """
    c = np.asarray(close, dtype=np.float64)
    masks = [_halves(alone_s.get(name, []), c.shape[1], sample_rate, name) for name in names]
    whole = _filters(c, [a | b for a, b in masks], sample_rate)
    first, second = (_filters(c, [mask[h] for mask in masks], sample_rate) for h in (0, 1))
    bleed = [
        _bleed(c, j, k, (first[k][j], second[k][j]), masks[j], names, sample_rate)
        for j in range(len(c))
        for k in range(len(c))
        if j != k
    ]
    halves = _taken_out(c, first, sample_rate), _taken_out(c, second, sample_rate)
    return CleanedReferences(_taken_out(c, whole, sample_rate), halves, tuple(bleed))


def _halves(stretches: Stretches, samples: int, sample_rate: int, name: str) -> tuple[NDArray[np.bool_], ...]:
    """Two masks (samples,): every other half second of a talker's stretches alone."""
    total = sum(stop - start for start, stop in stretches)
    if total < LEAST_ALONE_S:
        raise InputError(
            f"talker {name!r} is alone for {total:.1f} s only; {LEAST_ALONE_S:g} s are needed to know the bleed: give "
            "`active_s` if that is wrong, or grade without --close"
        )
    masks = np.zeros((2, samples), dtype=bool)
    size, at = round(0.5 * LEAST_ALONE_S * sample_rate), 0
    for start, stop in stretches:
        first, last = round(start * sample_rate), min(round(stop * sample_rate), samples)
        for a in range(first, last, size):
            masks[at % 2, a : min(a + size, last)] = True
            at += 1
    return masks[0], masks[1]


def _ahead(sample_rate: int) -> int:
    return round(AHEAD_S * sample_rate)


def _filters(c: Floats, alone: Sequence[NDArray[np.bool_]], sample_rate: int) -> list[list[Floats | None]]:
    """filters[k][j]: from talker j's microphone to k's, fitted where j is alone; None for j = k."""
    taps, ahead = round(REACH_S * sample_rate), _ahead(sample_rate)
    columns = []
    for j, mask in enumerate(alone):
        x = np.where(mask, c[j], 0.0)
        size = scipy.fft.next_fast_len(x.size + 2 * taps, real=True)
        X = scipy.fft.rfft(x, size)
        r = scipy.fft.irfft(np.abs(X) ** 2, size)[:taps]
        r[0] *= 1.0 + RIDGE
        rows: list[Floats | None] = []
        for k in range(len(c)):
            if k == j:
                rows.append(None)
                continue
            # Late by `ahead`, so that the first taps stand for what arrives before.
            y = np.roll(np.where(mask, c[k], 0.0), ahead)
            cross = scipy.fft.irfft(scipy.fft.rfft(y, size) * np.conj(X), size)[:taps]
            rows.append(np.asarray(scipy.linalg.solve_toeplitz(r, cross)))
        columns.append(rows)
    return [[columns[j][k] for j in range(len(c))] for k in range(len(c))]


def _filtered(signal: Floats, taps: Floats, ahead: int) -> Floats:
    return np.asarray(scipy.signal.oaconvolve(signal, taps)[ahead : ahead + signal.size])


def _taken_out(c: Floats, filters: list[list[Floats | None]], sample_rate: int) -> Floats:
    r, ahead = c, _ahead(sample_rate)
    for _ in range(ROUNDS):
        bleed = [sum((_filtered(r[j], b, ahead) for j, b in enumerate(row) if b is not None), 0.0) for row in filters]
        r = c - np.array(bleed)
    return r


def _bleed(
    c: Floats,
    j: int,
    k: int,
    filters: tuple[Floats | None, Floats | None],
    masks: tuple[NDArray[np.bool_], ...],
    names: Sequence[str],
    sample_rate: int,
) -> Bleed:
    own = left = before = 0.0
    for taps, tried in zip(filters, reversed(masks), strict=True):
        if taps is None:
            continue
        rest = c[k] - _filtered(c[j], taps, _ahead(sample_rate))
        own += float(np.sum(c[j][tried] ** 2))
        before += float(np.sum(c[k][tried] ** 2))
        left += float(np.sum(rest[tried] ** 2))
    tiny = np.finfo(float).tiny
    own = max(own, tiny)
    return Bleed(
        source=names[j],
        target=names[k],
        before_db=10.0 * float(np.log10(max(before, tiny) / own)),
        left_db=10.0 * float(np.log10(max(left, tiny) / own)),
        seconds=float(np.count_nonzero(masks[0] | masks[1])) / sample_rate,
    )
