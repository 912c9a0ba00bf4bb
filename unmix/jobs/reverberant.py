"""Puts the room stage behind the model: what the model knows of the talkers, at the stage's frequencies."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.model.delays import Paths
from unmix.model.noise import Spectra
from unmix.physics import speed_of_sound
from unmix.room.stage import Look, RoomStage, Turned
from unmix.scene import Scene
from unmix.solvers.baselines import steering
from unmix.solvers.pose import pose
from unmix.solvers.stationary import solution_response
from unmix.solvers.streaming import Separator
from unmix.variant import Variant

__all__ = ["room_stage"]

Floats = NDArray[np.float64]


def room_stage(
    scene: Scene,
    variant: Variant,
    paths: Paths,
    spectra: Spectra | None,
    model: Separator,
    *,
    workers: int | None = None,
) -> RoomStage:
    """The room stage of a variant, started segment by segment from the model's own solution.

    While something moves, a segment takes the paths as they are in its middle. ``model`` separates what a segment
    falls back to.
    """
    if variant.room is None:
        raise ValueError("the variant has no room stage")

    def look(frequencies_hz: Floats, start_s: float, stop_s: float) -> Look:
        still = paths.still(0.5 * (start_s + stop_s))
        omega = np.asarray(2.0 * np.pi * frequencies_hz / scene.sample_rate)
        posed = pose(
            variant,
            still,
            scene.array,
            sample_rate=scene.sample_rate,
            temperature_c=scene.temperature_c,
            spectra=spectra,
        )
        return Look(solution_response(posed.problem, omega), steering(still, omega, scene.sample_rate))

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


def _turned(scene: Scene, paths: Paths) -> Turned:
    """How far bearings turn, read off the delays: turning by x moves them by up to 2 sin(x / 2) times the aperture."""
    aperture_s = float(np.ptp(scene.array.positions_m, axis=0).max()) / speed_of_sound(scene.temperature_c)

    def turned(start_s: float, stop_s: float) -> float:
        delay, _ = paths.at(np.linspace(start_s, stop_s, 9))
        spread = np.ptp(delay, axis=0).max()
        return float(np.degrees(2.0 * np.arcsin(min(1.0, spread / max(aperture_s, 1e-9)))))

    return turned
