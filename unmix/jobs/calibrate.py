"""What each channel does to the sound: takes with known bearings in, an array with corrections out.

one clock -> takes -> gain, delay, polarity of each -> what the bearings tell apart -> corrections
or: diffuse noise -> coherences -> corrections;  a tone -> level of full scale;  sweeps -> responses
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unmix.audio import AudioWriter, Recording, Samples, resample
from unmix.calibration.blind import blind_fit
from unmix.calibration.clocks import ClockFit, ClockMeter
from unmix.calibration.fit import Seat, fit_array
from unmix.calibration.level import find_tone, full_scale_db_spl
from unmix.calibration.repair import measure_clocks, one_clock
from unmix.calibration.sweep import measure_response, windowed
from unmix.calibration.transfer import measure_transfer
from unmix.errors import InputError
from unmix.files import write_aside
from unmix.jobs.calibration import Calibration, ClockReport, MeasuredTake, TakeReport
from unmix.jobs.check_pairs import drifts, unsynchronised
from unmix.model.delays import paths_from_bearings
from unmix.scene import Scene, Talker
from unmix.sofa import Responses

__all__ = ["calibrate", "calibrate_blindly", "calibrate_level", "measure_responses", "put_on_one_clock"]

Floats = NDArray[np.float64]

LONGEST_TAKE_S = 120.0
SHORTEST_TAKE_S = 0.5
_ROUNDS = 3


@dataclass(frozen=True)
class _Take:
    name: str
    seat: Seat
    samples: Floats
    where: str


def calibrate(scenes: Scene | Sequence[Scene], *, positions: bool = False) -> Calibration:
    """Gain, delay and polarity of each channel, and positions when asked for, from takes of one source at known
    bearings.

    scenes     each talker of each scene is a take: alone in the recording, or alone in its `active_s`
    positions  also fit microphone positions; needs three bearings spread around the array, and a fourth above or below
               for the height

    Raises InputError when bearings cannot tell what was asked for, a take has two sources or too little bandwidth,
    recorders drift, or the scenes' arrays differ.
    """
    began = time.perf_counter()
    given = _same_array([scenes] if isinstance(scenes, Scene) else list(scenes))
    array, rate = given[0].array, given[0].sample_rate
    for scene in given:
        _refuse_drift(scene)
    takes = [take for scene in given for take in _takes(scene)]
    transfers = [measure_transfer(t.samples, array.reference_channel, rate, where=t.where) for t in takes]
    fitted = fit_array(
        array, transfers, [t.seat for t in takes], positions=positions, temperature_c=given[0].temperature_c
    )
    reports = [
        TakeReport(
            t.name, float(np.degrees(t.seat.azimuth)), float(np.degrees(t.seat.elevation)), t.seat.distance_m,
            t.samples.shape[1] / rate, m.snr_db, m.bandwidth_hz, float(np.median(m.misfit)),
        )
        for t, m in zip(takes, transfers, strict=True)
    ]  # fmt: skip
    return Calibration(
        array=fitted.array,
        before=array,
        method="takes",
        axes=fitted.axes,
        scatter=fitted.scatter,
        takes=tuple(reports),
        notes=(*fitted.notes, *_reflections(reports)),
        wall_time_s=time.perf_counter() - began,
    )


def calibrate_blindly(scene: Scene, *, positions: bool = False) -> Calibration:
    """Gain, delay, polarity and spacings from diffuse noise: the scene's `noise_only_s`, else all of the recording.

    Raises InputError when the noise is too short or not diffuse.
    """
    began = time.perf_counter()
    _refuse_drift(scene)
    stretches = scene.noise_only_s or [(0.0, scene.recording.duration_s)]
    noise = np.concatenate([_excerpt(scene, a, b) for a, b in stretches], axis=1)
    found = blind_fit(noise, scene.array, scene.sample_rate, positions=positions, temperature_c=scene.temperature_c)
    return Calibration(
        array=found.array,
        before=scene.array,
        method="diffuse noise",
        axes="xyz" if positions else "",
        misfit=found.misfit,
        notes=found.notes,
        wall_time_s=time.perf_counter() - began,
    )


def calibrate_level(scene: Scene, tone_db_spl: float, *, channel: int | None = None) -> Calibration:
    """Sound pressure level of full scale, from a recording of a tone of known level at one microphone.

    channel  which microphone hears the calibrator; default: the reference

    Raises InputError when no steady tone stands out.
    """
    began = time.perf_counter()
    array = scene.array
    at = array.reference_channel if channel is None else channel
    if not 0 <= at < array.channels:
        raise InputError(f"channel {at}: the array has 0 to {array.channels - 1}")
    signal = _excerpt(scene, 0.0, min(scene.recording.duration_s, LONGEST_TAKE_S))[at]
    tone_hz, power = find_tone(signal, scene.sample_rate, where=f"{scene.title}, channel {at}")
    full = full_scale_db_spl(power, tone_db_spl, float(array.gain_db[at] - array.gain_db[array.reference_channel]))
    return Calibration(
        array=replace(array, full_scale_db_spl=full),
        before=array,
        method="tone",
        tone_hz=tone_hz,
        wall_time_s=time.perf_counter() - began,
    )


def measure_responses(
    scenes: Scene | Sequence[Scene], sweep: Floats, sweep_rate: int, *, window_s: float = 0.004
) -> Calibration:
    """Responses of the array from a sweep played at known bearings, one take each.

    sweep     (samples,) as it was played; resampled to the recordings' rate
    window_s  how much behind the earliest direct sound is kept as the array's own

    `Calibration.responses` are the windowed responses, `measured` T20 and direct-to-reverberant ratio of the whole.

    Raises InputError when a take does not hold the sweep or its source has no bearing.
    """
    began = time.perf_counter()
    given = _same_array([scenes] if isinstance(scenes, Scene) else list(scenes))
    array, rate = given[0].array, given[0].sample_rate
    played = resample(sweep[None], sweep_rate, rate)[0]
    takes = [take for scene in given for take in _takes(scene)]
    taps, rows = [], []
    for take in takes:
        response = measure_response(take.samples, played, rate, array.reference_channel, where=take.where)
        taps.append(windowed(response, rate, window_s))
        rows.append(
            MeasuredTake(
                take.name, float(np.degrees(take.seat.azimuth)), float(np.degrees(take.seat.elevation)),
                response.t20_s, response.drr_db, response.undefined,
            )
        )  # fmt: skip
    seats = [t.seat for t in takes]
    loudest = max(float(np.abs(t).max()) for t in taps)
    responses = Responses(
        taps=np.stack(taps) / loudest,
        sample_rate=float(rate),
        azimuth=np.array([s.azimuth for s in seats]),
        elevation=np.array([s.elevation for s in seats]),
        distance_m=np.array([s.distance_m or 1.0 for s in seats]),
        positions_m=array.positions_m,
        title=array.title or given[0].title,
    )
    return Calibration(
        array=replace(array, responses=responses),
        before=array,
        method="sweep",
        responses=responses,
        measured=tuple(rows),
        wall_time_s=time.perf_counter() - began,
    )


def put_on_one_clock(scene: Scene, path: str | Path, *, overwrite: bool = False) -> tuple[Scene, list[ClockReport]]:
    """Write the recording with every channel on the reference's clock and at its time; the scene that reads it.

    Channels that agree already are copied. Raises FileError when the file exists and `overwrite` is not given.
    """
    path = Path(path)
    reference = scene.array.reference_channel
    clocks = _refined(scene.recording, reference, scene)
    with write_aside(path, overwrite=overwrite) as aside:
        recording = scene.recording
        with AudioWriter(aside, recording.sample_rate, scene.array.channels, expect=recording.samples) as writer:
            for chunk in one_clock(recording, clocks, reference):
                writer.write(chunk)
    reports = [ClockReport(m, c.delay_s, c.drift_ppm, c.drift_std_ppm) for m, c in enumerate(clocks) if c is not None]
    return replace(scene, recording=Recording.open([path])), reports


def _refined(recording: Recording | Samples, reference: int, scene: Scene) -> list[ClockFit | None]:
    """Clocks that are off, measured again on what their correction makes of the recording."""
    clocks = measure_clocks(recording, reference)
    off = unsynchronised(clocks, scene)
    clocks = [c if late else None for c, late in zip(clocks, off, strict=True)]
    if not off.any():
        return clocks
    expected = _expected_delays(scene)
    clocks = [None if c is None else replace(c, delay_s=c.delay_s - expected[m]) for m, c in enumerate(clocks)]
    for _ in range(_ROUNDS - 1):
        meter = ClockMeter(reference, recording.sample_rate, recording.samples, 4 * recording.sample_rate)
        for chunk in one_clock(recording, clocks, reference):
            meter.add(chunk)
        clocks = [
            None if c is None else c if d is None else _together(c, replace(d, delay_s=d.delay_s - expected[m]))
            for m, (c, d) in enumerate(zip(clocks, meter.fits(len(clocks)), strict=True))
        ]
    return clocks


def _expected_delays(scene: Scene) -> Floats:
    """Delays that the one source of a take has by the geometry; zero when there are several, who average out."""
    if len(scene.talkers) != 1 or scene.talkers[0].azimuth is None:
        return np.zeros(scene.array.channels)
    source = scene.talkers[0]
    distance = np.nan if source.distance_m is None else source.distance_m
    paths = paths_from_bearings(
        scene.array, [source.azimuth or 0.0], [source.elevation], [distance], temperature_c=scene.temperature_c
    )
    return np.asarray(paths.delay_s[0])


def _together(first: ClockFit, then: ClockFit) -> ClockFit:
    """A clock's fit with the fit of what its correction left."""
    at = then.delay_s + 1e-6 * then.drift_ppm * (first.middle_s - then.middle_s)
    return replace(
        first, delay_s=first.delay_s + at, drift_ppm=first.drift_ppm + then.drift_ppm,
        drift_std_ppm=then.drift_std_ppm, spread_s=then.spread_s,
    )  # fmt: skip


def _same_array(scenes: list[Scene]) -> list[Scene]:
    if not scenes:
        raise InputError("no scene was given")
    first = scenes[0]
    if first.array.responses is not None:
        raise InputError(
            f"{first.title}: calibration is against microphone positions; give an array file with `positions_m` "
            "instead of measured responses"
        )
    for scene in scenes[1:]:
        if scene.array.positions_m.shape != first.array.positions_m.shape or not np.allclose(
            scene.array.positions_m, first.array.positions_m, atol=1e-6
        ):
            raise InputError(f"{scene.title}: another array than {first.title}; calibrate one array at a time")
        if scene.sample_rate != first.sample_rate:
            raise InputError(f"{scene.title}: {scene.sample_rate} Hz, but {first.title} has {first.sample_rate} Hz")
        if scene.array.reference_channel != first.array.reference_channel:
            raise InputError(f"{scene.title}: another reference channel than {first.title}; make them agree")
    return scenes


def _refuse_drift(scene: Scene) -> None:
    for channel, clock in enumerate(measure_clocks(scene.recording, scene.array.reference_channel)):
        if clock is not None and drifts(clock, scene):
            raise InputError(
                f"{scene.title}: channel {channel} runs on another clock ({clock.drift_ppm:+.1f} ppm); resample it "
                "first (--repaired FILE), or record with one recorder"
            )


def _takes(scene: Scene) -> list[_Take]:
    """Each talker of the scene, alone in the recording or in their stretches."""
    talkers = scene.talkers
    if not talkers:
        raise InputError(f"{scene.title}: no [[talker]] says where the source was; give azimuth_deg (and distance_m)")
    for talker in talkers:
        if talker.azimuth is None:
            raise InputError(f"{scene.title}: source {talker.name!r} has no bearing; give azimuth_deg, at rest")
        if talker.active_s is None and len(talkers) > 1:
            raise InputError(
                f"{scene.title}: {len(talkers)} sources and no `active_s` for {talker.name!r}; a take has one source: "
                "give each the stretches in which it plays alone, or a scene of its own"
            )
    _check_apart(scene)
    return [_take(scene, talker) for talker in talkers]


def _check_apart(scene: Scene) -> None:
    spans = sorted((a, b, t.name) for t in scene.talkers for a, b in t.active_s or [])
    for (_, stop, first), (start, _, second) in pairwise(spans):
        if start < stop and first != second:
            raise InputError(
                f"{scene.title}: {first!r} and {second!r} both play at {start:g} s; a take has one source: record them "
                "one after the other"
            )


def _take(scene: Scene, talker: Talker) -> _Take:
    stretches = talker.active_s or [(0.0, scene.recording.duration_s)]
    parts = [_excerpt(scene, a, min(b, scene.recording.duration_s)) for a, b in stretches]
    samples = np.concatenate(parts, axis=1)[:, : round(LONGEST_TAKE_S * scene.sample_rate)]
    where = f"{scene.title}, take {talker.name!r}"
    if samples.shape[1] < SHORTEST_TAKE_S * scene.sample_rate:
        raise InputError(f"{where}: lasts {samples.shape[1] / scene.sample_rate:.2f} s; give at least a second")
    return _Take(talker.name, Seat(talker.azimuth or 0.0, talker.elevation, talker.distance_m), samples, where)


def _excerpt(scene: Scene, start_s: float, stop_s: float) -> Floats:
    recording, rate = scene.recording, scene.sample_rate
    start, stop = round(start_s * rate), min(round(stop_s * rate), recording.samples)
    if stop <= start:
        raise InputError(f"{scene.title}: stretch {start_s:g} to {stop_s:g} s lies beyond the recording")
    if isinstance(recording, Samples):
        return recording.signals[:, start:stop]
    return replace(recording, start=recording.start + start, stop=recording.start + stop).read()


def _reflections(reports: Sequence[TakeReport]) -> list[str]:
    bent = [r.name for r in reports if r.misfit > 9.0]
    if not bent:
        return []
    return [
        f"reflections bend the phase of {', '.join(bent)}, and are most of the deviations: record closer, in the open, "
        "or between absorbers"
    ]
