"""Findings on each channel by itself."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from unmix.calibration.channels import HUM_HARMONICS, MAINS_HZ, ChannelReading
from unmix.jobs.findings import Finding

__all__ = ["channel_findings", "listed", "quiet_findings"]

CLIPPED_SHARE = 1e-3
DC_SHARE, DC_LEAST = 0.1, 1e-3
HUM_DB = 8.0
LOW_LEVEL_DB = -65.0
LOW_SNR_DB = 15.0
POOR_SNR_DB = 6.0
"""In a reverberant room, several talkers who never pause reach no more than about 10 dB."""
NOISY_DB = 10.0


def channel_findings(
    readings: Sequence[ChannelReading], alive: NDArray[np.bool_], samples: int, sample_rate: int
) -> Iterator[Finding]:
    """Dead channels, clipping, DC, hum, drop-outs."""
    dead = np.flatnonzero(~alive)
    numbers = tuple(map(int, dead))
    if numbers:
        yield Finding(
            "dead", "unfit", f"{_is(dead)} silent", listed(dead), 1.0,
            "check cable and preamplifier; or leave the channel out of `channels` and of the array", numbers,
        )  # fmt: skip
    for m in map(int, np.flatnonzero(alive)):
        reading = readings[m]
        if reading.clipped:
            yield _clipping(m, reading, samples)
        if abs(reading.dc) > max(DC_LEAST, DC_SHARE * np.sqrt(reading.power)):
            yield Finding(
                "dc", "warning", f"DC offset of {100 * reading.dc:+.2f} % of full scale", f"channel {m}", 1.0,
                "high-pass the recording at 40 Hz, or have the converter's input looked at", (m,),
                100 * reading.dc, "%",
            )  # fmt: skip
        if reading.run_count:
            yield _dropouts(m, reading, samples, sample_rate)
    yield from _hum(readings, alive)


def quiet_findings(readings: Sequence[ChannelReading], alive: NDArray[np.bool_]) -> Iterator[Finding]:
    """Levels too low, talkers too close to the noise, single noisy channels."""
    index = [int(m) for m in np.flatnonzero(alive)]
    if len(index) == 0:
        return
    level = np.array([10.0 * np.log10(2.0 * readings[m].power) for m in index])
    floor = np.array([10.0 * np.log10(max(2.0 * readings[m].floor_power, 1e-16)) for m in index])
    loud = np.array([10.0 * np.log10(max(2.0 * readings[m].loud_power, 1e-16)) for m in index])
    if np.median(level) < LOW_LEVEL_DB:
        yield Finding(
            "level", "warning", f"the recording is very quiet ({np.median(level):.0f} dB FS)", "all channels", 1.0,
            "record at a higher gain", value=float(np.median(level)), unit="dB",
        )  # fmt: skip
    snr = float(np.median(loud - floor))
    if snr < LOW_SNR_DB:
        yield Finding(
            "noise", "warning" if snr < POOR_SNR_DB else "note",
            f"talkers stand only {snr:.0f} dB above the noise floor, or never pause",
            "all channels", 0.7, "move closer, or quieten the room; `noise_only_s` lets the noise be measured",
            value=snr, unit="dB",
        )  # fmt: skip
    for m, own in zip(index, floor - loud, strict=True):
        excess = own - np.median(floor - loud)
        if excess > NOISY_DB:
            yield Finding(
                "noise", "warning", f"noise floor {excess:.0f} dB higher than in the others", f"channel {m}", 0.9,
                "check cable, shield and preamplifier; or leave the channel out", (m,), float(excess), "dB",
            )  # fmt: skip


def _clipping(m: int, reading: ChannelReading, samples: int) -> Finding:
    share = reading.clipped / max(samples, 1)
    ceiling = 20.0 * np.log10(max(reading.peak, 1e-9))
    return Finding(
        "clipping", "unfit" if share > CLIPPED_SHARE else "warning",
        f"{reading.clipped} samples clipped at {ceiling:.1f} dB FS ({100 * share:.3f} %)", f"channel {m}",
        1.0 if reading.peak > 0.99 else 0.9,
        "record at a lower gain; method `convex` with `clip_level` repairs a little of it", (m,), 100 * share, "%",
    )  # fmt: skip


def _dropouts(m: int, reading: ChannelReading, samples: int, sample_rate: int) -> Finding:
    first = reading.runs[0]
    kind = "zeros" if all(r.value == 0.0 for r in reading.runs) else "repeated samples"
    lost = sum(r.length_s for r in reading.runs) * reading.run_count / len(reading.runs)
    share = lost / (samples / sample_rate)
    return Finding(
        "dropouts", "unfit" if share > 0.01 else "warning",
        f"{reading.run_count} drop-out{'s' if reading.run_count > 1 else ''} ({kind}, {1e3 * lost:.1f} ms in all)",
        f"channel {m}, first at {first.start_s:.3f} s", 0.98 if first.length_s > 3e-3 else 0.8,
        "record again with a larger buffer; or cut the stretch out with start_s, stop_s", (m,), 1e3 * lost, "ms",
    )  # fmt: skip


def _hum(readings: Sequence[ChannelReading], alive: NDArray[np.bool_]) -> Iterator[Finding]:
    index = [int(m) for m in np.flatnonzero(alive)]
    for a, mains in enumerate(MAINS_HZ):
        lines = np.array([readings[m].hum_db[a] for m in index]).reshape(len(index), HUM_HARMONICS)
        # Harmonics that both mains share (300 Hz) speak for neither.
        own = np.array([(h + 1) * mains % 300.0 != 0.0 for h in range(HUM_HARMONICS)])
        strong = (lines > HUM_DB) & own
        hit = (lines[:, 0] > 1.5 * HUM_DB) | (strong.sum(axis=1) >= 2)
        if hit.any():
            humming = [m for m, is_hit in zip(index, hit, strict=True) if is_hit]
            worst = float(np.where(own, lines, 0.0)[hit].max())
            harmonics = [f"{(h + 1) * mains:.0f}" for h in np.flatnonzero(strong[hit].any(axis=0))]
            yield Finding(
                "hum", "warning", f"mains hum, {worst:.0f} dB above its surroundings at {', '.join(harmonics)} Hz",
                listed(humming), min(0.99, 0.7 + 0.02 * worst),
                "break the ground loop, use balanced cables or battery power; the talkers' band is hurt little",
                tuple(humming), worst, "dB",
            )  # fmt: skip


def listed(channels: NDArray[np.int64] | Sequence[int]) -> str:
    """Channel numbers in words."""
    numbers = [str(int(c)) for c in channels]
    if len(numbers) == 1:
        return f"channel {numbers[0]}"
    return f"channels {', '.join(numbers[:-1])} and {numbers[-1]}"


def _is(channels: NDArray[np.int64]) -> str:
    return f"{listed(channels)} {'is' if len(channels) == 1 else 'are'}"
