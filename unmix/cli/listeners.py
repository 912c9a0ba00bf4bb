"""Listeners' answers for people: `unmix grade --listeners`."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from unmix.cli.common import print_json, print_table, say

if TYPE_CHECKING:
    from unmix.metrics.listening import Listening

__all__ = ["grade_listeners"]

JSON, CSV = "listening.json", "listening.csv"


def grade_listeners(
    files: Sequence[Path], key: Path | None, *, keep_all: bool, out: Path | None, overwrite: bool, as_json: bool
) -> None:
    """Analyse what listeners answered, print it, and write it when there is a folder to."""
    from unmix.files import refuse_to_replace, write_aside, write_json
    from unmix.jobs.listening import analyse_answers, scores_csv

    for name in (JSON, CSV) if out is not None else ():
        refuse_to_replace(Path(str(out)) / name, overwrite=overwrite)
    found, rows = analyse_answers(files, key=key, screen=not keep_all)
    if out is not None:
        write_json(out / JSON, found.to_dict() | {"rows": rows}, overwrite=overwrite)
        with write_aside(out / CSV, overwrite=overwrite) as aside:
            aside.write_text(scores_csv(rows), encoding="utf-8")
    if as_json:
        print_json(found.to_dict())
        return
    _print(found)
    if out is not None:
        say(f"Written to {out}: {JSON}, {CSV} (a batch takes it as [[scores]])")


def _print(found: Listening) -> None:
    from unmix.cli.tables import number, plain_table

    kept = sum(listener.kept for listener in found.listeners)
    what = "score, 0 to 100" if found.procedure == "scale" else "comparisons won, %"
    say(f"{kept} of {len(found.listeners)} listeners kept, {found.trials} trials")
    rows = []
    for condition in found.conditions:
        interval = condition.interval
        quartiles = condition.quartiles
        rows.append(
            [
                str(condition.group or "\u2013"),
                condition.name,
                number(interval.mean, 1),
                "" if interval.low is None else f"[{number(interval.low, 1)} {number(interval.high, 1)}]",
                number(condition.median, 1),
                "" if quartiles is None else f"{number(quartiles[0], 1)} to {number(quartiles[1], 1)}",
            ]
        )
    columns = [
        ("group", "left"),
        ("condition", "left"),
        (f"{what}\nmean", "right"),
        ("95 % interval", "left"),
        ("median", "right"),
        ("quartiles", "left"),
    ]
    print_table(plain_table(columns, rows))
    for listener in found.listeners:
        if not listener.kept:
            say(f"Left out: {listener.name} {listener.reason}")
    for line in found.warnings:
        say(f"Note: {line}")
