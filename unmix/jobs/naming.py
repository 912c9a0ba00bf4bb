"""Which found talker bears which name of the scene."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment

from unmix.bearings.activity import stretches_to_mask
from unmix.jobs.located import LocatedTalker
from unmix.physics import unit_vector
from unmix.scene import Talker

__all__ = ["name_talkers"]

Floats = NDArray[np.float64]

_STEP_S = 0.1


def name_talkers(
    found: Sequence[LocatedTalker], known: Sequence[Talker], duration_s: float
) -> tuple[list[LocatedTalker], list[str]]:
    """Found talkers with names, in the scene's order, and what the user should know about it.

    Talkers whose bearing the scene gives take the nearest one found. The others are told apart by when they speak
    if the scene says so, else by azimuth, in the scene's order. Without names of the scene they are `talker-1`,
    `talker-2`, ... by azimuth.
    """
    by_azimuth = sorted(found, key=lambda t: t.azimuth)
    if not known:
        return [replace(t, name=f"talker-{k + 1}") for k, t in enumerate(by_azimuth)], []
    notes: list[str] = []
    chosen: dict[int, LocatedTalker] = {}
    left = list(by_azimuth)
    placed = [i for i, t in enumerate(known) if t.located]
    _assign(chosen, left, placed, np.array([[-_nearness(known[i], t) for t in left] for i in placed]))
    timed = [i for i, t in enumerate(known) if not t.located and t.active_s]
    _assign(chosen, left, timed, np.array([[-_overlap(known[i], t, duration_s) for t in left] for i in timed]))
    rest = [i for i in range(len(known)) if i not in chosen]
    chosen.update(zip(rest, left, strict=False))
    if len(rest) > 1 and left:
        names = ", ".join(known[i].name for i in rest)
        notes.append(
            f"the scene does not say who of {names} sits where: they are named by azimuth, from right to left "
            "as seen from the array's back; correct the names by hand where that is wrong"
        )
    missing = [known[i].name for i in range(len(known)) if i not in chosen]
    if missing:
        notes.append(f"no bearing was found for {', '.join(missing)}")
    named = [_bearing_of(known[i], chosen[i]) for i in sorted(chosen)]
    taken = {t.name for t in known}
    number = 1
    for talker in left[len(rest) :]:
        while f"talker-{number}" in taken:
            number += 1
        taken.add(f"talker-{number}")
        named.append(replace(talker, name=f"talker-{number}"))
    return named, notes


def _bearing_of(known: Talker, found: LocatedTalker) -> LocatedTalker:
    """The found talker under the name and at the distance that the scene gives."""
    if known.distance_m is None or found.distance_m is None:
        return replace(found, name=known.name)
    track = replace(found.track, distance_m=np.full(len(found.track.time_s), known.distance_m))
    return replace(found, name=known.name, distance_m=known.distance_m, track=track)


def _assign(chosen: dict[int, LocatedTalker], left: list[LocatedTalker], rows: list[int], cost: Floats) -> None:
    """Give each of ``rows`` one of those left at the least total cost, and take them out of ``left``."""
    if not rows or not left:
        return
    taken = list(zip(*linear_sum_assignment(cost), strict=True))
    for row, column in taken:
        chosen[rows[int(row)]] = left[int(column)]
    gone = {int(column) for _, column in taken}
    left[:] = [t for j, t in enumerate(left) if j not in gone]


def _nearness(known: Talker, found: LocatedTalker) -> float:
    if known.track is not None:
        azimuth, elevation, _ = known.track.at(found.track.time_s)
        return float(
            np.mean(
                np.sum(
                    unit_vector(azimuth, elevation) * unit_vector(found.track.azimuth, found.track.elevation), axis=-1
                )
            )
        )
    return float(unit_vector(known.azimuth or 0.0, known.elevation) @ unit_vector(found.azimuth, found.elevation))


def _overlap(known: Talker, found: LocatedTalker, duration_s: float) -> float:
    """Agreement of when the two speak: the correlation of their activities."""
    time_s = np.arange(0.5 * _STEP_S, max(duration_s, 2.0 * _STEP_S), _STEP_S)
    a = stretches_to_mask(list(known.active_s or []), time_s).astype(np.float64)
    b = stretches_to_mask(found.active_s, time_s).astype(np.float64)
    a, b = a - a.mean(), b - b.mean()
    return float(a @ b / max(float(np.sqrt((a @ a) * (b @ b))), 1e-9))
