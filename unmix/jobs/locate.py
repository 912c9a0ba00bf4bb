"""Where the talkers are: a scene in, bearings with standard deviations out.

orientation of the array -> what it can tell apart -> one pass over the recording -> how many, at rest or moving
-> bearings -> who speaks when -> names -> what was done
"""

from __future__ import annotations

import time
import warnings as warning_system
from collections.abc import Callable, Iterable, Iterator
from dataclasses import replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.activity import Shares, active_stretches, talker_shares
from unmix.bearings.bins import make_steering
from unmix.bearings.count import MOST_TALKERS, TalkerCount
from unmix.bearings.estimate import bearing_estimate
from unmix.bearings.find import FoundTalker, find_talkers
from unmix.bearings.scan import FEWEST_BINS, SLICE_S, Scan, scan
from unmix.bearings.space import Region, SearchSpace, search_space
from unmix.errors import InputError, UnmixWarning
from unmix.jobs.located import Located, LocatedTalker, ScoreMap
from unmix.jobs.naming import name_talkers
from unmix.scene import Scene, Talker
from unmix.track import Orientation, Track

__all__ = ["locate", "locate_array"]

Floats = NDArray[np.float64]
Progress = Callable[[float], None]
Method = Literal["mixture"]

SHORTEST_S = 0.1
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
    method    how directions are scored
    region    "sphere", or "ring" when all talkers are level with the array
    progress  called with the share done, 0 to 1

    Memory does not grow with the recording. Raises InputError or FileError with one line that says what to do.
    """
    asked = talkers if talkers is not None else (len(scene.talkers) or None)
    distances = {t.distance_m for t in scene.talkers}
    located = _locate(
        scene.recording.chunks(),
        scene.recording.duration_s,
        scene.array,
        scene.sample_rate,
        where=scene.title,
        asked=asked,
        region=region,
        orientation=scene.orientation,
        clock_offset_s=scene.clock_offset_s if isinstance(scene.clock_offset_s, float) else 0.0,
        temperature_c=scene.temperature_c,
        distance_m=distances.pop() if len(distances) == 1 else None,
        known=scene.talkers,
        progress=progress,
    )
    return _with_scene(located, scene)


def locate_array(
    recording: Floats,
    array: Array,
    sample_rate: int,
    *,
    talkers: int | None = None,
    method: Method = "mixture",
    region: Region = "sphere",
    orientation: Orientation | None = None,
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
    return _locate(
        (recording[:, at : at + size] for at in range(0, recording.shape[1], size)),
        recording.shape[1] / sample_rate,
        array,
        sample_rate,
        where="recording",
        asked=talkers,
        region=region,
        orientation=orientation,
        temperature_c=temperature_c,
        distance_m=distance_m,
        progress=progress,
    )


def _locate(
    chunks: Iterable[Floats],
    duration_s: float,
    array: Array,
    sample_rate: int,
    *,
    where: str,
    asked: int | None,
    region: Region,
    orientation: Orientation | None = None,
    clock_offset_s: float = 0.0,
    temperature_c: float = 20.0,
    distance_m: float | None = None,
    known: tuple[Talker, ...] = (),
    progress: Progress | None = None,
) -> Located:
    began = time.perf_counter()
    _check(duration_s, asked, where)
    rotations = None if orientation is None else _rotations(orientation, clock_offset_s)
    space = _space(array, duration_s, rotations, region, where)
    steering = make_steering(array, sample_rate, temperature_c=temperature_c, spacing=space.spacing)
    watched = _watched(chunks, duration_s * sample_rate, progress)
    seen = scan(watched, space, steering, duration_s, rotations=rotations, distance_m=distance_m)
    found, count = find_talkers(seen, space, steering, asked=asked, distance_m=distance_m)
    shares = talker_shares(seen, space, steering, _projections(found, space.rank), distance_m=distance_m)
    talkers = [_describe(t, k, shares, space, duration_s, distance_m) for k, t in enumerate(found)]
    named, notes = name_talkers(talkers, known, duration_s)
    lines = (*_warnings(seen, space, named, count, asked), *notes)
    for line in lines:
        warning_system.warn(line, UnmixWarning, stacklevel=3)
    return Located(
        talkers=tuple(named),
        count=count,
        method="mixture",
        frame="array" if orientation is None else "world",
        ambiguity=space.ambiguity,
        warnings=lines,
        duration_s=duration_s,
        score=_score_map(seen, space),
        detections=_detected(seen, space),
        clock_offset_s=None if orientation is None else clock_offset_s,
        wall_time_s=time.perf_counter() - began,
    )


def _check(duration_s: float, asked: int | None, where: str) -> None:
    if duration_s < SHORTEST_S:
        raise InputError(
            f"{where}: the recording lasts {duration_s * 1e3:.0f} ms; at least {SHORTEST_S * 1e3:.0f} ms are needed"
        )
    if asked is not None and not 0 <= asked <= MOST_TALKERS:
        raise InputError(f"{where}: {asked} talkers asked for; 0 to {MOST_TALKERS} can be told apart")


def _rotations(orientation: Orientation, offset_s: float) -> Callable[[Floats], Floats]:
    return lambda time_s: orientation.matrices(time_s + offset_s)


def _space(
    array: Array, duration_s: float, rotations: Callable[[Floats], Floats] | None, region: Region, where: str
) -> SearchSpace:
    turns = None if rotations is None else rotations(np.linspace(0.0, duration_s, 61))
    return search_space(array.positions_m, turns, region=region, where=where)


def _watched(chunks: Iterable[Floats], samples: float, progress: Progress | None) -> Iterator[Floats]:
    done = 0
    for chunk in chunks:
        yield chunk
        done += chunk.shape[1]
        if progress is not None:
            progress(min(1.0, done / samples))


def _projections(found: list[FoundTalker], rank: int) -> Callable[[Floats], Floats]:
    def at(time_s: Floats) -> Floats:
        if not found:
            return np.zeros((len(time_s), 0, rank))
        return np.stack([t.at(time_s) for t in found], axis=1)

    return at


def _describe(
    t: FoundTalker, index: int, shares: Shares, space: SearchSpace, duration_s: float, distance_m: float | None
) -> LocatedTalker:
    """A found talker as the user sees it."""
    outside = float(shares.outside[index])
    middle = bearing_estimate(t.x[len(t.x) // 2], t.covariance, outside, space)
    if t.moving:
        steps = [bearing_estimate(x, t.covariance, outside, space) for x in t.x]
        azimuth, elevation = (np.array([getattr(s, name) for s in steps]) for name in ("azimuth", "elevation"))
        time_s = t.time_s
    else:
        azimuth, elevation = np.full(2, middle.azimuth), np.full(2, middle.elevation)
        time_s = np.array([0.0, duration_s])
    return LocatedTalker(
        name="",
        azimuth=middle.azimuth,
        elevation=middle.elevation,
        azimuth_std=middle.azimuth_std,
        elevation_std=middle.elevation_std,
        candidates=middle.candidates,
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
    seen: Scan, space: SearchSpace, talkers: list[LocatedTalker], count: TalkerCount, asked: int | None
) -> Iterator[str]:
    """What the user should know, one line each."""
    if not np.any(seen.loud > 0.0):
        yield "nothing but silence or steady noise in the recording: no talker can be found; check channels and levels"
    elif seen.bins < FEWEST_BINS:
        yield "too little speech stands out of the noise to say where it comes from; no talker was found"
    elif asked is not None and asked > len(talkers):
        yield f"{asked} talkers were asked for, and only {len(talkers)} directions could be found"
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
    if space.ambiguity is not None and talkers:
        yield space.ambiguity


def _with_scene(located: Located, scene: Scene) -> Located:
    return replace(located, scene=scene)
