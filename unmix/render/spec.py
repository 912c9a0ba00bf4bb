"""The rendering spec: what to build, as strict TOML. Each field carries its meaning, range and default.

A spec without a `[room]` table is anechoic. Paths are relative to the file they stand in.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Literal

import msgspec
import numpy as np
from msgspec import Meta

from unmix.errors import InputError
from unmix.files import convert_tree, read_toml

__all__ = ["ArraySpec", "FaultSpec", "NoiseSpec", "RenderSpec", "RoomSpec", "TalkerSpec"]

Triple = Annotated[list[float], Meta(min_length=3, max_length=3)]
Share = Annotated[float, Meta(gt=0.0, le=1.0)]
Level = Annotated[float, Meta(ge=-120.0, le=0.0)]


class _Strict(msgspec.Struct, forbid_unknown_fields=True, omit_defaults=True):
    pass


class RoomSpec(_Strict, kw_only=True):
    """`[room]`: a box with its corner at (0, 0, 0). Left out: no room, direct sound only."""

    size_m: Annotated[
        list[Annotated[float, Meta(ge=1.0, le=100.0)]],
        Meta(min_length=3, max_length=3, description="length (x), width (y), height (z)"),
    ]
    t20_s: Annotated[
        Annotated[float, Meta(ge=0.05, le=5.0)] | None,
        Meta(description="reverberation time to be measured at the seats; the walls are set for it"),
    ] = None
    absorption: Annotated[
        Share | Annotated[list[Share], Meta(min_length=6, max_length=6)] | None,
        Meta(description="energy the walls absorb, instead of t20_s: one value, or x=0, x=L, y=0, y=L, z=0, z=L"),
    ] = None
    jitter_m: Annotated[
        float, Meta(ge=0.0, le=0.5, description="largest random displacement of image sources along each axis")
    ] = 0.08
    high_pass_hz: Annotated[
        float,
        Meta(
            ge=0.0, le=200.0, description="high-pass on every clip: image sources pile up pressure near 0 Hz; 0: none"
        ),
    ] = 40.0


class ArraySpec(_Strict, kw_only=True):
    """`[array]`: the microphones, and where their origin stands in the room."""

    file: Annotated[str | None, Meta(description="array file (TOML); or positions_m")] = None
    positions_m: Annotated[list[Triple] | None, Meta(description="microphone positions from the array's origin")] = None
    reference_channel: Annotated[
        Annotated[int, Meta(ge=0)] | None,
        Meta(description="microphone at which references are received; default: the array file's, else 0"),
    ] = None
    centre_m: Annotated[
        Triple | None, Meta(description="the array's origin in the room; default: near the middle, 1.2 m up")
    ] = None
    orientation: Annotated[
        str | None, Meta(description="the array turns: CSV with time_s, qw, qx, qy, qz, array to world")
    ] = None


class TalkerSpec(_Strict, kw_only=True):
    """`[[talker]]`: one talker; give `clip`, or `clip` and `responses`, or `take`."""

    name: Annotated[str, Meta(min_length=1, description="name, unique in the scene")]
    clip: Annotated[str | None, Meta(description="dry speech, one channel, any sample rate")] = None
    responses: Annotated[
        str | None, Meta(description="measured responses, one channel per microphone, that the clip goes through")
    ] = None
    take: Annotated[
        str | None, Meta(description="this talker recorded alone on the array, one channel per microphone")
    ] = None
    azimuth_deg: Annotated[
        Annotated[float, Meta(ge=-360.0, le=360.0)] | None,
        Meta(description="bearing, counter-clockwise from the front, from the array's origin"),
    ] = None
    elevation_deg: Annotated[float, Meta(ge=-90.0, le=90.0, description="bearing, upwards")] = 0.0
    distance_m: Annotated[
        Annotated[float, Meta(ge=0.02, le=1000.0)] | None,
        Meta(description="from the array's origin; left out: plane wave, without a room only"),
    ] = None
    track: Annotated[
        str | None, Meta(description="the talker moves: CSV with time_s, azimuth_deg, elevation_deg, distance_m")
    ] = None
    level_db: Annotated[
        Level, Meta(description="RMS at the reference microphone while the clip lasts, relative to full scale")
    ] = -26.0
    start_s: Annotated[float, Meta(ge=0.0, description="when the clip starts")] = 0.0
    loop: Annotated[bool, Meta(description="repeat the clip until the end of the scene")] = False


class NoiseSpec(_Strict, kw_only=True):
    """`[noise]`: levels say how far the quietest talker lies above the noise, both RMS at the reference microphone."""

    sensor_snr_db: Annotated[
        Annotated[float, Meta(ge=-20.0, le=120.0)] | None,
        Meta(description="white noise of each microphone, independent and equally strong; default: none"),
    ] = None
    diffuse_snr_db: Annotated[
        Annotated[float, Meta(ge=-20.0, le=120.0)] | None,
        Meta(description="noise from all directions alike (spherically isotropic); default: none"),
    ] = None
    diffuse_spectrum: Annotated[
        Literal["white", "speech"],
        Meta(description="spectrum of the diffuse noise: white, or the long-term average of speech"),
    ] = "speech"
    file: Annotated[
        str | None, Meta(description="recorded noise, one channel per microphone; repeated when too short")
    ] = None
    file_snr_db: Annotated[float, Meta(ge=-20.0, le=120.0, description="level of the recorded noise")] = 20.0


class FaultSpec(_Strict, kw_only=True):
    """`[faults]`: what is wrong with the hardware and not written into the array file. Lists hold a value per channel.

    Gain, delay and polarity act on everything a channel records, its noise included.
    """

    gain_db: Annotated[list[float] | None, Meta(description="gain of each channel")] = None
    delay_s: Annotated[list[float] | None, Meta(description="delay of each channel, of either sign")] = None
    polarity: Annotated[list[Literal[-1, 1]] | None, Meta(description="1, or -1 for a swapped connection")] = None
    position_m: Annotated[
        list[Triple] | None, Meta(description="true position minus the position in the array file")
    ] = None
    gain_std_db: Annotated[float, Meta(ge=0.0, le=20.0, description="standard deviation of further random gains")] = 0.0
    delay_std_s: Annotated[float, Meta(ge=0.0, le=0.01, description="standard deviation of further random delays")] = (
        0.0
    )
    position_std_m: Annotated[
        float, Meta(ge=0.0, le=0.1, description="standard deviation of further random displacements along each axis")
    ] = 0.0
    dead: Annotated[list[Annotated[int, Meta(ge=0)]], Meta(description="channels that record nothing")] = []
    clip_db: Annotated[
        Annotated[float, Meta(ge=-60.0, le=0.0)] | None,
        Meta(description="level at which samples clip, relative to full scale; default: nothing clips"),
    ] = None


class RenderSpec(_Strict, kw_only=True):
    """A scene to be rendered."""

    title: Annotated[str, Meta(description="title of the scene")] = ""
    duration_s: Annotated[
        Annotated[float, Meta(gt=0.0, le=7200.0)] | None,
        Meta(description="length of the scene; default: until the last clip has ended"),
    ] = None
    sample_rate: Annotated[int, Meta(ge=8000, le=192000, description="in hertz; clips are resampled")] = 16000
    seed: Annotated[int, Meta(ge=0, description="of noise, random faults and image displacements")] = 0
    temperature_c: Annotated[float, Meta(ge=-40.0, le=60.0, description="of the air")] = 20.0
    room: Annotated[RoomSpec | None, Meta(description="left out: no room")] = None
    array: ArraySpec
    talker: Annotated[list[TalkerSpec], Meta(min_length=1, description="the talkers")]
    noise: NoiseSpec = msgspec.field(default_factory=NoiseSpec)
    faults: FaultSpec = msgspec.field(default_factory=FaultSpec)
    path_step_m: Annotated[
        float,
        Meta(ge=0.002, le=0.2, description="distance moved between the reverberation tails that are cross-faded"),
    ] = 0.02
    write_bearings: Annotated[bool, Meta(description="whether the scene file says where the talkers are")] = True
    write_activity: Annotated[bool, Meta(description="whether the scene file says when the talkers speak")] = False
    write_images: Annotated[
        bool, Meta(description="also write each talker's image at all microphones (for leakage)")
    ] = False

    @classmethod
    def load(cls, path: str | Path) -> RenderSpec:
        """Read a spec from TOML. Raises FileError or InputError naming file, key and remedy."""
        return read_toml(Path(path), cls)

    def checked(self) -> RenderSpec:
        """The spec with plain numbers, all of them finite and within their ranges, also when it was built in Python.

        Raises InputError naming the key.
        """
        tree = msgspec.to_builtins(self, enc_hook=_plain)
        for key, value in _numbers(tree, ""):
            if not math.isfinite(value):
                raise InputError(f"key `{key}`: {value} is not a finite number")
        return convert_tree(tree, RenderSpec)


def _plain(value: object) -> object:
    """Numbers and arrays of NumPy's as Python's."""
    if isinstance(value, np.ndarray | np.generic):
        return value.tolist()
    raise InputError(f"{value!r} has no place in a rendering spec")


def _numbers(tree: object, key: str) -> Iterator[tuple[str, float]]:
    """All numbers in a tree of plain values, with the dotted key of each."""
    if isinstance(tree, dict):
        for name, value in tree.items():
            yield from _numbers(value, f"{key}.{name}" if key else str(name))
    elif isinstance(tree, list):
        for index, value in enumerate(tree):
            yield from _numbers(value, f"{key}[{index}]")
    elif isinstance(tree, float):
        yield key, tree
