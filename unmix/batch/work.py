"""One work item: a scene and a variant in, figures out. What goes wrong becomes part of the result."""

from __future__ import annotations

import contextlib
import json
import time
import traceback
import warnings
from collections import OrderedDict
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.batch.digests import Stamp, unchanged
from unmix.batch.memory import PeakMemory
from unmix.batch.metrics import OwnMetric
from unmix.batch.store import Part
from unmix.errors import FileError, UnmixError
from unmix.jobs.grade import grader_of_scene
from unmix.jobs.solution import Solution
from unmix.jobs.solve import solve
from unmix.metrics.assignment import match_names
from unmix.metrics.grader import Grader
from unmix.metrics.grades import FIGURES, Figures, Grades, TalkerGrade
from unmix.metrics.speech_figures import SPEECH_FIGURES
from unmix.scene import Scene
from unmix.variant import Variant

__all__ = ["PARTS_OF_A_GRADE", "Task", "failed", "run_task"]

Floats = NDArray[np.float64]

PARTS_OF_A_GRADE = ("", "_before", "_gain", "_best_mic", "_gain_over_best_mic")
"""Endings of a figure's columns: after, before, and the gain; the best microphone, and the gain over that."""
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
    scene: Scene
    grader: Grader
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
        grades = _grade(loaded.grader, solution)
        own = [_own(loaded.grader, solution, grades, metric) for metric in task.metrics]
        grade_time_s = time.perf_counter() - began
    _check_unchanged(task)
    return Part(
        item=_item_columns(loaded, solution, grades) | {"grade_time_s": grade_time_s, "peak_memory_mb": memory.mb},
        talkers=[
            _talker_columns(grade, loaded, solution) | {k: v for row in own for k, v in row[index].items()}
            for index, grade in enumerate(grades.talkers)
        ],
    )


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
        _kept[key] = _Loaded(scene, grader_of_scene(scene, against=task.against), _truth(Path(task.path)))
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
        return grader.grade(_signals(solution), match="best", speech=True)
    return grader.grade(_signals(solution), matched=matched, speech=True)


def _matched(grader: Grader, solution: Solution) -> list[int | None] | None:
    """Whose signal is whose by name; None when names do not tell, as for talkers that were found."""
    matched = match_names(solution.names, grader.names)
    return None if None in matched else matched


def _signals(solution: Solution) -> Floats:
    if solution.signals is None:
        raise TypeError("the solution's signals are not in memory")
    return solution.signals


def _own(grader: Grader, solution: Solution, grades: Grades, metric: OwnMetric) -> list[dict[str, float | None]]:
    """The user's figure of each talker, before and after."""
    matched = [talker.estimate for talker in grades.talkers]
    references, estimates, before = grader.aligned(_signals(solution), matched)
    rows = []
    for k, e in enumerate(matched):
        after = None if e is None else metric(estimates[e], references[k], grader.sample_rate)
        first = None if before is None else metric(before, references[k], grader.sample_rate)
        gain = None if after is None or first is None else after - first
        rows.append({metric.name: after, f"{metric.name}_before": first, f"{metric.name}_gain": gain})
    return rows


def _item_columns(loaded: _Loaded, solution: Solution, grades: Grades) -> dict[str, Any]:
    return {
        "against": grades.against,
        "duration_s": loaded.scene.recording.duration_s,
        "sample_rate": solution.sample_rate,
        "channels": loaded.scene.array.channels,
        "talkers": len(grades.talkers),
        "method": solution.method,
        "latency_ms": solution.latency_ms,
        "margin_s": solution.margin_s,
        "fallbacks": " | ".join(solution.fallbacks) or None,
        "warnings": " | ".join((*solution.warnings, *grades.warnings)) or None,
        "solve_time_s": solution.wall_time_s,
        "real_time_factor": solution.real_time_factor,
    }


def _talker_columns(grade: TalkerGrade, loaded: _Loaded, solution: Solution) -> dict[str, Any]:
    parts: tuple[Figures | None, ...] = (
        grade, grade.unprocessed, grade.gain, grade.best_microphone, grade.gain_over_best
    )  # fmt: skip
    columns: dict[str, Any] = {"talker": grade.name}
    for ending, part in zip(PARTS_OF_A_GRADE, parts, strict=True):
        columns |= {f"{figure}{ending}": None if part is None else getattr(part, figure) for figure in FIGURES}
    if grade.speech is not None:
        understood = (grade.speech.after, grade.speech.before, grade.speech.gain)
        for ending, of in zip(PARTS_OF_A_GRADE, understood, strict=False):
            columns |= {f"{figure}{ending}": getattr(of, figure) for figure in SPEECH_FIGURES}
    leaks = [value for value in (grade.leakage_db or {}).values() if value is not None]
    azimuth = None if grade.estimate is None else solution.talkers[grade.estimate].azimuth_deg
    columns |= {
        "leakage_db": max(leaks, default=None),
        "offset_s": grade.offset_s,
        "drift_ppm": grade.drift_ppm,
        "azimuth_deg": azimuth,
        "t20_s": None,
        "drr_db": None,
        "undefined": " | ".join(f"{name}: {why}" for name, why in sorted(grade.undefined.items())) or None,
    }
    return columns | loaded.truth.get(grade.name, {})
