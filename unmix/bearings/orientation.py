"""The turning array: whether its orientation fits the recording, and by how much its clock is off.

When talkers sit still while the array turns, their directions in the world stay put only if recording and orientation
share a clock. With detections u_i (array's frame) at times t_i, the offset d is where

    S(d) = sum_(i,j) w_i w_j exp(-|R(t_i + d) u_i - R(t_j + d) u_j|^2 / (2 s^2))

is largest: directions of the same talker fall onto each other. R(t) is interpolated on the sphere. The search goes over
`REACH_S` on either side, in steps, then over a parabola through the best three.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.bearings.space import SearchSpace
from unmix.bearings.tracks import Detections
from unmix.track import Orientation

__all__ = ["ClockOffset", "estimate_clock_offset", "orientation_notes"]

Floats = NDArray[np.float64]

REACH_S = 3.0
_STEP_S = 0.05
_WIDTH = 0.15
_MOST = 400
_LEAST_TURN = np.radians(15.0)


@dataclass(frozen=True)
class ClockOffset:
    """Offset to add to recording time to get the orientation's, None when it cannot be told, and why."""

    offset_s: float | None
    note: str


def estimate_clock_offset(
    orientation: Orientation, detections: list[Detections], space: SearchSpace, duration_s: float
) -> ClockOffset:
    """The clock offset from detections in the array's frame (``space`` without rotations)."""
    turns = orientation.matrices(np.linspace(0.0, duration_s, 50))
    if float(np.max(np.linalg.norm(turns - turns[0], axis=(1, 2)))) / np.sqrt(2.0) < _LEAST_TURN:
        return ClockOffset(
            None, "the array hardly turns, so the clock offset of its orientation cannot be estimated; 0 is used"
        )
    time_s = np.array([d.time_s for d in detections for _ in d.x])
    if len(time_s) < 8:
        return ClockOffset(None, "too little speech to estimate the clock offset of the orientation; 0 is used")
    u = np.concatenate([space.lift(d.x) for d in detections if len(d.x)])
    weight = np.concatenate([d.weight for d in detections])
    if len(time_s) > _MOST:
        pick = np.sort(np.random.default_rng(0).choice(len(time_s), _MOST, replace=False))
        time_s, u, weight = time_s[pick], u[pick], weight[pick]
    offsets = np.arange(-REACH_S, REACH_S + 0.5 * _STEP_S, _STEP_S)
    score = np.array([_sharpness(orientation, time_s + d, u, weight) for d in offsets])
    best = int(score.argmax())
    if best in (0, len(offsets) - 1):
        return ClockOffset(None, f"the clock offset of the orientation lies beyond {REACH_S:g} s; 0 is used")
    left, middle, right = score[best - 1 : best + 2]
    bend = left - 2.0 * middle + right
    shift = 0.5 * (left - right) / bend if bend < 0.0 else 0.0
    offset = float(offsets[best] + _STEP_S * shift)
    return ClockOffset(offset, f"clock offset of the orientation estimated from the recording: {offset:+.2f} s")


def _sharpness(orientation: Orientation, time_s: Floats, u: Floats, weight: Floats) -> float:
    world = np.einsum("nij,nj->ni", orientation.matrices(time_s), u)
    apart = 2.0 - 2.0 * world @ world.T
    return float(weight @ np.exp(-0.5 * apart / _WIDTH**2) @ weight)


def orientation_notes(orientation: Orientation, offset_s: float, duration_s: float) -> list[str]:
    """What the user should know: where it comes from, and whether it covers the recording."""
    notes = list(orientation.notes)
    first, last = float(orientation.time_s[0]) - offset_s, float(orientation.time_s[-1]) - offset_s
    step = float(np.median(np.diff(orientation.time_s))) if len(orientation.time_s) > 1 else 0.0
    if last < duration_s - max(0.5, 2.0 * step):
        notes.append(
            f"the orientation ends at {last:.1f} s of the {duration_s:.1f} s recording: the last is held to the end"
        )
    if first > max(0.5, 2.0 * step):
        notes.append(f"the orientation starts at {first:.1f} s of the recording: the first one is held before that")
    gaps = np.diff(orientation.time_s)
    if len(gaps) and gaps.max() > max(1.0, 10.0 * step):
        at = float(orientation.time_s[int(gaps.argmax())]) - offset_s
        notes.append(f"the orientation has a gap of {gaps.max():.1f} s at {at:.1f} s: it is interpolated")
    return notes
