"""Where the talkers are: a scene in, bearings with standard deviations out.

orientation of the array -> what it can tell apart -> one pass over the recording -> how many, at rest or moving
-> bearings -> who speaks when -> names -> what was done
"""

from __future__ import annotations

import time
import warnings as warning_system
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.activity import Shares, active_stretches, talker_shares
from unmix.bearings.bins import HIGHEST_HZ, make_steering
from unmix.bearings.count import MOST_TALKERS, TalkerCount
from unmix.bearings.estimate import bearing_estimate
from unmix.bearings.find import FoundTalker, find_talkers
from unmix.bearings.fit import FrameCovariance
from unmix.bearings.orientation import estimate_clock_offset, orientation_notes
from unmix.bearings.polish import polished
from unmix.bearings.scan import FEWEST_BINS, SLICE_S, Rotations, Scan, scan
from unmix.bearings.scan_peaks import SLOWEST_HZ, scan_peaks, scan_slowly
from unmix.bearings.space import Region, SearchSpace, search_space
from unmix.errors import InputError, UnmixWarning, UnsolvableError
from unmix.health import ChannelHealth
from unmix.jobs.located import Located, LocatedTalker, ScoreMap
from unmix.jobs.naming import name_talkers
from unmix.scene import Scene, Talker
from unmix.track import Orientation, Track

__all__ = ["METHODS", "Method", "clock_offset", "locate", "locate_array", "locate_quietly"]

Floats = NDArray[np.float64]
Chunks = Callable[[], Iterable[Floats]]
Progress = Callable[[float], None]
Method = Literal["mixture", "srp", "snapshots", "fit"]
METHODS: tuple[Method, ...] = ("mixture", "srp", "snapshots", "fit")

SHORTEST_S = 0.1
_SLOW = (
    "snapshots taken slowly: they tell the axis sound came along, not from which end; one is taken, the opposite "
    "direction is listed as a candidate"
)
# Root mean square elevation of directions spread evenly over a hemisphere: sqrt(pi^2/4 - 2).
_ANY_ELEVATION = 0.684
_CHUNK_S = 2.0


@dataclass(frozen=True)
class _Task:
    """What is to be located, and how."""

    chunks: Chunks
    duration_s: float
    array: Array
    sample_rate: int
    where: str
    asked: int | None
    method: Method
    region: Region
    orientation: Orientation | None
    clock_offset_s: float | Literal["estimate"]
    temperature_c: float
    distance_m: float | None
    known: tuple[Talker, ...] = ()
    progress: Progress | None = None

    @property
    def slow(self) -> bool:
        """Whether the recording is a row of snapshots, too slow for spectra of voices."""
        return self.sample_rate < SLOWEST_HZ

    def rotations(self, offset_s: float) -> Rotations | None:
        """Rotations, array to world, at times of the recording; None when the array rests."""
        orientation = self.orientation
        return None if orientation is None else lambda time_s: orientation.matrices(time_s + offset_s)


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
    offset_s, notes = _orient(_task_of(scene))
    return offset_s, tuple(notes)


def _task_of(
    scene: Scene, *, method: Method = "mixture", region: Region = "sphere", progress: Progress | None = None
) -> _Task:
    distances = [t.distance_m for t in scene.talkers if t.distance_m is not None]
    # Waves bend by the inverse of the distance: its mean serves for all while nobody is told apart.
    known = bool(distances) and len(distances) == len(scene.talkers)
    return _Task(
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
    task = _Task(
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


def _locate(task: _Task) -> Located:
    began = time.perf_counter()
    _check(task)
    offset_s, notes = _orient(task)
    rotations = task.rotations(offset_s)
    space = _space(task, rotations)
    health = ChannelHealth(task.array.channels)
    seen, found, count, shares = _find(task, space, rotations, health)
    talkers = [_describe(t, k, shares, space, task) for k, t in enumerate(found)]
    named, naming_notes = name_talkers(talkers, task.known, task.duration_s)
    lines = (*notes, *_warnings(seen, space, named, count, task), *naming_notes)
    if seen.bins:
        lines += tuple(health.findings())
    ambiguity = _SLOW if task.slow else space.ambiguity
    return Located(
        talkers=tuple(named),
        count=count,
        method=task.method,
        frame="array" if rotations is None else "world",
        ambiguity=ambiguity,
        warnings=lines,
        duration_s=task.duration_s,
        score=_score_map(seen, space),
        detections=_detected(seen, space),
        clock_offset_s=None if rotations is None else offset_s,
        wall_time_s=time.perf_counter() - began,
    )


def _check(task: _Task) -> None:
    if task.method not in METHODS:
        raise InputError(f"{task.where}: method {task.method!r} is not known; choose one of {', '.join(METHODS)}")
    if task.duration_s < SHORTEST_S:
        raise InputError(
            f"{task.where}: the recording lasts {task.duration_s * 1e3:.0f} ms; at least {SHORTEST_S * 1e3:.0f} ms are "
            "needed"
        )
    if task.slow and (task.method != "snapshots" or task.orientation is not None):
        raise UnsolvableError(
            f"{task.where}: at {task.sample_rate} Hz there are no spectra of voices to locate by; "
            + ("record faster to use an orientation" if task.method == "snapshots" else "take the method snapshots")
        )
    if task.asked is not None and not 0 <= task.asked <= MOST_TALKERS:
        raise InputError(f"{task.where}: {task.asked} talkers asked for; 0 to {MOST_TALKERS} can be told apart")


def _orient(task: _Task) -> tuple[float, list[str]]:
    """Clock offset of the orientation, estimated in a pass of its own when asked for, and what is to be said of it."""
    if task.orientation is None:
        return 0.0, []
    notes = []
    offset_s = task.clock_offset_s
    if offset_s == "estimate":
        space = _space(task, None)
        steering = make_steering(task.array, task.sample_rate, temperature_c=task.temperature_c)
        seen = scan(task.chunks(), space, steering, task.duration_s, distance_m=task.distance_m)
        estimate = estimate_clock_offset(task.orientation, seen.detections, space, task.duration_s)
        notes.append(estimate.note)
        offset_s = estimate.offset_s or 0.0
    return float(offset_s), notes + orientation_notes(task.orientation, offset_s, task.duration_s)


def _space(task: _Task, rotations: Rotations | None) -> SearchSpace:
    turns = None if rotations is None else rotations(np.linspace(0.0, task.duration_s, 61))
    return search_space(task.array.positions_m, turns, region=task.region, where=task.where)


def _find(
    task: _Task, space: SearchSpace, rotations: Rotations | None, health: ChannelHealth
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
    task: _Task, space: SearchSpace, health: ChannelHealth
) -> tuple[Scan, list[FoundTalker], TalkerCount, Shares]:
    """As `_find`, from snapshots alone."""
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


def _watched(task: _Task, health: ChannelHealth, block: FrameCovariance | None = None) -> Iterator[Floats]:
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


def _describe(t: FoundTalker, index: int, shares: Shares, space: SearchSpace, task: _Task) -> LocatedTalker:
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
    kernel = np.exp(-0.5 * (np.angle(np.exp(1j * (azimuth[:, None] - points))) / np.radians(4.0)) ** 2)
    return ScoreMap(azimuth, kernel @ seen.score)


def _detected(seen: Scan, space: SearchSpace) -> Floats:
    rows = [(d.time_s, float(azimuth)) for d in seen.detections if len(d.x) for azimuth in space.bearings(d.x)[0]]
    return np.array(rows).reshape(-1, 2)


def _warnings(
    seen: Scan, space: SearchSpace, talkers: list[LocatedTalker], count: TalkerCount, task: _Task
) -> Iterator[str]:
    """What the user should know, one line each."""
    asked = task.asked
    if not np.any(seen.loud > 0.0):
        yield "nothing but silence or steady noise in the recording: no talker can be found; check channels and levels"
    elif seen.bins < FEWEST_BINS:
        yield "too little speech stands out of the noise to say where it comes from; no talker was found"
    elif asked is not None and asked > len(talkers):
        yield f"{asked} talkers were asked for, and only {len(talkers)} directions could be found"
    elif not talkers and asked is None:
        yield "there is sound, but no direction stands out of it: no talker was found; say how many there are to insist"
    doubtful = [t.name for t in talkers if t.doubtful]
    if doubtful:
        yield (
            f"{asked} talkers were asked for, and the recording speaks for {count.estimated}: "
            f"{', '.join(doubtful)} may be a reflection, or nobody"
        )
    if asked is not None and asked < count.lowest:
        yield f"{asked} talkers were asked for, and the recording speaks for {count.estimated}: the plainest were taken"
    if asked is None and count.reason is not None:
        yield count.reason
    ambiguity = _SLOW if task.slow else space.ambiguity
    if ambiguity is not None and talkers:
        yield ambiguity
    if task.array.responses is not None:
        yield "measured responses are not used for locating: the microphones are taken as free of obstacles"
    for talker in task.known:
        if not talker.located and talker.elevation:
            yield f"{talker.name}: `elevation_deg` without `azimuth_deg` is no bearing; both were located"
