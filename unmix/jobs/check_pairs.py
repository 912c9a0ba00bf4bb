"""Findings on channels against each other and against the geometry."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from unmix.calibration.clocks import ClockFit
from unmix.calibration.order import FieldReading
from unmix.jobs.check_channels import listed
from unmix.jobs.findings import Finding
from unmix.physics import speed_of_sound
from unmix.scene import Scene

__all__ = [
    "clock_findings",
    "copy_findings",
    "drifts",
    "field_findings",
    "longest_delay",
    "peak_findings",
    "unrelated_findings",
    "unsynchronised",
]

Floats = NDArray[np.float64]

_SAME = 1e-12
_SLACK_S = 1e-4
"""Delays beyond the geometry that a peak between two samples, or a reflection next to a microphone, may give."""
DRIFT_DEVIATIONS = 5.0
UNRELATED_FROM_S = 4.0
LEAST_DRIFT_PPM = 0.2
GAIN_DB, LOST_DB = 1.5, 15.0
SURE_COHERENCE = 0.3
ORDER_DEVIATIONS = 4.0
PLAIN_SHARE = 0.3
"""Peaks of one sign beyond one half, from which the sign is believed."""


def copy_findings(gram: Floats, alive: NDArray[np.bool_]) -> Iterator[Finding]:
    """Channels that hold the same samples, up to their sign and gain."""
    power = np.diag(gram)
    index = np.flatnonzero(alive)
    for at, a in enumerate(index):
        for b in index[at + 1 :]:
            likeness = gram[a, b] / np.sqrt(power[a] * power[b])
            if 1.0 - abs(likeness) <= _SAME * 1e2:
                turned = ", one with its polarity turned" if likeness < 0.0 else ""
                yield Finding(
                    "copy", "unfit", f"the same samples twice{turned}", listed([int(a), int(b)]), 1.0,
                    "leave one of them out of `channels` and of the array; check the routing", (int(a), int(b)),
                )  # fmt: skip


def longest_delay(scene: Scene) -> float:
    """Largest delay between any two microphones that a sound from anywhere can have, in whatever order they are."""
    return scene.array.aperture_m / speed_of_sound(scene.temperature_c)


def unsynchronised(clocks: Sequence[ClockFit | None], scene: Scene) -> NDArray[np.bool_]:
    """Channels whose delay, or its change over the recording, the geometry cannot explain."""
    limit = longest_delay(scene)
    known = scene.array.delay_s - scene.array.delay_s[scene.array.reference_channel]
    late = np.zeros(len(clocks), bool)
    for m, clock in enumerate(clocks):
        if clock is None or m == scene.array.reference_channel:
            continue
        beyond = abs(clock.delay_s - known[m]) - limit - _SLACK_S
        late[m] = (beyond > 3.0 * clock.spread_s / np.sqrt(clock.chunks)) or drifts(clock, scene)
    return late


def drifts(clock: ClockFit, scene: Scene) -> bool:
    """A slope beyond its own error, over more time than talkers who move could give it."""
    change = abs(clock.drift_ppm) * 1e-6 * scene.recording.duration_s
    plain = abs(clock.drift_ppm) > max(LEAST_DRIFT_PPM, DRIFT_DEVIATIONS * clock.drift_std_ppm)
    return bool(clock.chunks >= 4 and plain and change > 2.0 * longest_delay(scene) + 0.5 / scene.sample_rate)


def clock_findings(clocks: Sequence[ClockFit | None], late: NDArray[np.bool_], scene: Scene) -> Iterator[Finding]:
    """Delays that the geometry cannot explain, and clocks that drift."""
    limit, reference = longest_delay(scene), scene.array.reference_channel
    for m in map(int, np.flatnonzero(late)):
        clock = clocks[m]
        if clock is None:
            continue
        known = scene.array.delay_s[m] - scene.array.delay_s[reference]
        where = f"channel {m} against channel {reference}"
        if drifts(clock, scene):
            yield Finding(
                "drift", "unfit", f"clocks drift by {clock.drift_ppm:+.2f} +- {clock.drift_std_ppm:.2f} ppm", where,
                min(0.999, 0.8 + 0.02 * abs(clock.drift_ppm) / max(clock.drift_std_ppm, 1e-3)),
                "use one recorder or a common clock; `unmix calibrate --repaired FILE` resamples onto one clock",
                (m,), clock.drift_ppm, "ppm",
            )  # fmt: skip
        if abs(clock.delay_s - known) > limit + _SLACK_S:
            yield Finding(
                "delay", "unfit",
                f"{1e3 * clock.delay_s:+.3f} ms, where the geometry allows at most {1e3 * limit:.3f} ms", where,
                min(0.999, 0.75 + 0.01 * clock.chunks), "synchronise the recorders; `unmix calibrate` finds the delay",
                (m,), 1e3 * clock.delay_s, "ms",
            )  # fmt: skip


def unrelated_findings(clocks: Sequence[ClockFit | None], alive: NDArray[np.bool_], scene: Scene) -> Iterator[Finding]:
    """Channels that share no sound with the others, as far as the correlations tell."""
    reference = scene.array.reference_channel
    if scene.recording.duration_s < UNRELATED_FROM_S or not alive[reference]:
        return
    others = [m for m in map(int, np.flatnonzero(alive)) if m != reference]
    lone = [m for m in others if clocks[m] is None]
    if len(others) > 1 and 2 * len(lone) > len(others):
        lone = [reference]
    for m in lone:
        yield Finding(
            "unrelated", "unfit", "no sound in common with the other channels", f"channel {m}", 0.8,
            "is it from the same recording, at the same sample rate? else check cable and clock, or leave it out", (m,),
        )  # fmt: skip


def peak_findings(clocks: Sequence[ClockFit | None], trusted: NDArray[np.bool_], scene: Scene) -> Iterator[Finding]:
    """Polarity by the sign of the correlation peaks, for arrays too large to hear any frequency as one."""
    known = scene.array.polarity * scene.array.polarity[scene.array.reference_channel]
    lean = {
        m: float(known[m]) * (clock.positive - 0.5)
        for m, clock in enumerate(clocks)
        if trusted[m] and clock is not None and clock.chunks >= 3
    }
    negative = [m for m, value in lean.items() if value < -PLAIN_SHARE]
    if 2 * len(negative) > len(lean):
        negative = [m for m in lean if m not in negative]  # then the reference is the odd one
    for m in negative:
        yield _turned(m, 0.6 + 0.7 * abs(lean[m]))


def _turned(m: int, confidence: float) -> Finding:
    return Finding(
        "polarity", "unfit", "polarity is turned against the other channels", f"channel {m}", confidence,
        f"swap the connection, or give `polarity` in the array file (-1 for channel {m})", (m,),
    )  # fmt: skip


def field_findings(field: FieldReading, trusted: NDArray[np.bool_], expected_db: Floats) -> Iterator[Finding]:
    """Polarity, gain spread, order of the channels."""
    if field.sign is not None:
        for m in map(int, np.flatnonzero((field.sign < 0) & trusted)):
            if field.sureness[m] > SURE_COHERENCE:
                yield _turned(m, min(0.999, 0.7 + 0.3 * float(field.sureness[m])))
    if field.gain_db is not None:
        yield from _gains(field.gain_db - expected_db, field.sureness, trusted)
    order = field.order
    if order is not None and order.deviations > ORDER_DEVIATIONS:
        moved = [m for m, o in enumerate(order.order) if m != o]
        pairs = ", ".join(f"microphone {m} is channel {order.order[m]}" for m in moved)
        yield Finding(
            "order", "unfit", f"channels do not fit the geometry; better, for instance: {pairs}", listed(moved),
            min(0.999, 0.75 + 0.01 * order.deviations),
            "put `channels` in [recording] in the order of the array file's positions; check the talkers' bearings too",
            tuple(moved), order.fit - order.fit_as_given,
        )  # fmt: skip


def _gains(gain_db: Floats, sureness: Floats, trusted: NDArray[np.bool_]) -> Iterator[Finding]:
    lost = np.flatnonzero(trusted & (gain_db < -LOST_DB))
    for m in map(int, lost):
        yield Finding(
            "gain", "unfit", f"{-gain_db[m]:.0f} dB quieter than the others", f"channel {m}", 0.95,
            "the microphone is covered, far off or broken: put it right, or leave the channel out", (m,),
            float(gain_db[m]), "dB",
        )  # fmt: skip
    rest = trusted.copy()
    rest[lost] = False
    off = np.flatnonzero(rest & (np.abs(gain_db) > GAIN_DB))
    if len(off):
        spread = ", ".join(f"{m}: {gain_db[m]:+.1f} dB" for m in off)
        yield Finding(
            "gain", "warning", f"gains differ ({spread} against the median)", listed(off),
            0.6 + 0.35 * float(np.median(sureness[off])), "`unmix calibrate` measures gains; `solve` then applies them",
            tuple(int(m) for m in off), float(np.ptp(gain_db[rest])), "dB",
        )  # fmt: skip
