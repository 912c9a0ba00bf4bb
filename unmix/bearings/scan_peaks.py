"""One pass over a recording with a method that finds the best direction of every frame.

`srp` steers, `snapshots` fits the free expansion to the frame's samples; of the two opposite directions that snapshots
leave, the one nearer to the steered one is taken. A recording too slow for spectra of voices (`SLOWEST_HZ`) is left to
snapshots alone, and both directions stay possible.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.bins import SEGMENT_S, Steering
from unmix.bearings.peaks import FramePeaks, peak_clusters, peak_detections
from unmix.bearings.scan import SLICE_S, Rotations, Scan
from unmix.bearings.snapshots import SnapshotModel, snapshot_bearing, snapshot_model
from unmix.bearings.space import SearchSpace
from unmix.bearings.srp import srp_peaks
from unmix.bearings.tracks import Detections

__all__ = ["SLOWEST_HZ", "PeakMethod", "scan_peaks", "scan_slowly"]

Floats = NDArray[np.float64]
PeakMethod = Literal["srp", "snapshots"]

SLOWEST_HZ = 2000
"""Sample rate below which a recording is a row of snapshots and no sound."""
_GROUP = 16
_GROUPS_AT_ONCE = 8
# Delays count in samples of this rate where the recording's own says nothing about voices.
_UNIT_HZ = 16000

# Bars of the histogram below this share of the highest are frames scattered about by the room.
_SCATTERED = 0.15


def scan_peaks(
    chunks: Iterable[Floats],
    method: PeakMethod,
    array: Array,
    space: SearchSpace,
    steering: Steering,
    duration_s: float,
    *,
    rotations: Rotations | None = None,
    distance_m: float | None = None,
    temperature_c: float = 20.0,
) -> Scan:
    """Look at a recording once; arguments as of `scan`, ``steering`` without whitening."""
    grid = steering.waves(space.grid @ space.basis.T, space.directions, distance_m) if rotations is None else None
    model = None
    if method == "snapshots":
        model = snapshot_model(array, space, steering.sample_rate, temperature_c=temperature_c, distance_m=distance_m)
    parts = []
    for samples, start_s in _pieces(chunks, steering, SEGMENT_S if rotations is None else SLICE_S):
        middle_s = start_s + 0.5 * samples.shape[1] / steering.sample_rate
        turn = None if rotations is None else rotations(np.array([middle_s]))[0]
        peaks = srp_peaks(samples, start_s, space, steering, rotation=turn, distance_m=distance_m, waves=grid)
        if model is not None:
            peaks = _by_snapshots(samples, peaks, model, steering, array)
        parts.append(peaks)
    slices = np.arange(0.5 * SLICE_S, duration_s, SLICE_S)
    if not parts:
        return Scan([], [], [], np.zeros(len(space.grid)), slices, np.zeros(len(slices)), 0)
    peaks = FramePeaks.join(parts)
    chosen = peaks.chosen()
    section, histogram = peak_clusters(chosen, space, sharp=_SCATTERED)
    detections = peak_detections(chosen, space, duration_s, SLICE_S)
    edges = np.searchsorted(chosen.time_s, [slices - 0.5 * SLICE_S, slices + 0.5 * SLICE_S])
    loud = (edges[1] > edges[0]).astype(np.float64)
    return Scan([section], detections, [], histogram, slices, loud, len(chosen.x), peaks)


def scan_slowly(
    chunks: Iterable[Floats],
    array: Array,
    space: SearchSpace,
    sample_rate: int,
    duration_s: float,
    *,
    distance_m: float | None = None,
    temperature_c: float = 20.0,
) -> Scan:
    """Look at snapshots taken slowly, sixteen at a time; no spectrum, and nothing said about which end of an axis."""
    model = snapshot_model(array, space, _UNIT_HZ, temperature_c=temperature_c, distance_m=distance_m)
    gain = (array.polarity * 10.0 ** (-array.gain_db / 20.0))[:, None]
    rows = []
    held = np.zeros((array.channels, 0))
    at = 0
    for chunk in chunks:
        held = np.concatenate([held, gain * chunk], axis=1)
        while held.shape[1] >= _GROUP:
            y, held = held[:, :_GROUP], held[:, _GROUP:]
            found = snapshot_bearing(model, y @ y.T, _GROUP, rounds=4)
            plain = 1.0 - found.score.min() / max(float(found.score.mean()), 1e-300)
            rows.append(((at + 0.5 * _GROUP) / sample_rate, found.x, plain, float(np.mean(y**2))))
            at += _GROUP
    rows = [row for row in rows if row[3] > 0.0]
    slices = np.arange(0.5 * SLICE_S, duration_s, SLICE_S)
    if not rows:
        return Scan([], [], [], np.zeros(len(space.grid)), slices, np.zeros(len(slices)), 0)
    time_s, x, plain, power = (np.array(column) for column in zip(*rows, strict=True))
    peaks = FramePeaks(time_s, x, plain, power, all_count=True)
    section, histogram = peak_clusters(peaks, space, sharp=_SCATTERED)
    detections = []
    for part in np.array_split(np.arange(len(rows)), max(1, len(rows) // _GROUPS_AT_ONCE)):
        strong = [c for c in peak_clusters(peaks.take(part), space)[0] if c.weight >= 0.3]
        x = np.array([c.x for c in strong]).reshape(-1, space.rank)
        detections.append(Detections(float(peaks.time_s[part].mean()), x, np.array([c.weight for c in strong])))
    return Scan([section], detections, [], histogram, slices, np.ones(len(slices)), len(rows), peaks)


def _pieces(chunks: Iterable[Floats], steering: Steering, length_s: float) -> Iterator[tuple[Floats, float]]:
    """Stretches of about ``length_s`` with the time they start at, frames running over their borders."""
    want = round(length_s * steering.sample_rate)
    held: Floats | None = None
    at = 0
    for chunk in chunks:
        held = chunk if held is None else np.concatenate([held, chunk], axis=1)
        while held.shape[1] >= want + steering.frame:
            frames = (want + steering.frame - steering.frame) // steering.hop
            size = (frames - 1) * steering.hop + steering.frame
            yield held[:, :size], at / steering.sample_rate
            held = held[:, frames * steering.hop :]
            at += frames * steering.hop
    if held is not None and held.shape[1] >= steering.frame:
        yield held, at / steering.sample_rate


def _by_snapshots(
    samples: Floats, peaks: FramePeaks, model: SnapshotModel, steering: Steering, array: Array
) -> FramePeaks:
    """The same frames, their directions from the free expansion of their samples."""
    y = samples * (array.polarity * 10.0 ** (-array.gain_db / 20.0))[:, None]
    x, plain = np.zeros_like(peaks.x), np.zeros(len(peaks.x))
    for i, steered in enumerate(peaks.x):
        frame = y[:, i * steering.hop : i * steering.hop + steering.frame]
        found = snapshot_bearing(model, frame @ frame.T, frame.shape[1], rounds=4)
        x[i] = found.x if found.x @ steered >= 0.0 else -found.x
        plain[i] = 1.0 - found.score.min() / max(float(found.score.mean()), 1e-300)
    return FramePeaks(peaks.time_s, x, plain, peaks.power)
