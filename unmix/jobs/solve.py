"""The main job: a scene in, one signal per talker out.

    look at the recording -> find who is where -> delays -> separator -> talkers, chunk by chunk -> what was done

References are never opened here: what a real recording lacks must not help.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError, UnmixWarning
from unmix.files import folder_aside, path_from, write_json
from unmix.health import ChannelHealth
from unmix.jobs.reverberant import room_stage
from unmix.jobs.solution import Memory, Sink, Solution, TalkerFiles, describe
from unmix.model.delays import Paths
from unmix.model.noise import Spectra
from unmix.scene import Scene, Talker
from unmix.solvers.assemble import assemble
from unmix.solvers.streaming import run
from unmix.variant import DEFAULT, Variant, load_variant

__all__ = ["solve", "solve_to_folder"]

Floats = NDArray[np.float64]
Progress = Callable[[float], None]

SHORTEST_S = 0.1
POSITIONS_ALONE = (
    "bearings were found from the microphones' positions as if in free air, not from the measured responses: give "
    "`azimuth_deg`"
)


def solve(scene: Scene, variant: str | Path | Variant = DEFAULT, *, progress: Progress | None = None) -> Solution:
    """Separate the talkers of a scene; the signals stay in memory.

    scene     a recording with its array; talkers without a bearing are located first
    variant   a preset's name, a variant file or a `Variant`
    progress  called with the share done, 0 to 1

    Returns a `Solution` whose `signals` are (talkers, samples), as received at the reference microphone. Raises
    InputError, FileError or UnsolvableError with one line that says what to do.
    """
    return _solve(scene, load_variant(variant), Memory(), progress)


def solve_to_folder(
    scene: Scene,
    out: str | Path,
    variant: str | Path | Variant = DEFAULT,
    *,
    overwrite: bool = False,
    progress: Progress | None = None,
) -> Solution:
    """Separate the talkers of a scene into a folder: one 32-bit float WAV file per talker and `solution.json`.

    Memory does not grow with the recording. Files are written aside and appear together when all is done. Raises as
    `solve` does, and FileError when the folder cannot be written or a file in it would be replaced without `overwrite`.
    """
    out = Path(out)
    chosen = load_variant(variant)
    with folder_aside(out, overwrite=overwrite, expect=["solution.json"]) as aside:
        solution = replace(_solve(scene, chosen, TalkerFiles(aside), progress), scene=path_from(out, scene.path))
        write_json(aside / "solution.json", solution.to_dict())
    return solution


def _solve(scene: Scene, variant: Variant, sink: Sink, progress: Progress | None) -> Solution:
    began = time.perf_counter()
    _check_length(scene)
    scene, found = _located(scene)
    paths = paths_of(scene, variant)
    spectra = _spectra(scene, variant)
    assembly = assemble(
        variant,
        paths,
        scene.array,
        sample_rate=scene.sample_rate,
        temperature_c=scene.temperature_c,
        spectra=spectra,
    )
    room = room_stage(scene, variant, paths, spectra, assembly.separator) if variant.room is not None else None
    health = ChannelHealth(len(scene.recording.channels))
    sink.open([t.name for t in scene.talkers], scene.sample_rate, scene.recording.samples)
    done = 0
    for talkers in run(room or assembly.separator, _watched(scene, health)):
        sink.write(talkers)
        done += talkers.shape[1]
        if progress is not None:
            progress(done / scene.recording.samples)
    stored = sink.close()
    report = room.report() if room is not None else None
    findings = [*found, *health.findings()]
    solution = describe(scene, variant, assembly, report, stored, findings, time.perf_counter() - began)
    for line in solution.warnings:
        warnings.warn(line, UnmixWarning, stacklevel=3)
    return solution


def _check_length(scene: Scene) -> None:
    if scene.recording.duration_s < SHORTEST_S:
        raise InputError(
            f"{scene.title}: the recording lasts {scene.recording.duration_s * 1e3:.0f} ms; at least "
            f"{SHORTEST_S * 1e3:.0f} ms are needed"
        )


def _located(scene: Scene) -> tuple[Scene, tuple[str, ...]]:
    """The scene with a bearing for every talker and the orientation on its clock, and what is to be known of both.

    Located from the recording where the scene does not say. A talker who cannot be found is left out, by name.
    """
    if scene.talkers and all(t.located for t in scene.talkers):
        return _on_one_clock(scene)
    from unmix.jobs.locate import locate_quietly

    located = locate_quietly(scene)
    filled = located.scene_with_bearings()
    placed = tuple(t for t in filled.talkers if t.located)
    if not placed:
        raise InputError(f"{scene.title}: no talker was found in the recording; check it, or give `azimuth_deg`")
    heads = () if scene.array.responses is None else (POSITIONS_ALONE,)
    return replace(filled, talkers=placed), (*located.warnings, *heads)


def _on_one_clock(scene: Scene) -> tuple[Scene, tuple[str, ...]]:
    if scene.orientation is None:
        return scene, ()
    from unmix.jobs.locate import clock_offset

    offset_s, notes = clock_offset(scene)
    return replace(scene, clock_offset_s=offset_s), notes


def paths_of(scene: Scene, variant: Variant) -> Paths:
    """Delays and gains of the scene's talkers, over time when a talker moves or the array turns."""
    from unmix.model.delays import paths_from_bearings

    if scene.array.responses is not None:
        return _measured_paths(scene)
    plane = variant.model.wave == "plane"
    if all(t.track is None for t in scene.talkers) and scene.orientation is None:
        distance = [np.nan if plane or t.distance_m is None else t.distance_m for t in scene.talkers]
        return paths_from_bearings(
            scene.array,
            [t.azimuth or 0.0 for t in scene.talkers],
            [t.elevation for t in scene.talkers],
            distance,
            temperature_c=scene.temperature_c,
        )
    time_s = _knots(scene)
    columns = [_bearing_over_time(t, time_s) for t in scene.talkers]
    azimuth, elevation, distance_m = (np.stack([c[i] for c in columns], axis=1) for i in range(3))
    offset = scene.clock_offset_s if isinstance(scene.clock_offset_s, float) else 0.0
    return paths_from_bearings(
        scene.array,
        azimuth,
        elevation,
        np.full_like(distance_m, np.nan) if plane else distance_m,
        time_s=time_s,
        rotation=None if scene.orientation is None else scene.orientation.matrices(time_s + offset),
        temperature_c=scene.temperature_c,
    )


def _measured_paths(scene: Scene) -> Paths:
    """Paths from the array's measured responses; everything must be at rest."""
    from unmix.model.measured import paths_from_responses

    if scene.orientation is not None or any(t.track is not None for t in scene.talkers):
        raise InputError(
            f"{scene.title}: measured responses are used for talkers and arrays at rest; give bearings instead of "
            "tracks, or an array file with positions"
        )
    azimuth = np.array([t.azimuth or 0.0 for t in scene.talkers])
    elevation = np.array([t.elevation for t in scene.talkers])
    return paths_from_responses(scene.array, azimuth, elevation, sample_rate=scene.sample_rate)


KNOT_S = 0.01
"""Spacing of the instants at which moving delays are computed; linear in between."""


def _knots(scene: Scene) -> Floats:
    duration = scene.recording.duration_s
    return np.linspace(0.0, duration, max(2, round(duration / KNOT_S) + 1))


def _bearing_over_time(talker: Talker, time_s: Floats) -> tuple[Floats, Floats, Floats]:
    if talker.track is not None:
        return talker.track.at(time_s)
    distance = np.nan if talker.distance_m is None else talker.distance_m
    return (
        np.full_like(time_s, talker.azimuth or 0.0),
        np.full_like(time_s, talker.elevation),
        np.full_like(time_s, distance),
    )


def _spectra(scene: Scene, variant: Variant) -> Spectra | None:
    """The recording's covariance, in a pass of its own where the noise model asks for one."""
    kind = variant.solver.noise if variant.separator == "model" else "white"
    if kind in ("white", "diffuse"):
        return None
    spectra = Spectra(scene.array.channels)
    rate, at = scene.sample_rate, 0
    for chunk in scene.recording.chunks():
        if kind == "measured":
            for start, stop in scene.noise_only_s:
                first, last = round(start * rate) - at, round(stop * rate) - at
                if last > 0 and first < chunk.shape[1]:
                    spectra.add(chunk[:, max(first, 0) : last])
                    if last <= chunk.shape[1]:
                        spectra.break_off()
        else:
            spectra.add(chunk)
        at += chunk.shape[1]
    return spectra if kind != "measured" or scene.noise_only_s else None


def _watched(scene: Scene, health: ChannelHealth) -> Iterator[Floats]:
    """The recording's chunks, looked at on their way."""
    for chunk in scene.recording.chunks():
        health.add(chunk)
        yield chunk
