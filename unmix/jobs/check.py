"""Is the recording sound, and does it fit its array? A scene in, findings out, in one pass over the recording.

each channel by itself -> channels against each other -> clocks -> channels against the geometry -> the geometry
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.audio import CHUNK_S
from unmix.calibration.channels import ChannelMeter, ChannelReading
from unmix.calibration.clocks import ClockFit, ClockMeter
from unmix.calibration.order import FieldMeter, FieldReading
from unmix.health import SILENT_DBFS
from unmix.jobs.check_channels import channel_findings, quiet_findings
from unmix.jobs.check_pairs import (
    clock_findings,
    copy_findings,
    field_findings,
    peak_findings,
    unrelated_findings,
    unsynchronised,
)
from unmix.jobs.findings import ChannelFigures, Checked, Finding
from unmix.limits.ambiguity import ambiguity_hz
from unmix.limits.ladder import noise_gain, responses
from unmix.model.delays import wave_delays
from unmix.physics import speed_of_sound, unit_vector, wrapped
from unmix.scene import Scene

__all__ = ["check"]

Floats = NDArray[np.float64]
Progress = Callable[[float], None]

USABLE_GAIN_DB = 20.0
ASSUMED_SEPARATION_DEG = 45.0
POOR_HZ = 1000.0
"""Above this much of speech's power cannot be told apart."""
_GRAVITY = {"unfit": 0, "warning": 1, "note": 2}


@dataclass(frozen=True)
class _Measured:
    readings: list[ChannelReading]
    clocks: list[ClockFit | None]
    field: FieldReading
    gram: Floats
    alive: NDArray[np.bool_]
    late: NDArray[np.bool_]


def check(scene: Scene, *, progress: Progress | None = None) -> Checked:
    """Look at a scene before anything is separated: one pass, in chunks.

    progress  called with the share done, 0 to 1

    Raises FileError for a damaged recording, InputError for samples that are not finite.
    """
    began = time.perf_counter()
    measured = _measure(scene, progress)
    findings: list[Finding] = []
    findings += channel_findings(measured.readings, measured.alive, scene.recording.samples, scene.sample_rate)
    findings += quiet_findings(measured.readings, measured.alive)
    findings += copy_findings(measured.gram, measured.alive)
    findings += clock_findings(measured.clocks, measured.late, scene)
    findings += unrelated_findings(measured.clocks, measured.alive, scene)
    findings += field_findings(measured.field, measured.alive & ~measured.late, _expected_spread_db(scene))
    if measured.field.sign is None:
        findings += peak_findings(measured.clocks, measured.alive & ~measured.late, scene)
    lowest, ambiguous, separation = _resolution(scene)
    findings += _geometry(lowest, ambiguous, separation, scene)
    return Checked(
        title=scene.title,
        findings=tuple(sorted(findings, key=lambda f: _GRAVITY[f.severity])),
        channels=tuple(_figures(scene, m, measured) for m in range(scene.array.channels)),
        duration_s=scene.recording.duration_s,
        sample_rate=scene.sample_rate,
        lowest_usable_hz=lowest,
        ambiguity_hz=ambiguous,
        separation_deg=separation,
        wall_time_s=time.perf_counter() - began,
    )


def _measure(scene: Scene, progress: Progress | None) -> _Measured:
    rate, samples, channels = scene.sample_rate, scene.recording.samples, scene.array.channels
    size = round(CHUNK_S * rate)
    meter = ChannelMeter(channels, rate, samples)
    clock = ClockMeter(scene.array.reference_channel, rate, samples, size)
    field = FieldMeter(scene.array, rate, samples, size, scene.temperature_c, sources=_known_sources(scene))
    gram = np.zeros((channels, channels))
    done = 0
    for chunk in scene.recording.chunks(size):
        meter.add(chunk)
        clock.add(chunk)
        field.add(chunk)
        gram += chunk @ chunk.T
        done += chunk.shape[1]
        if progress is not None:
            progress(done / samples)
    readings = meter.readings()
    alive = np.array([r.peak > 10.0 ** (SILENT_DBFS / 20.0) and r.power > 1e-14 for r in readings])
    clocks = clock.fits(channels)
    late = unsynchronised(clocks, scene)
    return _Measured(readings, clocks, field.reading(alive & ~late), gram, alive, late)


def _known_sources(scene: Scene) -> tuple[Floats, Floats] | None:
    """Directions and distances of the talkers, when all are known and nothing moves."""
    still = scene.talkers and all(t.azimuth is not None and t.track is None for t in scene.talkers)
    if not still or scene.orientation is not None or scene.array.responses is not None:
        return None
    directions = unit_vector([t.azimuth or 0.0 for t in scene.talkers], [t.elevation for t in scene.talkers])
    return directions, np.array([np.nan if t.distance_m is None else t.distance_m for t in scene.talkers])


def _expected_spread_db(scene: Scene) -> Floats:
    """Level of each microphone relative to the median one that the talkers' distances alone explain."""
    seated = [t for t in scene.talkers if t.azimuth is not None and t.distance_m is not None]
    if not seated:
        return np.zeros(scene.array.channels)
    directions = unit_vector([t.azimuth or 0.0 for t in seated], [t.elevation for t in seated])
    distance = np.array([t.distance_m or 1.0 for t in seated])
    gain = wave_delays(scene.array.positions_m, directions, distance, speed_of_sound(scene.temperature_c))[1]
    level = 10.0 * np.log10(np.mean(gain**2, axis=0))
    return np.asarray(level - np.median(level))


def _resolution(scene: Scene) -> tuple[float | None, float | None, float]:
    """From which frequency the talkers (or two `ASSUMED_SEPARATION_DEG` apart) can be told apart; where ambiguity
    starts; the separation meant."""
    top = 0.45 * scene.sample_rate
    ambiguous = ambiguity_hz(scene.array, 0.5 * scene.sample_rate, scene.temperature_c)
    azimuth = np.array([t.azimuth for t in scene.talkers if t.azimuth is not None])
    if len(azimuth) < 2:
        azimuth = np.radians([-0.5, 0.5]) * ASSUMED_SEPARATION_DEG
    gaps = np.degrees(np.abs(wrapped(azimuth[:, None] - azimuth)))
    separation = float(gaps[np.triu_indices(len(azimuth), 1)].min())
    if len(azimuth) > scene.array.channels:
        return None, ambiguous, separation
    f = np.geomspace(20.0, top, 300)
    gain = 10.0 * np.log10(noise_gain(responses(scene.array, azimuth[None], f, scene.temperature_c)[0])).max(axis=-1)
    good = np.flatnonzero(gain <= USABLE_GAIN_DB)
    return (float(f[good[0]]) if len(good) else None), ambiguous, separation


def _geometry(lowest: float | None, ambiguous: float | None, separation: float, scene: Scene) -> Iterator[Finding]:
    known = sum(t.azimuth is not None for t in scene.talkers) > 1
    whom = f"{'the closest two talkers' if known else 'two talkers'} {separation:.0f} deg apart"
    if lowest is None:
        yield Finding(
            "resolution", "unfit", f"the array cannot tell {whom} from each other", "all frequencies", 1.0,
            "move the talkers apart, or use a larger array or one of another shape", value=separation, unit="deg",
        )  # fmt: skip
    else:
        poor = lowest > POOR_HZ
        yield Finding(
            "resolution", "warning" if poor else "note", f"{whom} can be told apart from {lowest:.0f} Hz up",
            f"aperture {100 * scene.array.aperture_m:.1f} cm", 1.0,
            "use a larger array or move the talkers apart" if poor else "nothing; below, their noise rises by 20 dB",
            value=lowest, unit="Hz",
        )  # fmt: skip
    if ambiguous is not None:
        yield Finding(
            "ambiguity", "note", f"some bearings sound alike from {ambiguous:.0f} Hz up", "spacing against wavelength",
            1.0, "nothing, unless talkers sit at such a pair; closer microphones raise the frequency",
            value=ambiguous, unit="Hz",
        )  # fmt: skip


def _figures(scene: Scene, m: int, measured: _Measured) -> ChannelFigures:
    reading, clock = measured.readings[m], measured.clocks[m]
    level, noise = _sine_db(reading.power), _sine_db(reading.floor_power)
    full = scene.array.full_scale_db_spl
    return ChannelFigures(
        channel=m,
        level_db=level,
        peak_db=_sine_db(0.5 * reading.peak**2),
        noise_db=noise,
        dc=reading.dc,
        clipped=reading.clipped,
        dropouts=reading.run_count,
        level_db_spl=None if full is None or level is None else full + level,
        noise_db_spl=None if full is None or noise is None else full + noise,
        delay_s=None if clock is None else clock.delay_s,
        drift_ppm=None if clock is None or not np.isfinite(clock.drift_std_ppm) else clock.drift_ppm,
    )


def _sine_db(power: float) -> float | None:
    """Level of a mean square, 0 dB for a full-scale sine."""
    return 10.0 * float(np.log10(2.0 * power)) if power > 0.0 else None
