"""From one pass over a recording to talkers: at rest or on the move, as many as there are.

Tracks decide whether anyone moves: a talker whose smoothed track strays by more than `MOVING_SPREAD` does. When all
sit still, talkers are the clusters of the mixture over whole sections, moved off the grid with all bins at once, which
is far more exact than any track; otherwise they are the tracks.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unmix.bearings.bins import Steering
from unmix.bearings.count import MOST_TALKERS, TalkerCount, count_talkers, merge_sections, talker_margin
from unmix.bearings.mixture import (
    SAME_TALKER,
    SHARP_KAPPA,
    Cluster,
    clusters,
    likelihoods,
    mixture_weights,
    refine,
    responses,
)
from unmix.bearings.peaks import refine_peaks
from unmix.bearings.scan import FEWEST_BINS, Scan
from unmix.bearings.space import SearchSpace
from unmix.bearings.tracks import TrackedTalker, Tracker

__all__ = ["FoundTalker", "find_talkers", "follow"]

Floats = NDArray[np.float64]

MOVING_SPREAD = 0.08
_SHARP_BINS = 8000


@dataclass(frozen=True)
class FoundTalker:
    """A talker: projections x (steps, rank) at time_s (steps,), one step when at rest; covariance (rank, rank) of one.

    weight    share of bins, or of stretches heard in for a talker on the move
    doubtful  asked for without being plain in the recording
    """

    time_s: Floats
    x: Floats
    covariance: Floats
    weight: float
    moving: bool = False
    doubtful: bool = False

    def at(self, time_s: Floats) -> Floats:
        """Projections (times, rank), linear in between, held at both ends."""
        return np.stack([np.interp(time_s, self.time_s, column) for column in self.x.T], axis=-1)


def follow(scan: Scan, space: SearchSpace) -> list[TrackedTalker]:
    """Tracks of all talkers of a recording, by birth."""
    tracker = Tracker(space.rank, on_sphere=space.rank == 3)
    for found in scan.detections:
        tracker.add(found)
    return tracker.finish()


def find_talkers(
    scan: Scan, space: SearchSpace, steering: Steering, *, asked: int | None = None, distance_m: float | None = None
) -> tuple[list[FoundTalker], TalkerCount]:
    """Talkers and their number; ``asked`` for a number known beforehand."""
    if scan.bins < FEWEST_BINS or asked == 0:
        return [], TalkerCount(0, 0, 0, 0)
    tracks = [_from_track(t) for t in follow(scan, space)]
    if any(t.moving for t in tracks):
        return _on_the_move(tracks, asked)
    return _at_rest(scan, space, steering, asked, distance_m)


def _from_track(track: TrackedTalker) -> FoundTalker:
    weight = track.heard / track.heard.sum()
    mean = weight @ track.x
    apart = track.x - mean
    spread = np.sqrt(float(weight @ np.sum(apart**2, axis=1)))
    covariance = track.covariance.mean(axis=0)
    if spread > MOVING_SPREAD:
        return FoundTalker(track.time_s, track.x, covariance, float(track.heard.sum()), moving=True)
    # The mean of a talker at rest rests on all stretches; those half a second apart are as good as independent.
    of_mean = (apart.T * weight) @ apart / max(track.heard.sum() / 4.0, 1.0)
    return FoundTalker(track.time_s[:1], mean[None], of_mean, float(track.heard.sum()))


def _on_the_move(tracks: list[FoundTalker], asked: int | None) -> tuple[list[FoundTalker], TalkerCount]:
    ranked = sorted(tracks, key=lambda t: -t.weight)
    total = sum(t.weight for t in ranked)
    # A talker heard in few stretches may be a reflection that lasted.
    shares = [t.weight / total for t in ranked]
    counted = count_talkers([Cluster(t.x[0], s) for t, s in zip(ranked, shares, strict=True)], asked)
    chosen = ranked[: counted.used]
    return [replace(t, weight=t.weight / total) for t in chosen], counted


def _at_rest(
    scan: Scan, space: SearchSpace, steering: Steering, asked: int | None, distance_m: float | None
) -> tuple[list[FoundTalker], TalkerCount]:
    found = sorted((_with_peak(c, scan) for c in merge_sections(scan.sections)), key=talker_margin, reverse=True)
    counted = count_talkers(found, asked)
    if counted.used == 0 or (not scan.parts and scan.peaks is None):
        return [], counted
    plain = [c for c in found if c.weight > 0.0][: counted.used]
    if len(plain) < counted.used:
        plain += _faint(scan, space, steering, plain, counted.used - len(plain))
    start = np.array([c.x for c in plain])
    if scan.peaks is not None:
        refined = refine_peaks(scan.peaks.chosen(), start)
    else:
        refined = refine(scan.thinned(), start, space, steering, distance_m=distance_m)
    talkers = []
    for k, cluster in enumerate(plain):
        doubtful = asked is not None and k >= max(counted.highest, 1)
        strayed = np.linalg.norm(refined.x[k] - start[k]) > 0.5 * SAME_TALKER
        x = start[k] if strayed else refined.x[k]
        talkers.append(
            FoundTalker(np.zeros(1), x[None], refined.covariance[k], max(cluster.weight, 0.0), doubtful=doubtful)
        )
    return talkers, counted


def _with_peak(cluster: Cluster, scan: Scan) -> Cluster:
    """The cluster with the largest share of a stretch that a detection near it has."""
    shares = [
        float(w)
        for d in scan.detections
        for x, w in zip(d.x, d.weight, strict=True)
        if np.linalg.norm(x - cluster.x) < 0.6 * SAME_TALKER
    ]
    return replace(cluster, peak=max(shares, default=0.0))


def _faint(scan: Scan, space: SearchSpace, steering: Steering, plain: list[Cluster], missing: int) -> list[Cluster]:
    """Further directions for talkers that were asked for: what a sharper likelihood leaves beside the plain ones."""
    weights = np.zeros(len(space.grid))
    for bins, rotation in scan.parts:
        some = bins.take(np.arange(0, len(bins), max(1, len(bins) // _SHARP_BINS)))
        waves = steering.waves(space.grid @ space.basis.T @ rotation)
        density = likelihoods(responses(some, waves), steering.channels, kappa=2.0 * SHARP_KAPPA)
        weights += mixture_weights(density)[0] * len(some)
    apart = np.array([np.linalg.norm(space.grid - c.x, axis=1) for c in plain])
    weights[(apart < SAME_TALKER).any(axis=0)] = 0.0
    others = [c for c in clusters(weights / max(weights.sum(), 1e-12), space) if c.weight > 0.0]
    far = [c for c in others if all(np.linalg.norm(c.x - p.x) >= SAME_TALKER for p in plain)]
    return [Cluster(c.x, 0.0) for c in far[: min(missing, MOST_TALKERS)]]
