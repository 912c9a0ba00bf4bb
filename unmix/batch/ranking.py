"""Which variant to ship: mean gains with intervals, groups that cannot be told apart, scenes still needed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.batch.results import open_results
from unmix.metrics.intervals import coverage_percent
from unmix.metrics.statistics import Difference, Ranking, rank_variants

__all__ = ["Analysis", "Metric", "VariantSummary", "analyse", "table_of"]

Floats = NDArray[np.float64]

ENOUGH_SCENES = 24
"""From so many scenes on intervals cover what they say; below, what they cover is said with them."""

TRIALS = 1000
"""Simulated experiments behind that: a standard error of 0.7 %."""


@dataclass(frozen=True)
class Metric:
    """A figure to rank by: its name, its column in the results, and which way is better."""

    name: str
    column: str
    higher_is_better: bool = True


@dataclass(frozen=True)
class VariantSummary:
    """What a variant costs: failures, and medians over scenes."""

    name: str
    items: int
    failures: int
    real_time_factor: float | None
    latency_ms: float | None
    peak_memory_mb: float | None


@dataclass(frozen=True)
class Analysis:
    """Rankings by metric, the plan's first one first; costs by variant.

    coverage_percent  how many of the intervals at so few scenes really hold the mean; None from 24 scenes on
    """

    metrics: tuple[Metric, ...]
    rankings: dict[str, Ranking]
    costs: dict[str, VariantSummary]
    scenes: int
    coverage_percent: dict[str, float] | None

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return {
            "scenes": self.scenes,
            "coverage_percent": self.coverage_percent,
            "costs": [asdict(cost) for cost in self.costs.values()],
            "rankings": {name: _ranking_dict(ranking) for name, ranking in self.rankings.items()},
        }


def _ranking_dict(ranking: Ranking) -> dict[str, Any]:
    return {
        "higher_is_better": ranking.higher_is_better,
        "tests": ranking.tests,
        "variants": [asdict(v) for v in ranking.variants],
        "pairs": [_pair_dict(pair) for pair in ranking.pairs],
    }


def _pair_dict(pair: Difference) -> dict[str, Any]:
    return asdict(pair) | {"distinct": pair.distinct, "scenes_more": pair.scenes_more}


def analyse(
    folder: str | Path, metrics: Sequence[Metric], *, scenes: Sequence[str], variants: Sequence[str], seed: int
) -> Analysis:
    """Rank the variants of a batch by each metric; talkers of a scene are averaged, scenes are the unit.

    Raises FileError when the folder holds no results.
    """
    with open_results(folder) as connection:
        tables = {m.name: table_of(connection, m.column, scenes, variants) for m in metrics}
        costs = _costs(connection, variants)
    rankings = {
        m.name: rank_variants(tables[m.name], variants, higher_is_better=m.higher_is_better, seed=seed) for m in metrics
    }
    counts = [v.interval.scenes for v in rankings[metrics[0].name].variants if v.group]
    fewest = min(counts, default=0)
    coverage = coverage_percent(fewest, trials=TRIALS) if 2 <= fewest < ENOUGH_SCENES else None
    return Analysis(tuple(metrics), rankings, costs, max(counts, default=0), coverage)


def table_of(connection: Any, column: str, scenes: Sequence[str], variants: Sequence[str]) -> Floats:
    """A figure as (scenes, variants), the talkers of a scene averaged; NaN where it is not known.

    A talker counts who has the figure under some variant; where one such talker lacks it, means of different talkers
    would be compared, so the scene has no value for that variant.
    """
    found = connection.execute(
        f"""
        WITH rows AS (SELECT scene, variant, talker, "{column}" AS figure FROM results WHERE error IS NULL),
        gradable AS (SELECT scene, talker FROM rows GROUP BY scene, talker HAVING count(figure) > 0),
        talkers AS (SELECT scene, count(*) AS expected FROM gradable GROUP BY scene)
        SELECT scene, variant, avg(figure) AS mean
        FROM rows JOIN talkers USING (scene)
        GROUP BY scene, variant, expected HAVING count(figure) = expected
        """
    ).fetchnumpy()
    row = {name: i for i, name in enumerate(scenes)}
    of = {name: i for i, name in enumerate(variants)}
    table = np.full((len(scenes), len(variants)), np.nan)
    for scene, variant, mean in zip(found["scene"], found["variant"], found["mean"], strict=True):
        if scene in row and variant in of:
            table[row[scene], of[variant]] = mean
    return table


def _costs(connection: Any, variants: Sequence[str]) -> dict[str, VariantSummary]:
    found = connection.execute(
        """
        WITH items AS (
            SELECT scene, variant, any_value(error) AS error, any_value(real_time_factor) AS factor,
                   any_value(latency_ms) AS latency, any_value(peak_memory_mb) AS memory
            FROM results GROUP BY scene, variant
        )
        SELECT variant, count(*), count(error), median(factor), median(latency), median(memory)
        FROM items GROUP BY variant
        """
    ).fetchall()
    by_name = {row[0]: VariantSummary(*row) for row in found}
    return {name: by_name.get(name, VariantSummary(name, 0, 0, None, None, None)) for name in variants}
