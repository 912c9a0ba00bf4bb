"""Listeners' answers: who can be counted on, and what they found.

Scale: scores 0 to 100 with hidden reference and hidden unprocessed microphone, after ITU-R BS.1534-3 [1]_. Its rule of
post-screening leaves a listener out who scores the hidden reference below 90 in more than 15 % of the trials; a
listener who scores the lowest condition above 90 in more than 15 % is left out, too, as the standard does for its
mid-range anchor, in whose place the unprocessed microphone stands here.

Pairs: which of two is preferred, or neither. A condition's score is the percentage of its comparisons it won, ties
counting half; nobody is screened.

Listeners are the unit: each one's scores are averaged over the trials, and means over listeners get intervals and
groups as variants over scenes do (`unmix.metrics.statistics`). The standard's median and quartiles over all single
scores stand beside them.

.. [1] Recommendation ITU-R BS.1534-3, "Method for the subjective assessment of intermediate quality level of audio
   systems", 2015.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.intervals import Interval
from unmix.metrics.statistics import rank_variants

__all__ = ["MICROPHONE", "REFERENCE", "Condition", "Listener", "Listening", "analyse_listening", "pair_scores"]

Floats = NDArray[np.float64]

REFERENCE, MICROPHONE = "reference", "microphone"
"""Names of the hidden reference and of the hidden unprocessed microphone among the conditions."""
GOOD, TOLERATED = 90.0, 0.15


@dataclass(frozen=True)
class Listener:
    """One listener; `reason` says why somebody was left out."""

    name: str
    kept: bool
    reason: str = ""


@dataclass(frozen=True)
class Condition:
    """What listeners found of one condition.

    interval   mean over listeners with its interval
    median, quartiles  of all single scores
    group      counts from 1: conditions of one group cannot be told apart from its first
    """

    name: str
    interval: Interval
    median: float | None
    quartiles: tuple[float, float] | None
    group: int
    peers: tuple[str, ...]


@dataclass(frozen=True)
class Listening:
    """A listening test's outcome: conditions, the best first."""

    procedure: str
    trials: int
    listeners: tuple[Listener, ...]
    conditions: tuple[Condition, ...]
    warnings: tuple[str, ...] = ()

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return asdict(self)


def analyse_listening(
    scores: Floats,
    listeners: Sequence[str],
    conditions: Sequence[str],
    *,
    procedure: str = "scale",
    screen: bool = True,
    seed: int = 0,
) -> Listening:
    """Screen listeners and rank conditions.

    scores      (listeners, trials, conditions), 0 to 100; NaN where there is no answer
    procedure   "scale" or "pairs"; only the scale is screened
    screen      False keeps everybody

    The hidden reference and microphone are the conditions of these names; without them nobody is screened for them.
    """
    table = np.asarray(scores, dtype=np.float64)
    judged = [
        _judge(name, table[i], conditions) if screen and procedure == "scale" else Listener(name, kept=True)
        for i, name in enumerate(listeners)
    ]
    kept = np.array([listener.kept for listener in judged], dtype=bool)
    counted = table[kept]
    ranking = rank_variants(_means(counted), conditions, seed=seed)
    found = []
    for ranked in ranking.variants:
        single = counted[:, :, list(conditions).index(ranked.name)]
        single = single[np.isfinite(single)]
        low, middle, high = np.percentile(single, [25.0, 50.0, 75.0]) if len(single) else (0.0, 0.0, 0.0)
        quartiles = (float(low), float(high)) if len(single) else None
        median = float(middle) if len(single) else None
        found.append(Condition(ranked.name, ranked.interval, median, quartiles, ranked.group, ranked.peers))
    return Listening(procedure, table.shape[1], tuple(judged), tuple(found), tuple(_warnings(judged)))


def _means(scores: Floats) -> Floats:
    """Each listener's mean over the trials that were answered: (listeners, conditions)."""
    answered = np.isfinite(scores)
    count = answered.sum(axis=1)
    total = np.where(answered, scores, 0.0).sum(axis=1)
    return np.asarray(np.divide(total, count, out=np.full(count.shape, np.nan), where=count > 0))


def _judge(name: str, scores: Floats, conditions: Sequence[str]) -> Listener:
    """Whether a listener's scores (trials, conditions) can be counted on."""
    rules = ((REFERENCE, np.less, "below"), (MICROPHONE, np.greater, "above"))
    for condition, wrong, word in rules:
        if condition not in conditions:
            continue
        given = scores[:, list(conditions).index(condition)]
        given = given[np.isfinite(given)]
        missed = int(np.count_nonzero(wrong(given, GOOD)))
        if len(given) and missed > TOLERATED * len(given):
            return Listener(
                name, False, f"scored the hidden {condition} {word} {GOOD:.0f} in {missed} of {len(given)} trials"
            )
    return Listener(name, kept=True)


def _warnings(listeners: Sequence[Listener]) -> list[str]:
    kept = sum(listener.kept for listener in listeners)
    if kept == 0:
        return ["no listener passed the screening: nothing can be said"]
    if kept < 6:
        return [f"{kept} {'listener' if kept == 1 else 'listeners'}: too few for more than an impression"]
    return []


def pair_scores(preferred: Mapping[tuple[str, str], float], conditions: Sequence[str]) -> Floats:
    """Scores (conditions,) from one trial's pairs: the percentage won; NaN where nothing was compared.

    preferred  by pair (a, b): 1 when a was preferred, 0 when b was, 0.5 for neither
    """
    won, count = np.zeros(len(conditions)), np.zeros(len(conditions))
    for (a, b), share in preferred.items():
        i, j = conditions.index(a), conditions.index(b)
        won[[i, j]] += [share, 1.0 - share]
        count[[i, j]] += 1.0
    shares = np.divide(won, count, out=np.full(len(conditions), np.nan), where=count > 0)
    return np.asarray(100.0 * shares)
