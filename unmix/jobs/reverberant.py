"""Puts the room stage behind the model: what the model knows of the talkers, at the stage's frequencies."""

from __future__ import annotations

from dataclasses import replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.model.delays import Paths
from unmix.model.noise import Spectra
from unmix.physics import speed_of_sound
from unmix.room.causal import Aligned, asks_for_causal, causal_stage
from unmix.room.chain import Look
from unmix.room.stage import RoomStage, Turned
from unmix.scene import Scene
from unmix.solvers.baselines import steering
from unmix.solvers.pose import pose
from unmix.solvers.stationary import solution_response
from unmix.solvers.streaming import Separator
from unmix.variant import Variant

__all__ = ["look_of", "room_stage"]

Floats = NDArray[np.float64]

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

    rate, settings = scene.sample_rate, variant.room
    known = partial(
        look_of,
        variant,
        array=scene.array,
        sample_rate=rate,
        temperature_c=scene.temperature_c,
        spectra=spectra,
    )
    if asks_for_causal(settings):
        stage = causal_stage(
            settings,
            lambda frequencies_hz: known(paths.still(0.0), frequencies_hz),
            sample_rate=rate,
            channels=scene.array.channels,
            reference=scene.array.reference_channel,
        )
        where = (lambda time_s: known(paths.still(time_s), stage.frequencies_hz)) if paths.moving else None
        return Aligned(stage, sample_rate=rate, where=where)

    def look(frequencies_hz: Floats, start_s: float, stop_s: float) -> Look:
        middle = known(paths.still(0.5 * (start_s + stop_s)), frequencies_hz)
        if not paths.moving:
            return middle
        times = start_s + (np.arange(_COURSE) + 0.5) / _COURSE * (stop_s - start_s)
        omega = _omega(frequencies_hz, rate)
        return replace(middle, course=tuple(steering(paths.still(float(t)), omega, rate) for t in times))

    return RoomStage(
        settings,
        model=model,
        sample_rate=rate,
        channels=scene.array.channels,
        talkers=paths.talkers,
        reference=scene.array.reference_channel,
        look=look,
        turned=_turned(scene, paths) if paths.moving else None,
        workers=workers,
    )


def look_of(
    variant: Variant,
    paths: Paths,
    frequencies_hz: Floats,
    *,
    array: Array,
    sample_rate: int,
    temperature_c: float,
    spectra: Spectra | None,
) -> Look:
    """The constrained solution's rows and the bearings' responses of paths at rest, at frequencies in hertz."""
    omega = _omega(frequencies_hz, sample_rate)
    posed = pose(variant, paths, array, sample_rate=sample_rate, temperature_c=temperature_c, spectra=spectra)
    return Look(solution_response(posed.problem, omega), steering(paths, omega, sample_rate))


def _omega(frequencies_hz: Floats, sample_rate: float) -> Floats:
    return np.asarray(2.0 * np.pi * frequencies_hz / sample_rate)


def _turned(scene: Scene, paths: Paths) -> Turned:
    """How far bearings turn, read off the delays: turning by x moves them by up to 2 sin(x / 2) times the aperture."""
    aperture_s = float(np.ptp(scene.array.positions_m, axis=0).max()) / speed_of_sound(scene.temperature_c)

    def turned(start_s: float, stop_s: float) -> float:
        delay, _ = paths.at(np.linspace(start_s, stop_s, 9))
        spread = np.ptp(delay, axis=0).max()
        return float(np.degrees(2.0 * np.arcsin(min(1.0, spread / max(aperture_s, 1e-9)))))

    return turned
