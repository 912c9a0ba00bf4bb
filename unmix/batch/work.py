"""One work item: a scene and a variant in, figures out. What goes wrong becomes part of the result."""

from __future__ import annotations

import contextlib
import json
import time
import traceback
import warnings
from collections import OrderedDict
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from unmix.batch.digests import Stamp, unchanged
from unmix.batch.memory import PeakMemory
from unmix.batch.metrics import OwnMetric
from unmix.batch.rows import alone_columns, item_columns, signals_of, talker_columns, unreferenced_rows
from unmix.batch.store import Part
from unmix.errors import FileError, UnmixError
from unmix.jobs.grade import grader_of_scene
from unmix.jobs.solution import Solution
from unmix.jobs.solve import solve
from unmix.metrics.assignment import match_names
from unmix.metrics.grader import Grader
from unmix.metrics.grades import Grades
from unmix.scene import Scene
from unmix.variant import Variant

__all__ = ["Task", "failed", "run_task"]

KEPT = 2
"""Scenes whose references stay prepared: items come scene by scene."""


@dataclass(frozen=True)
class Task:
    """All that a worker must know of an item.

    path    the scene's file
    stamps  of the files the scene depends on, as they were when the batch was planned
    """

    key: str
    name: str
    digest: str
    path: str
    stamps: tuple[Stamp, ...]
    variant: Variant
    against: str | None
    metrics: tuple[OwnMetric, ...]


@dataclass(frozen=True)
class _Loaded:
    """A scene with its references prepared; `grader` None when no talker has one."""

    scene: Scene
    grader: Grader | None
    truth: dict[str, dict[str, Any]]


def run_task(task: Task) -> Part:
    """Solve and grade one item; an exception becomes the part's error."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # what matters stands in the result
            return _run(task)
    except Exception as error:  # noqa: BLE001  one item must not end a night's batch
        return failed(error)


def failed(error: BaseException) -> Part:
    """The part of an item that ended with `error`; defects of the program keep their traceback."""
    passing = isinstance(error, MemoryError | OSError | FileError)
    line = " ".join(str(error).split()) or type(error).__name__
    if isinstance(error, UnmixError):
        return Part(error=line, passing=passing)
    if isinstance(error, MemoryError):
        return Part(error="out of memory; run with fewer --workers, or shorter excerpts", passing=True)
    return Part(
        error=f"{type(error).__name__}: {line}",
        passing=passing,
        traceback="".join(traceback.format_exception(error)),
    )


def _run(task: Task) -> Part:
    _check_unchanged(task)
    loaded = _load(task)
    with PeakMemory() as memory:
        solution = solve(loaded.scene, task.variant)
        began = time.perf_counter()
        rows, grades = _graded(loaded, solution, task.metrics)
        leaks = alone_columns(loaded.scene, solution)
        grade_time_s = time.perf_counter() - began
    _check_unchanged(task)
    measured = {"grade_time_s": grade_time_s, "peak_memory_mb": memory.mb}
    return Part(
        item=item_columns(loaded.scene, solution, grades) | measured,
        talkers=[row | leaks.get(row["talker"], {}) | loaded.truth.get(row["talker"], {}) for row in rows],
    )


def _graded(
    loaded: _Loaded, solution: Solution, metrics: Sequence[OwnMetric]
) -> tuple[list[dict[str, Any]], Grades | None]:
    """A row for each talker, the user's own figures with it, and the grades; none without references."""
    if loaded.grader is None:
        return unreferenced_rows(solution), None
    grades = _grade(loaded.grader, solution)
    rows = [talker_columns(grade, solution) for grade in grades.talkers]
    for metric in metrics:
        rows = [row | more for row, more in zip(rows, _own(loaded.grader, solution, grades, metric), strict=True)]
    return rows, grades


def _check_unchanged(task: Task) -> None:
    for stamp in task.stamps:
        if not unchanged(stamp):
            raise FileError(f"{stamp[0]}: changed while the batch was running; run again to do its items anew")


_kept: OrderedDict[tuple[str, str | None], _Loaded] = OrderedDict()


def _load(task: Task) -> _Loaded:
    """The scene with its references prepared; the last ones are kept for their other variants."""
    key = (task.digest, task.against)
    if key not in _kept:
        scene = Scene.load(task.path)
        while len(_kept) >= KEPT:
            _kept.popitem(last=False)
        references = task.against is not None or any(talker.references for talker in scene.talkers)
        grader = grader_of_scene(scene, against=task.against) if references else None
        _kept[key] = _Loaded(scene, grader, _truth(Path(task.path)))
    _kept.move_to_end(key)
    return _kept[key]


def _truth(scene: Path) -> dict[str, dict[str, Any]]:
    """What a rendered scene's truth says of each talker; nothing for a real recording."""
    with contextlib.suppress(OSError, ValueError, KeyError, TypeError):
        talkers = json.loads((scene.parent / "truth.json").read_text(encoding="utf-8"))["talkers"]
        return {t["name"]: {"t20_s": t["t20_s"], "drr_db": t["drr_db"]} for t in talkers}
    return {}


def _grade(grader: Grader, solution: Solution) -> Grades:
    matched = _matched(grader, solution)
    if matched is None:
        return grader.grade(signals_of(solution), match="best", speech=True)
    return grader.grade(signals_of(solution), matched=matched, speech=True)


def _matched(grader: Grader, solution: Solution) -> list[int | None] | None:
    """Whose signal is whose by name; None when names do not tell, as for talkers that were found."""
    matched = match_names(solution.names, grader.names)
    return None if None in matched else matched


def _own(grader: Grader, solution: Solution, grades: Grades, metric: OwnMetric) -> list[dict[str, float | None]]:
    """The user's figure of each talker, before and after."""
    matched = [talker.estimate for talker in grades.talkers]
    references, estimates, before = grader.aligned(signals_of(solution), matched)
    rows = []
    for k, e in enumerate(matched):
        after = None if e is None else metric(estimates[e], references[k], grader.sample_rate)
        first = None if before is None else metric(before, references[k], grader.sample_rate)
        gain = None if after is None or first is None else after - first
        rows.append({metric.name: after, f"{metric.name}_before": first, f"{metric.name}_gain": gain})
    return rows
