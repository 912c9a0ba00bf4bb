"""Following talkers: joint integrated probabilistic data association on the sphere of directions.

Detections of successive stretches of time are associated with tracks by the joint integrated probabilistic data
association filter [1]_ with two states of existence: a talker exists and speaks, exists and pauses, or does not exist
[2]_. All feasible assignments of detections to tracks are weighted,

    prod (assigned)  V_i P_D N(y_j; x_i, S_i) / lambda  *  prod (unassigned) (1 - V_i P_D),

V_i the probability that talker i exists and speaks, lambda the density of false detections; the marginals update
state and existence. The state is the projection x of the direction onto the array's span (see `space`) and its
velocity, an Ornstein-Uhlenbeck process, so that all updates are linear; for a full sphere x is held at unit length.
A pausing talker is not expected to wander far. Afterwards tracks are smoothed backwards [3]_.

.. [1] D. Musicki and R. Evans, "Joint integrated probabilistic data association: JIPDA", IEEE Trans. Aerosp. Electron.
   Syst. 40, 2004.
.. [2] D. Musicki, R. Evans, S. Stankovic, "Integrated probabilistic data association", IEEE Trans. Autom. Control 39,
   1994 (Markov chain two).
.. [3] H. E. Rauch, F. Tung, C. T. Striebel, "Maximum likelihood estimates of linear dynamic systems", AIAA J. 3, 1965.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["Detections", "Motion", "TrackedTalker", "Tracker"]

Floats = NDArray[np.float64]

_ALONE_S = 1.0


@dataclass(frozen=True)
class Motion:
    """What is assumed of talkers and detections.

    speed_rms            of a talker on the move, in units of x (radians broadside) per second
    turning_s            how long a velocity lasts
    pause_std            how far a pausing talker is expected to be from where they were last heard
    detection_std        of one detection, in x
    detection            probability that a speaking talker is detected
    false_per_stretch    number of false detections expected per stretch
    pause, resume        probabilities, per second, that a speaking talker pauses and a pausing one resumes
    leave                probability, per second, that a talker is gone for good
    birth                probability that an unexplained detection is a new talker
    """

    speed_rms: float = 0.15
    turning_s: float = 10.0
    pause_std: float = 0.2
    detection_std: float = 0.08
    detection: float = 0.9
    false_per_stretch: float = 0.3
    pause: float = 0.3
    resume: float = 0.6
    leave: float = 0.003
    birth: float = 0.1


@dataclass(frozen=True)
class Detections:
    """What one stretch of time holds: projections x (detections, rank) and the share of bins of each (detections,)."""

    time_s: float
    x: Floats
    weight: Floats


@dataclass(frozen=True)
class TrackedTalker:
    """One talker followed through time, from birth to the last stretch they were heard in.

    time_s    (steps,)
    x         (steps, rank) smoothed projections, covariance (steps, rank, rank)
    heard     (steps,) probability that a detection of that stretch is this talker's
    exists    highest probability of existence reached
    """

    time_s: Floats
    x: Floats
    covariance: Floats
    heard: Floats
    exists: float


@dataclass
class _Step:
    time_s: float
    mean: Floats
    covariance: Floats
    heard: float


@dataclass
class _Track:
    mean: Floats
    covariance: Floats
    speaks: float
    pauses: float
    best: float = 0.0
    steps: list[_Step] = field(default_factory=list)

    @property
    def exists(self) -> float:
        return self.speaks + self.pauses


class Tracker:
    """Feed it `Detections` in order of time; `finish` gives the talkers.

    rank      of the search space; on_sphere whether x has unit length
    """

    def __init__(self, rank: int, *, motion: Motion | None = None, on_sphere: bool = False) -> None:
        self._rank = rank
        self._motion = motion or Motion()
        self._on_sphere = on_sphere
        size = {1: 2.0, 2: np.pi, 3: 4.0 * np.pi}[rank]
        self._false_density = self._motion.false_per_stretch / size
        self._tracks: list[_Track] = []
        self._gone: list[_Track] = []
        self._time: float | None = None

    def add(self, found: Detections) -> None:
        """One stretch of time on."""
        if self._time is not None:
            for track in self._tracks:
                self._predict(track, found.time_s - self._time)
        self._time = found.time_s
        marginal = self._associate(found)
        for i, track in enumerate(self._tracks):
            self._update(track, found, marginal[i])
        self._drop()
        self._give_birth(found, 1.0 - marginal.sum(axis=0))

    def finish(self, *, sure: float = 0.9, heard: float = 3.0) -> list[TrackedTalker]:
        """Talkers whose existence exceeded ``sure`` and that were heard in at least ``heard`` stretches, by birth."""
        tracks = [t for t in self._gone + self._tracks if t.best >= sure]
        tracks = [t for t in tracks if sum(s.heard for s in t.steps) >= heard]
        return sorted((self._smooth(t) for t in tracks), key=lambda t: float(t.time_s[0]))

    def _transition(self, dt: float) -> tuple[Floats, Floats]:
        """Ornstein-Uhlenbeck velocity over ``dt`` seconds: transition and noise of (position, velocity) per axis."""
        m = self._motion
        b = 1.0 / m.turning_s
        e = np.exp(-b * dt)
        s2 = m.speed_rms**2
        f = np.array([[1.0, (1.0 - e) / b], [0.0, e]])
        pp = s2 / b**2 * (2.0 * b * dt - 3.0 + 4.0 * e - e**2)
        pv = s2 / b * (1.0 - e) ** 2
        q = np.array([[pp, pv], [pv, s2 * (1.0 - e**2)]])
        eye = np.eye(self._rank)
        return np.kron(f, eye), np.kron(q, eye)

    def _predict(self, track: _Track, dt: float) -> None:
        m = self._motion
        f, q = self._transition(dt)
        track.mean = f @ track.mean
        covariance = f @ track.covariance @ f.T + q
        if track.pauses > track.speaks:
            covariance = _held(covariance, self._rank, m.pause_std)
        track.covariance = covariance
        stays, pause, resume = (np.exp(-rate * dt) for rate in (m.leave, m.pause, m.resume))
        speaks, pauses = track.speaks, track.pauses
        track.speaks = stays * (speaks * pause + pauses * (1.0 - resume))
        track.pauses = stays * (speaks * (1.0 - pause) + pauses * resume)

    def _associate(self, found: Detections) -> Floats:
        """Marginal probabilities (tracks, detections) that detection j is track i's."""
        tracks, detections = len(self._tracks), len(found.x)
        marginal = np.zeros((tracks, detections))
        if not tracks or not detections:
            return marginal
        gain = np.zeros((tracks, detections))
        for i, track in enumerate(self._tracks):
            s = track.covariance[: self._rank, : self._rank] + self._noise(found)[:, None, None] * np.eye(self._rank)
            apart = found.x - track.mean[: self._rank]
            far = np.einsum("ja,jab,jb->j", apart, np.linalg.inv(s), apart)
            density = np.exp(-0.5 * far) / np.sqrt(np.linalg.det(2.0 * np.pi * s))
            speaks = track.speaks * self._motion.detection
            gain[i] = np.where(far < 16.0, speaks * density / self._false_density / (1.0 - speaks), 0.0)
        total = 0.0
        for chosen, weight in _assignments(gain):
            total += weight
            for i, j in chosen:
                marginal[i, j] += weight
        return marginal / total

    def _noise(self, found: Detections) -> Floats:
        """Variance of each detection: smaller shares of a stretch are located less well."""
        return np.asarray(self._motion.detection_std**2 * np.clip(0.5 / np.maximum(found.weight, 0.05), 0.6, 4.0))

    def _update(self, track: _Track, found: Detections, marginal: Floats) -> None:
        r = self._rank
        heard = float(marginal.sum())
        missed = track.speaks * self._motion.detection
        track.speaks, track.pauses = (
            heard + (1.0 - heard) * track.speaks * (1.0 - self._motion.detection) / (1.0 - missed),
            (1.0 - heard) * track.pauses / (1.0 - missed),
        )
        if heard > 1e-6:
            noise = float(marginal @ self._noise(found) / heard)
            s = track.covariance[:r, :r] + noise * np.eye(r)
            gain = track.covariance[:, :r] @ np.linalg.inv(s)
            apart = found.x - track.mean[:r]
            mean = marginal @ apart
            spread = (apart.T * marginal) @ apart - np.outer(mean, mean)
            updated = track.covariance - heard * gain @ s @ gain.T + gain @ spread @ gain.T
            track.mean, track.covariance = track.mean + gain @ mean, 0.5 * (updated + updated.T)
        self._hold(track)
        track.best = max(track.best, track.exists)
        track.steps.append(_Step(found.time_s, track.mean.copy(), track.covariance.copy(), heard))

    def _hold(self, track: _Track) -> None:
        """On the sphere x has unit length; a flat array's disc is left by no more than noise."""
        length = float(np.linalg.norm(track.mean[: self._rank]))
        if self._on_sphere or length > 1.0:
            track.mean[: self._rank] /= max(length, 1e-9)

    def _give_birth(self, found: Detections, unexplained: Floats) -> None:
        m, r = self._motion, self._rank
        for j in np.flatnonzero(unexplained > 0.5):
            covariance = np.diag(np.r_[np.full(r, self._noise(found)[j]), np.full(r, m.speed_rms**2)])
            track = _Track(np.r_[found.x[j], np.zeros(r)], covariance, m.birth * float(unexplained[j]), 0.0)
            track.steps.append(_Step(found.time_s, track.mean.copy(), covariance.copy(), float(unexplained[j])))
            self._tracks.append(track)

    def _drop(self) -> None:
        """Tracks that exist no more go, and the younger of two that follow the same detections."""
        kept: list[_Track] = []
        for track in sorted(self._tracks, key=lambda t: (-round(t.best, 2), t.steps[0].time_s)):
            double = any(self._same(track, other) for other in kept)
            if track.exists < 0.02 or double or len(kept) >= 10:
                self._gone.append(track)
            else:
                kept.append(track)
        self._tracks = kept

    def _same(self, a: _Track, b: _Track) -> bool:
        """Whether two tracks have been at the same place for two seconds, or since one of them was born unsure."""
        near = float(np.linalg.norm(a.mean[: self._rank] - b.mean[: self._rank])) < self._motion.detection_std
        if not near:
            return False
        if min(a.best, b.best) < 0.9:
            return True
        since = a.steps[-1].time_s - 4.0
        recent_a = [s.mean[: self._rank] for s in a.steps if s.time_s > since]
        recent_b = [s.mean[: self._rank] for s in b.steps if s.time_s > since]
        both = min(len(recent_a), len(recent_b))
        apart = np.linalg.norm(np.array(recent_a[-both:]) - np.array(recent_b[-both:]), axis=1)
        return bool(both > 8 and apart.max() < self._motion.detection_std)

    def _smooth(self, track: _Track) -> TrackedTalker:
        """Rauch, Tung, Striebel: backwards over the filtered states, cut after the last stretch heard."""
        heard = np.array([s.heard for s in track.steps])
        steps = track.steps[: _last_heard(np.array([s.time_s for s in track.steps]), heard) + 1]
        mean = [s.mean for s in steps]
        covariance = [s.covariance for s in steps]
        for t in range(len(steps) - 2, -1, -1):
            f, q = self._transition(steps[t + 1].time_s - steps[t].time_s)
            ahead = f @ steps[t].covariance @ f.T + q
            gain = np.linalg.solve(ahead, f @ steps[t].covariance).T
            mean[t] = steps[t].mean + gain @ (mean[t + 1] - f @ steps[t].mean)
            covariance[t] = steps[t].covariance + gain @ (covariance[t + 1] - ahead) @ gain.T
        r = self._rank
        x = np.array([m[:r] for m in mean])
        length = np.linalg.norm(x, axis=1, keepdims=True)
        x = x / np.maximum(length, 1e-9) if self._on_sphere else x / np.maximum(length, 1.0)
        return TrackedTalker(
            np.array([s.time_s for s in steps]),
            x,
            np.array([c[:r, :r] for c in covariance]),
            heard[: len(steps)],
            track.best,
        )


def _last_heard(time_s: Floats, heard: Floats) -> int:
    """Index of the last stretch a talker was heard in, others having been heard within `_ALONE_S` before it.

    A single detection long after the others is likelier a false one than a talker who came back for a moment.
    """
    sure = np.flatnonzero(heard > 0.5)
    if not len(sure):
        return len(heard) - 1
    together = sure[1:][np.diff(time_s[sure]) <= _ALONE_S]
    return int(together[-1] if len(together) else sure[-1])


def _held(covariance: Floats, rank: int, std: float) -> Floats:
    """Covariance with the position's deviation no more than ``std`` along each axis, velocities scaled alike."""
    scale = np.ones(len(covariance))
    deviation = np.sqrt(np.diag(covariance)[:rank])
    factor = np.minimum(1.0, std / np.maximum(deviation, 1e-12))
    scale[:rank] = factor
    scale[rank:] = factor
    return np.asarray(covariance * np.outer(scale, scale))


def _assignments(gain: Floats) -> Iterator[tuple[Sequence[tuple[int, int]], float]]:
    """All assignments of columns to rows with their weights, relative to nobody assigned."""

    def go(
        row: int, used: int, weight: float, chosen: tuple[tuple[int, int], ...]
    ) -> Iterator[tuple[Sequence[tuple[int, int]], float]]:
        if row == len(gain):
            yield chosen, weight
            return
        yield from go(row + 1, used, weight, chosen)
        for j in np.flatnonzero(gain[row] > 1e-9):
            if not used >> int(j) & 1:
                yield from go(row + 1, used | 1 << int(j), weight * float(gain[row, j]), (*chosen, (row, int(j))))

    return go(0, 0, 1.0, ())
