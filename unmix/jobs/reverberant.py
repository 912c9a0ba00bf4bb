"""Puts the room stage behind the model: what the model knows of the talkers, at the stage's frequencies."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError
from unmix.model.delays import Paths
from unmix.model.noise import Spectra
from unmix.physics import speed_of_sound
from unmix.room.aligned import Aligned
from unmix.room.frames import RecursiveDereverberation
from unmix.room.low_latency import AdaptiveFilters, Bearings
from unmix.room.stage import Look, RoomStage, Turned
from unmix.room.stft import Complexes
from unmix.scene import Scene
from unmix.settings import RoomSettings
from unmix.solvers.baselines import steering
from unmix.solvers.pose import pose
from unmix.solvers.stationary import solution_response
from unmix.solvers.streaming import Separator
from unmix.variant import Variant

__all__ = ["room_stage"]

Floats = NDArray[np.float64]

Known = Callable[[Floats, float], Bearings]

_COURSE = 32
"""Parts of a segment in which a moving talker counts as standing still, when the segment is judged."""


def room_stage(
    scene: Scene,
    variant: Variant,
    paths: Paths,
    spectra: Spectra | None,
    model: Separator,
    *,
    workers: int | None = None,
) -> RoomStage | Aligned:
    """The room stage of a variant, started segment by segment from the model's own solution.

    While something moves, a segment takes the paths as they are in its middle. ``model`` separates what a segment
    falls back to.
    """
    if variant.room is None:
        raise ValueError("the variant has no room stage")

    known = partial(_known, scene, variant, paths, spectra)
    settings = variant.room
    if settings.low_latency is not None or (settings.prediction is not None and settings.prediction.recursive):
        return _causal(scene, settings, paths, known)

    def look(frequencies_hz: Floats, start_s: float, stop_s: float) -> Look:
        middle = known(frequencies_hz, 0.5 * (start_s + stop_s))
        omega = np.asarray(2.0 * np.pi * frequencies_hz / scene.sample_rate)
        course: tuple[Complexes, ...] = ()
        if paths.moving:
            times = start_s + (np.arange(_COURSE) + 0.5) / _COURSE * (stop_s - start_s)
            course = tuple(steering(paths.still(float(t)), omega, scene.sample_rate) for t in times)
        return Look(middle.rows, middle.responses, course)

    return RoomStage(
        variant.room,
        model=model,
        sample_rate=scene.sample_rate,
        channels=scene.array.channels,
        talkers=paths.talkers,
        reference=scene.array.reference_channel,
        look=look,
        turned=_turned(scene, paths) if paths.moving else None,
        workers=workers,
    )


def _known(
    scene: Scene, variant: Variant, paths: Paths, spectra: Spectra | None, frequencies_hz: Floats, time_s: float
) -> Bearings:
    """The constrained solution's rows and the bearings' responses at one time."""
    still = paths.still(time_s)
    omega = np.asarray(2.0 * np.pi * frequencies_hz / scene.sample_rate)
    posed = pose(
        variant,
        still,
        scene.array,
        sample_rate=scene.sample_rate,
        temperature_c=scene.temperature_c,
        spectra=spectra,
    )
    return Bearings(solution_response(posed.problem, omega), steering(still, omega, scene.sample_rate))


def _causal(scene: Scene, settings: RoomSettings, paths: Paths, known: Known) -> Aligned:
    """The forms that run frame by frame."""
    rate = scene.sample_rate

    def at_first(frequencies_hz: Floats) -> Bearings:
        return known(frequencies_hz, 0.0)

    stage: AdaptiveFilters | RecursiveDereverberation
    if settings.low_latency is not None:
        stage = AdaptiveFilters(settings, at_first, sample_rate=rate, reference=scene.array.reference_channel)
    elif settings.refinement is not None or settings.post is not None:
        raise InputError(
            'room.prediction.recursive runs frame by frame, refinement and post do not: start from base = "dereverb"'
        )
    else:
        stage = RecursiveDereverberation(settings, at_first, sample_rate=rate, channels=scene.array.channels)
    frequencies_hz = stage.frequencies_hz
    where = (lambda time_s: known(frequencies_hz, time_s)) if paths.moving else None
    return Aligned(stage, sample_rate=rate, where=where)


def _turned(scene: Scene, paths: Paths) -> Turned:
    """How far bearings turn, read off the delays: turning by x moves them by up to 2 sin(x / 2) times the aperture."""
    aperture_s = float(np.ptp(scene.array.positions_m, axis=0).max()) / speed_of_sound(scene.temperature_c)

    def turned(start_s: float, stop_s: float) -> float:
        delay, _ = paths.at(np.linspace(start_s, stop_s, 9))
        spread = np.ptp(delay, axis=0).max()
        return float(np.degrees(2.0 * np.arcsin(min(1.0, spread / max(aperture_s, 1e-9)))))

    return turned
