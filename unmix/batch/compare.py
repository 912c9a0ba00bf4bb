"""A batch against an earlier one: what got better, what got worse, what is new, what is gone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from unmix.batch.ranking import Metric, table_of
from unmix.batch.results import open_results
from unmix.metrics.intervals import Interval
from unmix.metrics.statistics import paired_differences

__all__ = ["Change", "Comparison", "compare"]


@dataclass(frozen=True)
class Change:
    """One variant's figure now less its figure then, on the scenes that both batches have.

    verdict  "better", "worse", "the same" (in every scene) or "no difference shown"
    """

    variant: str
    metric: str
    interval: Interval
    p_corrected: float | None
    verdict: str


@dataclass(frozen=True)
class Comparison:
    """Changes by metric and variant; names that only one of the batches has."""

    earlier: str
    changes: tuple[Change, ...]
    new_variants: tuple[str, ...]
    gone_variants: tuple[str, ...]
    new_scenes: tuple[str, ...]
    gone_scenes: tuple[str, ...]
    not_compared: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return asdict(self)


def compare(folder: str | Path, earlier: str | Path, metrics: Sequence[Metric], *, seed: int) -> Comparison:
    """Compare two batches by the names of their scenes and variants.

    The p values are corrected by Holm's method over all variants and metrics compared. Raises FileError when one of
    the folders holds no results.
    """
    now_names, then_names = _names(folder), _names(earlier)
    scenes = [s for s in now_names["scene"] if s in set(then_names["scene"])]
    variants = [v for v in now_names["variant"] if v in set(then_names["variant"])]
    known = [m for m in metrics if m.column in then_names["column"]]
    changes: list[Change] = []
    if scenes and variants and known:
        changes = _changes(folder, earlier, known, scenes, variants, seed)
    return Comparison(
        earlier=str(earlier),
        changes=tuple(changes),
        new_variants=_only(now_names, then_names, "variant"),
        gone_variants=_only(then_names, now_names, "variant"),
        new_scenes=_only(now_names, then_names, "scene"),
        gone_scenes=_only(then_names, now_names, "scene"),
        not_compared=tuple(m.name for m in metrics if m not in known),
    )


def _names(folder: str | Path) -> dict[str, list[str]]:
    with open_results(folder) as connection:
        names = {
            key: [row[0] for row in connection.execute(f"SELECT DISTINCT {key} FROM results ORDER BY {key}").fetchall()]
            for key in ("scene", "variant")
        }
        names["column"] = [row[0] for row in connection.execute("DESCRIBE results").fetchall()]
    return names


def _only(here: dict[str, list[str]], there: dict[str, list[str]], key: str) -> tuple[str, ...]:
    other = set(there[key])
    return tuple(name for name in here[key] if name not in other)


def _changes(
    folder: str | Path,
    earlier: str | Path,
    metrics: Sequence[Metric],
    scenes: Sequence[str],
    variants: Sequence[str],
    seed: int,
) -> list[Change]:
    import numpy as np

    tables = []
    for place in (folder, earlier):
        with open_results(place) as connection:
            tables.append(np.hstack([table_of(connection, m.column, scenes, variants) for m in metrics]))
    labels = [(variant, metric) for metric in metrics for variant in variants]
    count = len(labels)
    found = paired_differences(
        np.hstack(tables),
        [variant for variant, _ in labels] * 2,
        [(column, count + column) for column in range(count)],
        seed=seed,
    )
    return [
        Change(variant, metric.name, pair.interval, pair.p_corrected, _verdict(pair.interval, pair.distinct, metric))
        for (variant, metric), pair in zip(labels, found, strict=True)
    ]


def _verdict(interval: Interval, distinct: bool, metric: Metric) -> str:
    mean = interval.mean
    if mean is None:
        return "not compared"
    if mean == 0.0 and interval.method in ("constant", "too few scenes"):
        return "the same"
    if not distinct:
        return "no difference shown"
    return "better" if (mean > 0.0) == metric.higher_is_better else "worse"
