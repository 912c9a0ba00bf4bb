"""A batch at a glance: the ranking, what it rests on, what failed, what changed."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

from unmix.cli.tables import number, plain_table

if TYPE_CHECKING:
    from rich.table import Table

    from unmix.batch.compare import Comparison
    from unmix.batch.ranking import Analysis, Metric
    from unmix.metrics.intervals import Interval
    from unmix.metrics.statistics import Ranked, Ranking

__all__ = ["change_lines", "change_table", "clock", "ranking_lines", "ranking_table"]

FEWEST_SCENES = 2
MOST_ROWS = 40
MOST_LINES = 6
MOST_LEADERS = 3


def ranking_table(analysis: Analysis, *, narrow: bool = False) -> Table:
    """Variants, best first by the first metric; a line under each group that cannot be told apart.

    narrow  for a terminal of 80 columns: intervals of the first metric only, no costs
    """
    first, *others = analysis.metrics
    ranking = analysis.rankings[first.name]
    whole = (first,) if narrow else analysis.metrics
    columns = [("group", "right"), ("variant", "left")]
    columns += [(f"{_head(m)}\nmean [{_percent(ranking)}]", "right") for m in whole]
    columns += [(f"{_head(m).replace(' ', chr(10), 1)}", "right") for m in others if narrow]
    columns += [("scenes", "right")]
    columns += [] if narrow else [("failed", "right"), ("x real\ntime", "right"), ("latency\nms", "right")]
    table = plain_table(columns, [])
    shown = ranking.variants[:MOST_ROWS]
    for at, variant in enumerate(shown):
        cost = analysis.costs[variant.name]
        cells = [str(variant.group) if variant.group else "–", variant.name]
        intervals = [(m, _of(analysis.rankings[m.name], variant.name).interval) for m in analysis.metrics]
        cells += [_interval(interval, m) if m in whole else _mean(interval, m) for m, interval in intervals]
        cells += [str(variant.interval.scenes)]
        costs = [str(cost.failures), number(cost.real_time_factor, 2), number(cost.latency_ms, 0)]
        cells += [] if narrow else costs
        last = at + 1 < len(shown) and shown[at + 1].group != variant.group
        table.add_row(*cells, style="bold" if variant.group == 1 else None, end_section=last)
    return table


def _head(metric: Metric) -> str:
    name = metric.name.removesuffix("_db").upper().replace("SI_SDR", "SI-SDR")
    unit = " dB" if metric.name.endswith("_db") else ""
    return f"{name} gain{unit}" if metric.column.endswith("_gain") else f"{metric.name}"


def _percent(ranking: Ranking) -> str:
    level = ranking.variants[0].interval.level if ranking.variants else 0.95
    return f"{100 * level:.0f} % interval"


def _of(ranking: Ranking, name: str) -> Ranked:
    return next(v for v in ranking.variants if v.name == name)


def _interval(interval: Interval, metric: Metric) -> str:
    mean = _mean(interval, metric)
    if interval.low is None or interval.high is None:
        return mean
    return f"{mean} [{_number(interval.low, metric)} {_number(interval.high, metric)}]"


def _mean(interval: Interval, metric: Metric) -> str:
    return _number(interval.mean, metric)


def _number(value: float | None, metric: Metric) -> str:
    digits = 1 if metric.name.endswith("_db") else 2
    return number(value, digits, signed=metric.column.endswith("_gain"))


def ranking_lines(analysis: Analysis) -> Iterator[str]:
    """What the table rests on, in sentences."""
    first = analysis.metrics[0]
    ranking = analysis.rankings[first.name]
    known = [v for v in ranking.variants if v.group]
    if not known:
        yield f"No variant has a value of {first.name} in any scene; see `undefined` and `error` in the results."
        return
    yield (
        f"Ranked by {first.name}; a group ends where a variant can be told apart from the group's first "
        f"(Wilcoxon's signed ranks, corrected for {ranking.tests} pairs by Holm's method). Talkers of a scene are "
        "averaged."
    )
    if analysis.scenes < FEWEST_SCENES:
        yield "One scene cannot tell variants apart; the order is this scene's alone. Add scenes."
        return
    best = known[0]
    yield from _beaten(ranking, first)
    for peer in best.peers[:MOST_LINES]:
        pair = ranking.pair(best.name, peer)
        if pair is None:
            continue
        more = pair.scenes_more
        need = (
            "no number of scenes is likely to tell them" if more is None else f"about {more:,} more scenes would tell"
        )
        yield f"{best.name} and {peer} cannot be told apart on {pair.interval.scenes} scenes; {need}."
    if len(best.peers) > MOST_LINES:
        yield f"{best.name} cannot be told apart from {len(best.peers) - MOST_LINES} more; see batch.json."
    if analysis.coverage_percent is not None:
        said = ", ".join(f"{value:.0f} % ({kind})" for kind, value in analysis.coverage_percent.items())
        yield f"With so few scenes, intervals hold the true mean in {said} of cases, by simulation."
    if len(ranking.variants) > MOST_ROWS:
        yield f"{len(ranking.variants) - MOST_ROWS} more variants stand in batch.json."


def _beaten(ranking: Ranking, metric: Metric) -> Iterator[str]:
    """How much the best variant is ahead of the best of each group below, for the first few."""
    leaders = {v.group: v.name for v in reversed(ranking.variants) if v.group}
    for group in range(2, 2 + MOST_LEADERS):
        pair = ranking.pair(leaders[1], leaders[group]) if group in leaders else None
        if pair is None or pair.interval.mean is None or pair.p_corrected is None:
            continue
        p = "p < 0.001" if pair.p_corrected < 0.001 else f"p = {pair.p_corrected:.3f}"
        effect = "" if pair.effect is None else f", effect size {abs(pair.effect):.1f}"
        yield f"{pair.a} is ahead of {pair.b} by {_interval(pair.interval, metric)} ({p}{effect})."


def change_table(comparison: Comparison) -> Table:
    """What changed against an earlier batch, variant by variant."""
    columns = [("variant", "left"), ("figure", "left"), ("change, mean [95 % interval]", "right")]
    columns += [("scenes", "right"), ("verdict", "left")]
    rows = []
    for change in comparison.changes:
        digits = 2 if change.metric.endswith("_db") else 3
        mean, low, high = (
            number(value, digits, signed=True)
            for value in (change.interval.mean, change.interval.low, change.interval.high)
        )
        rows.append(
            [change.variant, change.metric, f"{mean} [{low} {high}]", str(change.interval.scenes), change.verdict]
        )
    return plain_table(columns, rows, title=f"Against {comparison.earlier}")


def change_lines(comparison: Comparison) -> Iterator[str]:
    """What only one of the batches has."""
    for what, names in (
        ("New variants", comparison.new_variants),
        ("Variants gone", comparison.gone_variants),
        ("New scenes", comparison.new_scenes),
        ("Scenes gone", comparison.gone_scenes),
        ("Figures that the earlier batch has not", comparison.not_compared),
    ):
        if names:
            more = f" and {len(names) - MOST_LINES} more" if len(names) > MOST_LINES else ""
            yield f"{what}: {', '.join(names[:MOST_LINES])}{more}"


def clock(seconds: float) -> str:
    """A duration as people say it."""
    minutes = seconds / 60
    if minutes < 2:
        return f"{seconds:.0f} s"
    return f"{minutes:.0f} min" if minutes < 120 else f"{minutes / 60:.1f} h"
