"""Talkers from the best direction of every frame.

Methods that find one direction per frame (`srp`, `snapshots`) hand over where it was and how plain. Histograms of
these over the grid, of half a second or of the whole recording, take the place of the mixture's weights: clusters of
them are detections and talkers. A talker's direction is the mean of the frames near it and its covariance their scatter
over the number of stretches, as frames next to each other err alike.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.bearings.mixture import SAME_TALKER, Cluster, Refined, clusters
from unmix.bearings.space import SearchSpace
from unmix.bearings.tracks import Detections

__all__ = ["FramePeaks", "peak_clusters", "peak_detections", "peak_shares", "refine_peaks"]

Floats = NDArray[np.float64]

STRETCH_S = 0.5
_PLAINEST = 0.5
"""Share of the audible frames that count: the plainest half."""
_LOUD_DB = 10.0
_FEWEST = 4
_WIDTH = 0.12
_BATCH = 4096


@dataclass(frozen=True)
class FramePeaks:
    """time_s (frames,), projections x (frames, rank), how plain (frames,) and the frames' power (frames,).

    all_count  whether frames are too long for levels to tell speech from pauses
    """

    time_s: Floats
    x: Floats
    plain: Floats
    power: Floats
    all_count: bool = False

    @classmethod
    def join(cls, parts: list[FramePeaks]) -> FramePeaks:
        """Peaks of several stretches as one."""
        time_s, x, plain, power = (
            np.concatenate([getattr(p, n) for p in parts]) for n in ("time_s", "x", "plain", "power")
        )
        return cls(time_s, x, plain, power)

    def chosen(self) -> FramePeaks:
        """The plainest half of the frames that are louder than the noise floor by 10 dB."""
        if self.all_count or not len(self.power):
            return self
        floor = max(float(np.quantile(self.power, 0.05)), 1e-15)
        loud = self.power > floor * 10.0 ** (_LOUD_DB / 10.0)
        if not loud.any():
            return self.take(loud)
        return self.take(loud & (self.plain >= np.quantile(self.plain[loud], 1.0 - _PLAINEST)))

    def take(self, index: NDArray[np.bool_] | NDArray[np.intp] | slice) -> FramePeaks:
        """Some of the frames."""
        return FramePeaks(self.time_s[index], self.x[index], self.plain[index], self.power[index], self.all_count)


def peak_clusters(peaks: FramePeaks, space: SearchSpace, *, sharp: float = 0.0) -> tuple[list[Cluster], Floats]:
    """Clusters of the histogram over the grid, and the histogram itself (points,), summing to one.

    ``sharp`` takes away what single frames scattered about leave, as a share of the highest bar.
    """
    if not len(peaks.x):
        return [], np.zeros(len(space.grid))
    histogram = np.zeros(len(space.grid))
    for first in range(0, len(peaks.x), _BATCH):
        apart = np.linalg.norm(peaks.x[first : first + _BATCH, None] - space.grid[None], axis=-1)
        kernel = np.exp(-0.5 * (apart / (0.5 * _WIDTH)) ** 2)
        histogram += (kernel / np.maximum(kernel.sum(axis=1, keepdims=True), 1e-12)).sum(axis=0)
    histogram = np.maximum(histogram - sharp * histogram.max(), 0.0)
    histogram /= max(float(histogram.sum()), 1e-12)
    return clusters(histogram, space), histogram


def peak_detections(peaks: FramePeaks, space: SearchSpace, duration_s: float, hop_s: float) -> list[Detections]:
    """Detections of stretches of half a second."""
    found = []
    for start in np.arange(0.0, max(duration_s - STRETCH_S, 0.0) + 1e-9, hop_s):
        here = slice(*np.searchsorted(peaks.time_s, (start, start + STRETCH_S)))
        frames = here.stop - here.start
        group = peak_clusters(peaks.take(here), space)[0] if frames >= _FEWEST else []
        strong = [c for c in group if c.weight >= 0.15 and c.weight * frames >= _FEWEST - 1]
        x = np.array([c.x for c in strong]).reshape(-1, space.rank)
        found.append(Detections(float(start) + 0.5 * STRETCH_S, x, np.array([c.weight for c in strong])))
    return found


def refine_peaks(peaks: FramePeaks, start: Floats) -> Refined:
    """Means of the peaks near each of ``start`` (talkers, rank), found again around the mean itself."""
    x = start.copy()
    rank = start.shape[1]
    covariance = np.tile(np.eye(rank) * 0.1**2, (len(x), 1, 1))
    weight = np.zeros(len(x))
    for k in range(len(x)):
        for _ in range(8):
            near = np.linalg.norm(peaks.x - x[k], axis=1) < 0.6 * SAME_TALKER
            if near.sum() < _FEWEST:
                break
            x[k] = peaks.x[near].mean(axis=0)
        if near.sum() >= _FEWEST:
            stretches = len(np.unique(np.floor(peaks.time_s[near] / STRETCH_S)))
            covariance[k] = np.cov(peaks.x[near].T).reshape(rank, rank) / stretches
            weight[k] = near.mean()
    return Refined(x, covariance, weight)


def peak_shares(peaks: FramePeaks, x: Floats, slice_s: Floats, step_s: float) -> Floats:
    """Share of each slice's peaks that lie near each talker: x (slices, talkers, rank) to (slices, talkers)."""
    share = np.zeros(x.shape[:2])
    for i, middle in enumerate(slice_s):
        first, stop = np.searchsorted(peaks.time_s, (middle - 0.5 * step_s, middle + 0.5 * step_s))
        here = peaks.x[first:stop]
        if len(here):
            apart = np.linalg.norm(here[:, None] - x[i], axis=-1)
            own = (apart < 0.6 * SAME_TALKER) & (apart == apart.min(axis=1, keepdims=True))
            share[i] = own.mean(axis=0)
    return share
