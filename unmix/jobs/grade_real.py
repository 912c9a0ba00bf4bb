"""Grading real recordings, which have no clean references.

who speaks when (given, or found) -> where one talker is alone -> leakage there
                                                               -> bleed taken out of close microphones -> figures
"""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError
from unmix.jobs.grade_inputs import (
    check_options,
    choose_kind,
    estimates_of_scene,
    recording_of_scene,
    references_of_scene,
)
from unmix.metrics.alone import CLAIMS, AloneLeakage, alone_stretches, leakage_where_alone
from unmix.metrics.assignment import match_names
from unmix.metrics.bleed import Bleed, clean_references
from unmix.metrics.grader import Grader
from unmix.metrics.grades import FIGURES, Grades
from unmix.scene import Scene

__all__ = ["AloneGrades", "CloseGrades", "grade_alone", "grade_close"]

Floats = NDArray[np.float64]
Stretches = list[tuple[float, float]]
Source = Literal["given", "found"]

CLOSE_CLAIMS = (
    "Figures are against close microphones whose bleed was estimated where one talker is alone and taken out.",
    "The uncertainty is the difference between figures from either half of those stretches; bleed that both halves "
    "leave in is not in it.",
    "Ratios beyond the bleed left (see the table) cannot be told: a perfect signal would not score better.",
    "A close microphone hears its talker with less of the room than the array: SDR and STOI are bounded by that, and "
    "order variants that are nearly as good less surely than SIR does.",
)


@dataclass(frozen=True)
class AloneGrades:
    """Leakage where one talker is alone; `stretches` says whether these were given or found."""

    leakage: tuple[AloneLeakage, ...]
    alone_s: dict[str, float]
    stretches: Source
    noise_taken_off: bool
    claims: tuple[str, ...] = CLAIMS

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return asdict(self)


@dataclass(frozen=True)
class CloseGrades:
    """Grades against close microphones without their bleed.

    uncertainty  of each talker's figures, by name: None where a half has no figure
    """

    grades: Grades
    uncertainty: dict[str, dict[str, float | None]]
    bleed: tuple[Bleed, ...]
    stretches: Source
    claims: tuple[str, ...] = CLOSE_CLAIMS

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON: the grades, and what is said about them."""
        return self.grades.to_dict() | {
            "uncertainty": self.uncertainty,
            "bleed": [asdict(b) for b in self.bleed],
            "stretches": self.stretches,
            "claims": list(self.claims),
        }


def grade_alone(scene: Scene, estimates_dir: str | Path) -> AloneGrades:
    """Leakage of talker signals where one talker is alone; no reference is needed.

    Where talkers speak is taken from the scene (`active_s`, `activity`), else found from the recording. Noise is taken
    off where the scene says when nobody speaks (`noise_only_s`).

    Raises FileError or InputError naming file, talker and remedy.
    """
    signals, names = _signals(scene, Path(estimates_dir))
    alone_s, stretches = _alone(scene)
    leakage = leakage_where_alone(signals, names, alone_s, scene.sample_rate, quiet_s=scene.noise_only_s)
    if not any(item.seconds for item in leakage):
        raise InputError(
            f"{scene.title}: no talker is ever alone for long enough; nothing can be said without references"
        )
    seconds = {name: sum(stop - start for start, stop in alone_s[name]) for name in names}
    return AloneGrades(tuple(leakage), seconds, stretches, bool(scene.noise_only_s))


def grade_close(scene: Scene, estimates_dir: str | Path, *, against: str | None = None) -> CloseGrades:
    """Grade talker signals against close microphones, the scene's references, whose bleed is taken out first.

    Raises FileError or InputError naming file, talker and remedy.
    """
    check_options(scene.sample_rate, 1)
    signals, names = _signals(scene, Path(estimates_dir))
    kind = choose_kind({t.name: tuple(t.references) for t in scene.talkers}, against)
    close, notes = references_of_scene(scene, kind)
    unprocessed, microphones, more = recording_of_scene(scene)
    alone_s, stretches = _alone(scene)
    cleaned = clean_references(close, names, alone_s, scene.sample_rate)

    def grade(references: Floats, **options: Any) -> Grades:
        grader = Grader(
            references,
            sample_rate=scene.sample_rate,
            names=names,
            unprocessed=unprocessed,
            microphones=microphones if options else None,
            against=f"{kind}, bleed taken out",
            notes=[*notes, *more] if options else [],
        )
        return grader.grade(signals, **options)

    halves = [grade(references) for references in cleaned.halves]
    return CloseGrades(grade(cleaned.references, speech=True), _differences(*halves), cleaned.bleed, stretches)


def _differences(first: Grades, second: Grades) -> dict[str, dict[str, float | None]]:
    return {
        a.name: {
            figure: None if (x := getattr(a, figure)) is None or (y := getattr(b, figure)) is None else abs(x - y)
            for figure in FIGURES
        }
        for a, b in zip(first.talkers, second.talkers, strict=True)
    }


def _signals(scene: Scene, folder: Path) -> tuple[Floats, list[str]]:
    """The talkers' signals in the scene's order, at one scale, and their names."""
    if len(scene.talkers) < 2:
        raise InputError(f"{scene.title}: has {len(scene.talkers)} talkers; with one, nothing can leak")
    estimates = estimates_of_scene(scene, folder)
    names = [talker.name for talker in scene.talkers]
    matched = match_names(estimates.names, names)
    missing = [name for name, index in zip(names, matched, strict=True) if index is None]
    if missing:
        raise InputError(f"{folder}: no signal is called {missing[0]!r}, only {', '.join(estimates.names)}")
    signals = estimates.signals[[index for index in matched if index is not None]]
    return signals / _scales(folder, names)[:, None], names


def _scales(folder: Path, names: list[str]) -> Floats:
    """What `solve` multiplied each file with so that it stays within full scale; 1 where that is not known."""
    try:
        talkers = json.loads((folder / "solution.json").read_text(encoding="utf-8"))["talkers"]
        scales = {str(t["name"]): float(t["scale"]) for t in talkers}
    except (OSError, ValueError, KeyError, TypeError):
        return np.ones(len(names))
    return np.array([scales.get(name, 1.0) for name in names])


def _alone(scene: Scene) -> tuple[dict[str, Stretches], Source]:
    """Where each talker is alone, and whether the scene said so or the recording was searched."""
    duration = scene.recording.duration_s
    if all(talker.active_s is not None for talker in scene.talkers):
        given = {talker.name: list(talker.active_s or []) for talker in scene.talkers}
        return alone_stretches(given, duration), "given"
    from unmix.jobs.locate import locate

    activity = locate(scene).activity
    found = {talker.name: activity.get(talker.name, []) for talker in scene.talkers}
    return alone_stretches(found, duration), "found"
