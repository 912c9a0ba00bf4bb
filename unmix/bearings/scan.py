"""One pass over a recording: what every slice of time says about directions.

The recording is read in segments and looked at in slices of a quarter of a second, each with the array's orientation
at its middle, so that directions are the world's when the array turns. Two slices make a stretch, whose mixture gives
detections for the tracker; a thinned selection of bins of up to `SECTION_S` gives the mixture that counts talkers who
sit still. What is kept does not grow with the bins of the recording, but with its slices only.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from unmix.bearings.bins import Bins, Singles, Spectra, Steering, bin_segments, join
from unmix.bearings.mixture import Cluster, clusters, likelihoods, mixture_weights, responses
from unmix.bearings.peaks import FramePeaks
from unmix.bearings.space import SearchSpace
from unmix.bearings.tracks import Detections

__all__ = ["Scan", "Scanner", "scan"]

Floats = NDArray[np.float64]
Rotations = Callable[[Floats], Floats]

SLICE_S = 0.25
SECTION_S = 30.0
SECTION_BINS = 8000
KEPT_BINS = 60_000
LEAST_PER_SLICE = 40
"""Bins kept of each slice at least, so that who is active can be told in recordings of any length."""
FEWEST_BINS = 20
"""A stretch with fewer chosen bins holds nobody; a recording too."""
DETECTION_SHARE = 0.08
DETECTION_BINS = 15
# Orientations nearer than this (radians) share one set of steering vectors; a tenth of the grid's spacing.
_SAME_TURN = np.radians(0.7)


@dataclass(frozen=True)
class Scan:
    """What the pass found.

    sections    clusters of each section's mixture, heaviest first
    detections  of all stretches in order of time
    parts       kept bins by orientation of the array, with its rotation (3, 3)
    score       (points,) weight of each point of the grid, mean over sections
    slice_s     (slices,) middle of each slice; loud (slices,) share of frames with sound above the noise
    bins        number of bins chosen
    peaks       best direction of every frame, of methods that work with those
    """

    sections: list[list[Cluster]]
    detections: list[Detections]
    parts: list[tuple[Bins, Floats]]
    score: Floats
    slice_s: Floats
    loud: Floats
    bins: int
    peaks: FramePeaks | None = None

    def thinned(self) -> list[tuple[Bins, Floats]]:
        """No more than `KEPT_BINS` of the kept bins, evenly over time, by orientation as in `parts`."""
        step = max(1, -(-sum(len(b) for b, _ in self.parts) // KEPT_BINS))
        return [(b.take(np.arange(0, len(b), step)), rotation) for b, rotation in self.parts]


@dataclass
class Scanner:
    """Takes slices of bins, keeps what `Scan` holds."""

    space: SearchSpace
    steering: Steering
    duration_s: float
    rotations: Rotations | None = None
    distance_m: float | None = None
    _sections: list[list[Cluster]] = field(default_factory=list)
    _detections: list[Detections] = field(default_factory=list)
    _parts: list[tuple[Bins, Floats]] = field(default_factory=list)
    _tables: list[Singles] = field(default_factory=list)
    _score: Floats = field(default_factory=lambda: np.zeros(0))
    _slices: list[tuple[float, float]] = field(default_factory=list)
    _turn: tuple[Floats, Spectra] | None = None
    _previous: Singles | None = None
    _section_end: float = 0.0
    _bins: int = 0

    def __post_init__(self) -> None:
        self._score = np.zeros(len(self.space.grid))
        sections = max(1, round(self.duration_s / SECTION_S))
        self._section_s = self.duration_s / sections
        self._section_end = self._section_s
        per_section = self._section_s / SLICE_S
        kept = min(SECTION_BINS / per_section, KEPT_BINS * SLICE_S / max(self.duration_s, SLICE_S))
        self._per_slice = (max(1, round(SECTION_BINS / per_section)), max(LEAST_PER_SLICE, round(kept)))
        self._rng = np.random.default_rng(0)

    def table(self, bins: Bins, rotation: Floats | None = None) -> Singles:
        """p(z | x) of bins at the grid's directions: (bins, points)."""
        waves = self._waves(np.eye(3) if rotation is None else rotation)
        return likelihoods(responses(bins, waves), self.steering.channels)

    def add(self, bins: Bins, middle_s: float, table: Singles | None = None) -> None:
        """One slice; ``table`` of its bins when it is at hand already."""
        if middle_s > self._section_end:
            self._close_section()
        rotation = np.eye(3) if self.rotations is None else self.rotations(np.array([middle_s]))[0]
        if table is None:
            table = self.table(bins, rotation)
        self._bins += len(bins)
        self._slices.append((middle_s, float(np.mean(bins.loud)) if len(bins.loud) else 0.0))
        if self._previous is not None:
            self._detect(np.concatenate([self._previous, table]), middle_s - 0.5 * SLICE_S)
        self._previous = table
        pick = self._rng.permutation(len(bins))
        self._tables.append(table[pick[: self._per_slice[0]]])
        if len(bins):
            self._parts.append((bins.take(np.sort(pick[: self._per_slice[1]])), rotation))

    def finish(self) -> Scan:
        """What was found."""
        if not self._detections and self._previous is not None:
            self._detect(self._previous, 0.5 * self.duration_s)
        self._close_section()
        slices = np.array(self._slices).reshape(-1, 2)
        score = self._score / max(len(self._sections), 1)
        return Scan(
            self._sections, self._detections, _grouped(self._parts), score, slices[:, 0], slices[:, 1], self._bins
        )

    def _waves(self, rotation: Floats) -> Spectra:
        if self._turn is None or _angle(self._turn[0], rotation) > _SAME_TURN:
            flat = self.space.grid @ self.space.basis.T
            waves = self.steering.waves(flat @ rotation, self.space.directions @ rotation, self.distance_m)
            self._turn = (rotation, waves)
        return self._turn[1]

    def _detect(self, table: Singles, time_s: float) -> None:
        found: list[Cluster] = []
        if len(table) >= FEWEST_BINS:
            weights, _ = mixture_weights(table, rounds=40)
            found = [
                c
                for c in clusters(weights, self.space, limit=5)
                if c.weight >= DETECTION_SHARE and c.weight * len(table) >= DETECTION_BINS
            ]
        x = np.array([c.x for c in found]).reshape(-1, self.space.rank)
        self._detections.append(Detections(time_s, x, np.array([c.weight for c in found])))

    def _close_section(self) -> None:
        table = np.concatenate(self._tables) if self._tables else np.zeros((0, 1), np.float32)
        if len(table) >= FEWEST_BINS:
            weights, _ = mixture_weights(table)
            self._score += weights
            self._sections.append(clusters(weights, self.space))
        self._tables = []
        self._section_end += self._section_s


def scan(
    chunks: Iterable[Floats],
    space: SearchSpace,
    steering: Steering,
    duration_s: float,
    *,
    rotations: Rotations | None = None,
    distance_m: float | None = None,
) -> Scan:
    """Look at a recording once.

    chunks     (channels, any) in order of time, `duration_s` altogether
    rotations  times (n,) to rotations (n, 3, 3), array to world; None when the array rests
    """
    scanner = Scanner(space, steering, duration_s, rotations, distance_m)
    at = 0
    held: Bins | None = None
    for segment in bin_segments(chunks, steering):
        held = segment if held is None else join([held, segment])
        until = int(held.frame_s[-1] / SLICE_S) if len(held.frame_s) else at
        at, held = _feed(scanner, held, at, until)
    if held is not None and len(held.frame_s):
        _feed(scanner, held, at, at + 1)
    return scanner.finish()


def _feed(scanner: Scanner, held: Bins, at: int, until: int) -> tuple[int, Bins]:
    """Hand slices ``at`` to ``until`` on; returns the next slice and the bins left over."""
    index = np.floor(held.time_s / SLICE_S).astype(np.intp)
    frames = np.floor(held.frame_s / SLICE_S).astype(np.intp)
    # An array at rest steers alike in all slices: one product for all is several times as fast.
    table = scanner.table(held) if scanner.rotations is None else None
    for number in range(at, until):
        chosen, now = index == number, frames == number
        slice_ = Bins(held.z[chosen], held.frequency[chosen], held.time_s[chosen], held.frame_s[now], held.loud[now])
        scanner.add(slice_, (number + 0.5) * SLICE_S, None if table is None else table[chosen])
    rest, later = index >= until, frames >= until
    left = Bins(held.z[rest], held.frequency[rest], held.time_s[rest], held.frame_s[later], held.loud[later])
    return max(at, until), left


def _grouped(parts: list[tuple[Bins, Floats]]) -> list[tuple[Bins, Floats]]:
    """Bins of slices with the same orientation put together."""
    members: list[list[Bins]] = []
    turns = np.zeros((0, 3, 3))
    for bins, rotation in parts:
        near = np.flatnonzero(np.linalg.norm(turns - rotation, axis=(1, 2)) < np.sqrt(2.0) * _SAME_TURN)
        if len(near):
            members[int(near[0])].append(bins)
        else:
            members.append([bins])
            turns = np.concatenate([turns, rotation[None]])
    return [(join(group), rotation) for group, rotation in zip(members, turns, strict=True)]


def _angle(a: Floats, b: Floats) -> float:
    """Angle in radians between two rotations (3, 3)."""
    return float(np.linalg.norm(a - b) / np.sqrt(2.0))
