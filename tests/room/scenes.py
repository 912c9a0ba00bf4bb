"""Scenes in rooms that several tests share: rendered once."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from tests.conftest import circle, speech
from unmix.render.compose import RenderedScene, render_scene
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Scene, Talker

RATE = 16000
VOICES = ("card-reader", "arctic-a0009", "novel-reader")
AZIMUTHS_DEG = (-25.0, 70.0, 160.0)


@lru_cache(maxsize=8)
def rendered(
    talkers: int, t20_s: float | None, seconds: float = 8.0, snr_db: float = 30.0, seed: int = 301
) -> RenderedScene:
    """So many talkers at a table in a room of 5.6 x 4.4 x 2.7 m."""
    spec = RenderSpec(
        duration_s=seconds,
        sample_rate=RATE,
        seed=seed,
        room=None if t20_s is None else RoomSpec(size_m=[5.6, 4.4, 2.7], t20_s=t20_s),
        array=ArraySpec(positions_m=circle().positions_m.tolist()),
        talker=[
            TalkerSpec(name=name, azimuth_deg=azimuth, distance_m=1.2)
            for name, azimuth in zip(VOICES[:talkers], AZIMUTHS_DEG, strict=False)
        ],
        noise=NoiseSpec(sensor_snr_db=snr_db),
    )
    return render_scene(spec, clips={name: speech(name, seconds) for name in VOICES[:talkers]})


def scene_of(made: RenderedScene, recording: np.ndarray | None = None, *, talkers: int | None = None) -> Scene:
    """What a job is given; ``talkers`` names fewer than there are."""
    named = [
        Talker(name, float(np.radians(azimuth)), 0.0, 1.2)
        for name, azimuth in zip(made.names, AZIMUTHS_DEG, strict=False)
    ]
    mixture = made.mixture if recording is None else recording
    return Scene.from_arrays(mixture, made.array, named[:talkers], sample_rate=RATE)
