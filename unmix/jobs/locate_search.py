"""The search of `locate`: the array's orientation, what it can tell apart, one pass over the recording, talkers."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray

from unmix.bearings.activity import Shares, talker_shares
from unmix.bearings.bins import HIGHEST_HZ, make_steering
from unmix.bearings.count import TalkerCount
from unmix.bearings.find import FoundTalker, find_talkers
from unmix.bearings.fit import FrameCovariance
from unmix.bearings.orientation import estimate_clock_offset, orientation_notes
from unmix.bearings.polish import polished
from unmix.bearings.scan import Rotations, Scan, scan
from unmix.bearings.scan_peaks import scan_peaks, scan_slowly
from unmix.bearings.space import SearchSpace, search_space
from unmix.health import ChannelHealth
from unmix.jobs.locate_task import LocateTask

__all__ = ["find_in_recording", "orient", "space_of"]

Floats = NDArray[np.float64]


def orient(task: LocateTask) -> tuple[float, list[str]]:
    """Clock offset of the orientation, estimated in a pass of its own when asked for, and what is to be said of it."""
    if task.orientation is None:
        return 0.0, []
    notes = []
    offset_s = task.clock_offset_s
    if offset_s == "estimate":
        space = space_of(task, None)
        steering = make_steering(task.array, task.sample_rate, temperature_c=task.temperature_c)
        seen = scan(task.chunks(), space, steering, task.duration_s, distance_m=task.distance_m)
        estimate = estimate_clock_offset(task.orientation, seen.detections, space, task.duration_s)
        notes.append(estimate.note)
        offset_s = estimate.offset_s or 0.0
    return float(offset_s), notes + orientation_notes(task.orientation, offset_s, task.duration_s)


def space_of(task: LocateTask, rotations: Rotations | None) -> SearchSpace:
    """What the array can tell apart, in all orientations it takes."""
    turns = None if rotations is None else rotations(np.linspace(0.0, task.duration_s, 61))
    return search_space(task.array.positions_m, turns, region=task.region, where=task.where)


def find_in_recording(
    task: LocateTask, space: SearchSpace, rotations: Rotations | None, health: ChannelHealth
) -> tuple[Scan, list[FoundTalker], TalkerCount, Shares]:
    """The pass over the recording, talkers and their number, and whose bins are whose."""
    if task.slow:
        return _find_slowly(task, space, health)
    mixture = task.method in ("mixture", "fit")
    steering = make_steering(
        task.array, task.sample_rate, temperature_c=task.temperature_c, spacing=space.spacing, whiten=mixture
    )
    block = FrameCovariance(task.array.channels, task.sample_rate, highest_hz=HIGHEST_HZ)
    chunks = _watched(task, health, block if mixture and rotations is None else None)
    if task.method in ("srp", "snapshots"):
        seen = scan_peaks(
            chunks,
            task.method,
            task.array,
            space,
            steering,
            task.duration_s,
            rotations=rotations,
            distance_m=task.distance_m,
            temperature_c=task.temperature_c,
        )
    else:
        seen = scan(chunks, space, steering, task.duration_s, rotations=rotations, distance_m=task.distance_m)
    found, count = find_talkers(seen, space, steering, asked=task.asked, distance_m=task.distance_m)
    shares = talker_shares(seen, space, steering, _projections(found, space.rank), distance_m=task.distance_m)
    found, _ = polished(
        found,
        shares.outside,
        block,
        task.array,
        space,
        temperature_c=task.temperature_c,
        distance_m=task.distance_m,
        always=task.method == "fit",
    )
    return seen, found, count, shares


def _find_slowly(
    task: LocateTask, space: SearchSpace, health: ChannelHealth
) -> tuple[Scan, list[FoundTalker], TalkerCount, Shares]:
    """As `find_in_recording`, from snapshots alone."""
    seen = scan_slowly(
        _watched(task, health),
        task.array,
        space,
        task.sample_rate,
        task.duration_s,
        distance_m=task.distance_m,
        temperature_c=task.temperature_c,
    )
    # Nothing is steered: the array's response is never asked for.
    steering = make_steering(task.array, 16000, temperature_c=task.temperature_c, whiten=False)
    found, count = find_talkers(seen, space, steering, asked=task.asked)
    shares = talker_shares(seen, space, steering, _projections(found, space.rank))
    return seen, found, count, shares


def _watched(task: LocateTask, health: ChannelHealth, block: FrameCovariance | None = None) -> Iterator[Floats]:
    """The recording's chunks, looked at and taken into ``block`` on their way, and reported as progress."""
    done = 0
    for chunk in task.chunks():
        health.add(chunk)
        if block is not None:
            block.add(chunk)
        yield chunk
        done += chunk.shape[1]
        if task.progress is not None:
            task.progress(min(1.0, done / (task.duration_s * task.sample_rate)))


def _projections(found: list[FoundTalker], rank: int) -> Callable[[Floats], Floats]:
    def at(time_s: Floats) -> Floats:
        if not found:
            return np.zeros((len(time_s), 0, rank))
        return np.stack([t.at(time_s) for t in found], axis=1)

    return at
