"""What locating is asked for: checked once, and what is to be said of its result."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.count import MOST_TALKERS, TalkerCount
from unmix.bearings.scan import FEWEST_BINS, Rotations, Scan
from unmix.bearings.scan_peaks import SLOWEST_HZ
from unmix.bearings.space import Region, SearchSpace
from unmix.errors import InputError, UnsolvableError
from unmix.jobs.located import LocatedTalker
from unmix.scene import Talker
from unmix.track import Orientation

__all__ = ["METHODS", "Chunks", "LocateTask", "Method", "Progress", "check_task", "warnings_of"]

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


@dataclass(frozen=True)
class LocateTask:
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

    def ambiguity_of(self, space: SearchSpace) -> str | None:
        """What cannot be told apart, in words."""
        return _SLOW if self.slow else space.ambiguity


def check_task(task: LocateTask) -> None:
    """Raise InputError or UnsolvableError, in one line, for what cannot be located."""
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


def warnings_of(
    seen: Scan, space: SearchSpace, talkers: list[LocatedTalker], count: TalkerCount, task: LocateTask
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
    ambiguity = task.ambiguity_of(space)
    if ambiguity is not None and talkers:
        yield ambiguity
    if task.array.responses is not None:
        yield "measured responses are not used for locating: the microphones are taken as free of obstacles"
    for talker in task.known:
        if not talker.located and talker.elevation:
            yield f"{talker.name}: `elevation_deg` without `azimuth_deg` is no bearing; both were located"
