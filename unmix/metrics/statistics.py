"""Which variants can be told apart: paired differences on the same scenes, and a ranking that says no more than that.

For two variants a, b with values on the same scenes, d = a - b per scene:

    mean d with its interval (`unmix.metrics.intervals`)
    Wilcoxon's signed-rank test [1]_, two-sided, corrected by Holm's method [2]_ over all pairs of variants
    effect size: d_z = mean(d) / s(d), and the matched-pairs rank-biserial correlation r = (W+ - W-) / (W+ + W-) [3]_
    scenes still needed: what the test would take to find a difference of this d_z with a probability of 0.8 at the
    level of Holm's first step, from the normal approximation ((z(1 - a/2) + z(0.8)) / d_z)^2, Wilcoxon's asymptotic
    relative efficiency 3 / pi under normality [1]_, and Student's correction z(1 - a/2)^2 / 2

Groups: variants in the order of their means; the best one leads a group that ends before the first variant that can be
told apart from it, which leads the next group, and so on. `Ranked.peers` says what stands in no such order: whom a
variant cannot be told apart from, across groups too.

.. [1] E. L. Lehmann, "Nonparametrics: Statistical Methods Based on Ranks", Springer 2006 (revised printing).
.. [2] S. Holm, "A simple sequentially rejective multiple test procedure", Scandinavian J. Statistics 6(2), 1979.
.. [3] D. S. Kerby, "The simple difference formula", Comprehensive Psychology 3, 2014.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.intervals import LEVEL, Interval, mean_intervals

__all__ = ["Difference", "Ranked", "Ranking", "holm", "paired_differences", "rank_variants", "scenes_needed"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

ALL_PAIRS_UP_TO = 40
"""With more variants only the pairs that the groups need are compared; they are corrected as if all had been."""
MOST_GROUPS = 12
"""What is left after so many groups is one last group that nobody has looked into."""
TOGETHER = 32
"""Variants compared with a group's leader at a time."""
SAME = 1e-9
"""Differences up to this are rounding."""
MOST_SCENES = 100_000
POWER = 0.8


@dataclass(frozen=True)
class Difference:
    """Variant `a` less variant `b` on the scenes that both have; None where it cannot be said.

    interval          of the mean difference
    p, p_corrected    Wilcoxon's signed-rank test, before and after correction for all pairs
    effect            d_z, mean difference over its standard deviation; None when that is zero
    rank_biserial     -1 to 1: share of the ranks in favour of `a` less that in favour of `b`
    scenes_needed     so many scenes in all would probably tell the two apart; None when over 100,000 or undefined
    """

    a: str
    b: str
    interval: Interval
    p: float | None
    p_corrected: float | None
    effect: float | None
    rank_biserial: float | None
    scenes_needed: int | None

    @property
    def distinct(self) -> bool:
        """Whether the two can be told apart."""
        return self.p_corrected is not None and self.p_corrected < 1.0 - self.interval.level

    @property
    def scenes_more(self) -> int | None:
        """Scenes still needed beyond those there are; 0 when the two can be told apart."""
        if self.distinct:
            return 0
        return None if self.scenes_needed is None else max(1, self.scenes_needed - self.interval.scenes)


@dataclass(frozen=True)
class Ranked:
    """One variant of a ranking.

    group  counts from 1; 0 when the variant has no value at all
    peers  variants it was compared with and cannot be told apart from
    """

    name: str
    interval: Interval
    group: int
    peers: tuple[str, ...] = ()


@dataclass(frozen=True)
class Ranking:
    """Variants, best first; `pairs` holds the comparisons that were made, `tests` what they were corrected for."""

    variants: tuple[Ranked, ...]
    pairs: tuple[Difference, ...]
    tests: int
    higher_is_better: bool

    def pair(self, a: str, b: str) -> Difference | None:
        """The comparison of `a` with `b`, in this order or the other; None when it was not made."""
        return next((p for p in self.pairs if {p.a, p.b} == {a, b}), None)


def rank_variants(
    values: Signals, names: Sequence[str], *, higher_is_better: bool = True, seed: int = 0, level: float = LEVEL
) -> Ranking:
    """Rank variants by their mean and group those that cannot be told apart.

    Parameters
    ----------
    values : (scenes, variants)
        A figure, talkers averaged; NaN where a scene has none.
    names : sequence of str
        The variants.
    higher_is_better : bool
        Whether large values come first.
    seed, level
        Of the intervals; a pair is told apart when its corrected p lies below 1 - level.
    """
    table: Floats = np.asarray(values, dtype=np.float64)
    intervals = mean_intervals(table, seed=seed, level=level)
    sign = -1.0 if higher_is_better else 1.0
    order = sorted(
        range(len(names)), key=lambda v: (math.inf if (m := intervals[v].mean) is None else sign * m, names[v])
    )
    ranked = [v for v in order if intervals[v].mean is not None]
    tests = max(1, len(ranked) * (len(ranked) - 1) // 2)
    compare = _Comparer(table, names, tests, seed, level)
    if len(ranked) <= ALL_PAIRS_UP_TO:
        compare.all_pairs(ranked)
    groups = _groups(ranked, compare)
    place = {v: at for at, v in enumerate(order)}
    made = sorted(compare.made, key=lambda pair: (place[pair[0]], place[pair[1]]))
    pairs = tuple(compare.made[pair] for pair in made)
    variants = tuple(Ranked(names[v], intervals[v], groups.get(v, 0), _peers(names[v], pairs)) for v in order)
    return Ranking(variants, pairs, tests, higher_is_better)


def _peers(name: str, pairs: Sequence[Difference]) -> tuple[str, ...]:
    together = [(p.a, p.b) for p in pairs if not p.distinct and name in (p.a, p.b)]
    return tuple(b if a == name else a for a, b in together)


def _groups(ranked: Sequence[int], compare: _Comparer) -> dict[int, int]:
    groups: dict[int, int] = {}
    first, group = 0, 0
    while first < len(ranked):
        group += 1
        stop = len(ranked) if group > MOST_GROUPS else _end_of_group(ranked, first, compare)
        groups |= dict.fromkeys(ranked[first:stop], group)
        first = stop
    return groups


def _end_of_group(ranked: Sequence[int], first: int, compare: _Comparer) -> int:
    """Where, down the order, the first variant stands that can be told apart from the one at `first`."""
    leader = ranked[first]
    for start in range(first + 1, len(ranked), TOGETHER):
        others = ranked[start : start + TOGETHER]
        compare.with_leader(leader, others)
        for at, v in enumerate(others, start):
            if compare.made[leader, v].distinct:
                return at
    return len(ranked)


class _Comparer:
    """Makes comparisons and keeps them by the pair of columns, the better mean first."""

    def __init__(self, values: Floats, names: Sequence[str], tests: int, seed: int, level: float) -> None:
        self._values, self._names, self._tests, self._seed, self._level = values, names, tests, seed, level
        self.made: dict[tuple[int, int], Difference] = {}

    def all_pairs(self, ranked: Sequence[int]) -> None:
        """Every pair, corrected by Holm's method."""
        pairs = [(a, b) for i, a in enumerate(ranked) for b in ranked[i + 1 :]]
        self._compare(pairs, corrected=holm)

    def with_leader(self, leader: int, others: Sequence[int]) -> None:
        """The pairs a group needs, corrected for all pairs by Bonferroni's inequality where they are new."""
        pairs = [(leader, v) for v in others if (leader, v) not in self.made]
        self._compare(pairs, corrected=lambda p: np.minimum(p * self._tests, 1.0))

    def _compare(self, pairs: Sequence[tuple[int, int]], *, corrected: Any) -> None:
        if not pairs:
            return
        found = paired_differences(
            self._values, self._names, pairs, corrected=corrected, tests=self._tests, seed=self._seed, level=self._level
        )
        self.made |= dict(zip(pairs, found, strict=True))


def paired_differences(
    values: Signals,
    names: Sequence[str],
    pairs: Sequence[tuple[int, int]],
    *,
    corrected: Any = None,
    tests: int | None = None,
    seed: int = 0,
    level: float = LEVEL,
) -> list[Difference]:
    """Compare columns of `values` (scenes, variants) pair by pair on the scenes that both have.

    `corrected` turns the p values (NaN where there is none) into corrected ones, Holm's method by default; `tests`
    is the number of tests that scenes still needed are reckoned for, by default the number of pairs.
    """
    values = np.asarray(values, dtype=np.float64)
    d = np.stack([values[:, a] - values[:, b] for a, b in pairs], axis=1)
    d[np.abs(d) <= SAME] = 0.0
    p, r = _signed_ranks(d)
    adjusted = np.asarray((corrected or holm)(p))
    intervals = mean_intervals(d, seed=seed, level=level)
    alpha = (1.0 - level) / (tests or len(pairs))
    found = []
    for c, (a, b) in enumerate(pairs):
        x = d[np.isfinite(d[:, c]), c]
        s = float(x.std(ddof=1)) if x.size > 1 else 0.0
        effect = float(x.mean()) / s if s > SAME else None
        found.append(
            Difference(
                names[a],
                names[b],
                intervals[c],
                _known(p[c]),
                _known(adjusted[c]),
                effect,
                _known(r[c]),
                None if effect is None else scenes_needed(effect, alpha=alpha),
            )
        )
    return found


def _known(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _signed_ranks(d: Floats) -> tuple[Floats, Floats]:
    """Wilcoxon's two-sided p and the rank-biserial correlation per column; NaN where fewer than two scenes are."""
    from scipy.stats import rankdata, wilcoxon

    p, r = np.full(d.shape[1], np.nan), np.full(d.shape[1], np.nan)
    for c in range(d.shape[1]):
        x = d[np.isfinite(d[:, c]), c]
        if x.size < 2:
            continue
        x = x[x != 0.0]
        if x.size == 0:
            p[c], r[c] = 1.0, 0.0
            continue
        ranks = rankdata(np.abs(x))
        r[c] = float(np.sum(ranks * np.sign(x)) / np.sum(ranks))
        p[c] = float(wilcoxon(x).pvalue)
    return p, r


def holm(p: Floats) -> Floats:
    """Holm's step-down correction; NaN stays NaN and does not count as a test."""
    adjusted = np.full(p.shape, np.nan)
    known = np.flatnonzero(np.isfinite(p))
    order = known[np.argsort(p[known], kind="stable")]
    factors = len(order) - np.arange(len(order))
    adjusted[order] = np.minimum(np.maximum.accumulate(factors * p[order]), 1.0)
    return adjusted


def scenes_needed(effect: float, *, alpha: float = 1.0 - LEVEL, power: float = POWER) -> int | None:
    """Scenes that Wilcoxon's test needs to find `effect` (d_z) at level `alpha`; None beyond 100,000.

    At least as many as make p below `alpha` possible at all: with n scenes the smallest two-sided p is 2^(1 - n).
    """
    from scipy.special import ndtri

    if effect == 0.0:
        return None
    z = float(ndtri(1.0 - alpha / 2.0))
    count = ((z + float(ndtri(power))) / effect) ** 2 * math.pi / 3.0 + z**2 / 2.0
    smallest = math.floor(1.0 - math.log2(alpha)) + 1
    return max(smallest, math.ceil(count)) if count <= MOST_SCENES else None
