"""What a spec's talkers are made of: clips, measured responses, takes, read and brought to one rate and length."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unmix.audio import read_audio, resample
from unmix.errors import InputError
from unmix.render.spec import RenderSpec, TalkerSpec
from unmix.track import Track

__all__ = ["Material", "load_material", "read_channels", "scene_samples", "talker_track"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Material:
    """One talker's sound at the scene's sample rate.

    ``sound`` is the dry clip (1, samples), or a take (channels, samples) where ``take`` is set; it starts at sample
    ``start`` of the scene. ``responses`` (channels, taps) where the clip goes through measured ones.
    """

    sound: Floats
    start: int
    loop: bool
    take: bool
    responses: Floats | None

    def placed(self, samples: int) -> Floats:
        """The sound where it belongs in a scene of ``samples``, silence about it: (rows, samples)."""
        out = np.zeros((len(self.sound), samples))
        room = samples - self.start
        sound = np.tile(self.sound, -(-room // self.sound.shape[1])) if self.loop else self.sound
        count = min(room, sound.shape[1])
        out[:, self.start : self.start + count] = sound[:, :count]
        return out

    def stretch(self, samples: int) -> slice:
        """Where the clip lasts in a scene of ``samples``."""
        stop = samples if self.loop else min(samples, self.start + self.sound.shape[1])
        return slice(self.start, stop)


def load_material(
    talker: TalkerSpec, index: int, spec: RenderSpec, base: Path, clips: Mapping[str, Floats]
) -> Material:
    """Read what one talker is made of; ``clips`` by name (samples,) stand in for files.

    Raises FileError or InputError naming file and key.
    """
    key = f"talker[{index}]"
    given = talker.name in clips
    if given and (talker.clip is not None or talker.take is not None):
        raise InputError(f"key `{key}`: {talker.name!r} has a clip in memory and a file; give one of them")
    if not given and (talker.clip is None) == (talker.take is None):
        raise InputError(f"key `{key}`: give `clip` (dry speech) or `take` (recorded alone on the array), one of them")
    if talker.take is not None and talker.responses is not None:
        raise InputError(f"key `{key}`: `responses` belong to a `clip`; a take has been through its room already")
    if given:
        sound, where = np.atleast_2d(np.asarray(clips[talker.name], dtype=np.float64)), f"clip of {talker.name!r}"
    else:
        path = base / str(talker.take or talker.clip)
        sound, where = read_channels(path, spec.sample_rate), str(path)
    if talker.take is None and len(sound) != 1:
        raise InputError(
            f"{where}: key `{key}.clip`: {len(sound)} channels; a dry clip has one: mix it down or cut one out"
        )
    if not np.any(sound):
        raise InputError(f"{where}: key `{key}`: the clip is silent; its level cannot be set")
    responses = None
    if talker.responses is not None:
        responses = read_channels(base / talker.responses, spec.sample_rate)
    return Material(sound, round(talker.start_s * spec.sample_rate), talker.loop, talker.take is not None, responses)


def read_channels(path: Path, sample_rate: int) -> Floats:
    """A file's channels at ``sample_rate``: (channels, samples)."""
    signals, rate = read_audio(path)
    return resample(signals, rate, sample_rate)


def scene_samples(spec: RenderSpec, materials: list[Material]) -> int:
    """Length of the scene in samples. Raises InputError when a talker starts behind its end."""
    if spec.duration_s is not None:
        samples = round(spec.duration_s * spec.sample_rate)
    else:
        samples = max(m.start + m.sound.shape[1] for m in materials)
    for index, (talker, material) in enumerate(zip(spec.talker, materials, strict=True)):
        if material.start >= samples:
            raise InputError(
                f"key `talker[{index}].start_s`: {talker.name!r} starts at {talker.start_s:g} s, behind the end of the "
                f"scene at {samples / spec.sample_rate:g} s"
            )
    return samples


def talker_track(talker: TalkerSpec, index: int, base: Path, tracks: Mapping[str, Track]) -> Track | None:
    """Where a talker is over time; None when the spec does not say (takes and measured responses need not)."""
    key = f"talker[{index}]"
    if talker.name in tracks or talker.track is not None:
        if talker.azimuth_deg is not None or talker.distance_m is not None:
            raise InputError(f"key `{key}`: both a track and a fixed bearing or distance are given; keep one")
        return tracks[talker.name] if talker.name in tracks else Track.load(base / str(talker.track))
    if talker.azimuth_deg is None:
        return None
    distance = np.nan if talker.distance_m is None else talker.distance_m
    return Track(
        time_s=np.zeros(1),
        azimuth=np.radians([talker.azimuth_deg]),
        elevation=np.radians([talker.elevation_deg]),
        distance_m=np.array([distance]),
    )
