"""Where the talkers are: a scene in, bearings with standard deviations out.

orientation of the array -> what it can tell apart -> one pass over the recording -> how many, at rest or moving
-> bearings -> who speaks when -> names -> what was done
"""

from __future__ import annotations

import time
import warnings as warning_system
from dataclasses import replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.activity import Shares, active_stretches
from unmix.bearings.estimate import bearing_estimate
from unmix.bearings.find import FoundTalker
from unmix.bearings.scan import SLICE_S, Scan
from unmix.bearings.space import Region, SearchSpace
from unmix.errors import InputError, UnmixWarning
from unmix.health import ChannelHealth
from unmix.jobs.locate_search import find_in_recording, orient, space_of
from unmix.jobs.locate_task import METHODS, LocateTask, Method, Progress, check_task, warnings_of
from unmix.jobs.located import Located, LocatedTalker, ScoreMap
from unmix.jobs.naming import name_talkers
from unmix.physics import wrapped
from unmix.scene import Scene
from unmix.track import Orientation, Track

__all__ = ["METHODS", "Method", "clock_offset", "locate", "locate_array", "locate_quietly"]

Floats = NDArray[np.float64]

# Root mean square elevation of directions spread evenly over a hemisphere: sqrt(pi^2/4 - 2).
_ANY_ELEVATION = 0.684
_CHUNK_S = 2.0


def locate(
    scene: Scene,
    *,
    talkers: int | None = None,
    method: Method = "mixture",
    region: Region = "sphere",
    progress: Progress | None = None,
) -> Located:
    """Find the talkers of a scene.

    talkers   how many there are; None takes the number the scene lists, and estimates it when it lists none
    method    how directions are scored: "mixture" of onset bins, the default, polished by the fit where there is no
              room; "srp", steered response power with phase transform; "snapshots", free expansion of single
              samples; "fit", least squares of all talkers at once, started from the mixture: exact without a room,
              wrong in one
    region    "sphere", or "ring" when all talkers are level with the array
    progress  called with the share done, 0 to 1

    Memory does not grow with the recording's samples. Raises InputError, UnsolvableError or FileError with one line
    that says what to do.
    """
    return _warned(locate_quietly(scene, talkers=talkers, method=method, region=region, progress=progress))


def locate_quietly(
    scene: Scene,
    *,
    talkers: int | None = None,
    method: Method = "mixture",
    region: Region = "sphere",
    progress: Progress | None = None,
) -> Located:
    """As `locate`, for jobs that pass its warnings on in a result of their own: they stand in the result only."""
    task = _task_of(scene, method=method, region=region, progress=progress)
    asked = talkers if talkers is not None else (len(scene.talkers) or None)
    return replace(_locate(replace(task, asked=asked)), scene=scene)


def clock_offset(scene: Scene) -> tuple[float, tuple[str, ...]]:
    """Seconds to add to recording time to get the orientation's, estimated if the scene asks, and what to know of it.

    Raises InputError or FileError as `locate` does.
    """
    offset_s, notes = orient(_task_of(scene))
    return offset_s, tuple(notes)


def _task_of(
    scene: Scene, *, method: Method = "mixture", region: Region = "sphere", progress: Progress | None = None
) -> LocateTask:
    distances = [t.distance_m for t in scene.talkers if t.distance_m is not None]
    # Waves bend by the inverse of the distance: its mean serves for all while nobody is told apart.
    known = bool(distances) and len(distances) == len(scene.talkers)
    return LocateTask(
        chunks=scene.recording.chunks,
        duration_s=scene.recording.duration_s,
        array=scene.array,
        sample_rate=scene.sample_rate,
        where=scene.title,
        asked=None,
        method=method,
        region=region,
        orientation=scene.orientation,
        clock_offset_s=scene.clock_offset_s,
        temperature_c=scene.temperature_c,
        distance_m=len(distances) / sum(1.0 / d for d in distances) if known else None,
        known=scene.talkers,
        progress=progress,
    )


def _warned(located: Located) -> Located:
    for line in located.warnings:
        warning_system.warn(line, UnmixWarning, stacklevel=3)
    return located


def locate_array(
    recording: Floats,
    array: Array,
    sample_rate: int,
    *,
    talkers: int | None = None,
    method: Method = "mixture",
    region: Region = "sphere",
    orientation: Orientation | None = None,
    clock_offset_s: float | Literal["estimate"] = 0.0,
    temperature_c: float = 20.0,
    distance_m: float | None = None,
    progress: Progress | None = None,
) -> Located:
    """Find the talkers of a recording in memory: (channels, samples), full scale 1; options as of `locate`."""
    if recording.ndim != 2 or recording.shape[0] != array.channels:
        raise InputError(
            f"recording: expected ({array.channels}, samples) for the array's microphones, got shape {recording.shape}"
        )
    if not np.all(np.isfinite(recording)):
        channel, sample = np.argwhere(~np.isfinite(recording))[0]
        raise InputError(f"recording: channel {channel}, sample {sample} is NaN or infinite; repair or cut it out")
    size = round(_CHUNK_S * sample_rate)
    task = LocateTask(
        chunks=lambda: (recording[:, at : at + size] for at in range(0, recording.shape[1], size)),
        duration_s=recording.shape[1] / sample_rate,
        array=array,
        sample_rate=sample_rate,
        where="recording",
        asked=talkers,
        method=method,
        region=region,
        orientation=orientation,
        clock_offset_s=clock_offset_s,
        temperature_c=temperature_c,
        distance_m=distance_m,
        progress=progress,
    )
    return _warned(_locate(task))


def _locate(task: LocateTask) -> Located:
    began = time.perf_counter()
    check_task(task)
    offset_s, notes = orient(task)
    rotations = task.rotations(offset_s)
    space = space_of(task, rotations)
    health = ChannelHealth(task.array.channels)
    seen, found, count, shares = find_in_recording(task, space, rotations, health)
    talkers = [_describe(t, k, shares, space, task) for k, t in enumerate(found)]
    named, naming_notes = name_talkers(talkers, task.known, task.duration_s)
    lines = (*notes, *warnings_of(seen, space, named, count, task), *naming_notes)
    if seen.bins:
        lines += tuple(health.findings())
    return Located(
        talkers=tuple(named),
        count=count,
        method=task.method,
        frame="array" if rotations is None else "world",
        ambiguity=task.ambiguity_of(space),
        warnings=lines,
        duration_s=task.duration_s,
        score=_score_map(seen, space),
        detections=_detected(seen, space),
        clock_offset_s=None if rotations is None else offset_s,
        wall_time_s=time.perf_counter() - began,
    )


def _describe(t: FoundTalker, index: int, shares: Shares, space: SearchSpace, task: LocateTask) -> LocatedTalker:
    """A found talker as the user sees it."""
    distance_m = task.distance_m
    outside = float(shares.outside[index])
    middle = bearing_estimate(t.x[len(t.x) // 2], t.covariance, outside, space, task.array.channels)
    if t.moving:
        steps = [bearing_estimate(x, t.covariance, outside, space, task.array.channels) for x in t.x]
        azimuth, elevation = (np.array([getattr(s, name) for s in steps]) for name in ("azimuth", "elevation"))
        time_s = t.time_s
    else:
        azimuth, elevation = np.full(2, middle.azimuth), np.full(2, middle.elevation)
        time_s = np.array([0.0, task.duration_s])
    candidates = middle.candidates
    if task.slow:
        candidates += ((float(np.angle(-np.exp(1j * middle.azimuth))), -middle.elevation),)
    # Scaled delays are no other model to snapshots, and scaled delays are all that a flat array has of elevation.
    unknown = task.method == "snapshots" and space.rank == 2
    return LocatedTalker(
        name="",
        azimuth=middle.azimuth,
        elevation=middle.elevation,
        azimuth_std=middle.azimuth_std,
        elevation_std=_ANY_ELEVATION if unknown else middle.elevation_std,
        candidates=candidates,
        track=Track(time_s, azimuth, elevation, np.full(len(time_s), np.nan if distance_m is None else distance_m)),
        moving=t.moving,
        active_s=active_stretches(shares.slice_s, shares.active(index), SLICE_S),
        share=t.weight,
        distance_m=distance_m,
        doubtful=t.doubtful,
    )


def _score_map(seen: Scan, space: SearchSpace) -> ScoreMap:
    """Largest score along each azimuth, smoothed by the width of the grid."""
    azimuth = np.linspace(-np.pi, np.pi, 181)
    points = np.arctan2(space.directions[:, 1], space.directions[:, 0])
    kernel = np.exp(-0.5 * (wrapped(azimuth[:, None] - points) / np.radians(4.0)) ** 2)
    return ScoreMap(azimuth, kernel @ seen.score)


def _detected(seen: Scan, space: SearchSpace) -> Floats:
    rows = [(d.time_s, float(azimuth)) for d in seen.detections if len(d.x) for azimuth in space.bearings(d.x)[0]]
    return np.array(rows).reshape(-1, 2)
