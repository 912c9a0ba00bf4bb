"""The columns of a result: what an item came to, and each talker's figures."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.jobs.solution import Solution
from unmix.metrics.alone import alone_stretches, leakage_where_alone
from unmix.metrics.grades import FIGURES, Figures, Grades, TalkerGrade
from unmix.metrics.speech_figures import SPEECH_FIGURES
from unmix.scene import Scene

__all__ = ["PARTS_OF_A_GRADE", "alone_columns", "item_columns", "signals_of", "talker_columns", "unreferenced_rows"]

Floats = NDArray[np.float64]

PARTS_OF_A_GRADE = ("", "_before", "_gain", "_best_mic", "_gain_over_best_mic")
"""Endings of a figure's columns: after, before, and the gain; the best microphone, and the gain over that."""


def signals_of(solution: Solution) -> Floats:
    """The talkers' signals (talkers, samples), which the batch keeps in memory."""
    if solution.signals is None:
        raise TypeError("the solution's signals are not in memory")
    return solution.signals


def item_columns(scene: Scene, solution: Solution, grades: Grades | None) -> dict[str, Any]:
    """What belongs to the whole item; `grades` None when no talker has a reference."""
    warnings = (*solution.warnings, *(grades.warnings if grades is not None else ()))
    return {
        "against": None if grades is None else grades.against,
        "duration_s": scene.recording.duration_s,
        "sample_rate": solution.sample_rate,
        "channels": scene.array.channels,
        "talkers": len(solution.talkers) if grades is None else len(grades.talkers),
        "method": solution.method,
        "latency_ms": solution.latency_ms,
        "margin_s": solution.margin_s,
        "fallbacks": " | ".join(solution.fallbacks) or None,
        "warnings": " | ".join(warnings) or None,
        "solve_time_s": solution.wall_time_s,
        "real_time_factor": solution.real_time_factor,
    }


def talker_columns(grade: TalkerGrade, solution: Solution) -> dict[str, Any]:
    """A talker's figures, after, before and the gain."""
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
    return columns | {
        "leakage_db": max(leaks, default=None),
        "offset_s": grade.offset_s,
        "drift_ppm": grade.drift_ppm,
        "azimuth_deg": None if grade.estimate is None else solution.talkers[grade.estimate].azimuth_deg,
        "undefined": " | ".join(f"{name}: {why}" for name, why in sorted(grade.undefined.items())) or None,
    }


def unreferenced_rows(solution: Solution) -> list[dict[str, Any]]:
    """A row for each talker of a scene without references: nothing to compare with, scores from outside may come."""
    return [
        {"talker": talker.name, "azimuth_deg": talker.azimuth_deg, "undefined": "the talkers have no references"}
        for talker in solution.talkers
    ]


def alone_columns(scene: Scene, solution: Solution) -> dict[str, dict[str, float | None]]:
    """By talker, the worst leakage into their signal where another talker is alone; the scene must say who speaks when.

    The unprocessed microphone, the same for all talkers, has 0 dB.
    """
    active = {talker.name: talker.active_s for talker in scene.talkers}
    names = list(solution.names)
    if len(names) < 2 or set(names) != set(active) or any(stretches is None for stretches in active.values()):
        return {}
    alone = alone_stretches({name: list(s or []) for name, s in active.items()}, scene.recording.duration_s)
    found = leakage_where_alone(signals_of(solution), names, alone, scene.sample_rate, quiet_s=scene.noise_only_s)
    worst: dict[str, dict[str, float | None]] = {}
    for name in names:
        leaks = [item.interval.mean for item in found if item.target == name and item.interval.mean is not None]
        worst[name] = {"leakage_alone_db": max(leaks, default=None)}
    return worst
