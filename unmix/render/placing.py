"""From a spec to microphones, seats and room, with everything checked that can be wrong about places."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array, ArrayFile
from unmix.errors import InputError
from unmix.physics import speed_of_sound
from unmix.render.faults import Faults
from unmix.render.room import Room, build_room
from unmix.render.seats import Seat
from unmix.render.sources import Material
from unmix.render.spec import RenderSpec
from unmix.track import Orientation, Track

__all__ = ["check_channels", "check_names", "spec_array", "spec_room", "spec_seats"]

Floats = NDArray[np.float64]


def spec_array(spec: RenderSpec, base: Path) -> Array:
    """The array that the spec names or holds. Raises InputError or FileError naming the key or the file."""
    table = spec.array
    if (table.file is None) == (table.positions_m is None):
        raise InputError("[array] needs `file` or `positions_m`, one of the two")
    if table.file is not None:
        content = Array.load(base / table.file).to_file()
    else:
        content = ArrayFile(positions_m=table.positions_m or [])
    if table.reference_channel is not None:
        content.reference_channel = table.reference_channel
    return Array.from_file(content, where="[array]")


def check_names(spec: RenderSpec, given: Mapping[str, object]) -> None:
    """Raise InputError when talkers share a name, or a clip is given for somebody who is not in the spec."""
    names = [talker.name for talker in spec.talker]
    for index, name in enumerate(names):
        if name in names[:index]:
            raise InputError(f"key `talker[{index}].name`: two talkers are called {name!r}; rename one")
    for name in given:
        if name not in names:
            raise InputError(f"there is no talker {name!r} in the spec; it has {', '.join(names)}")


def check_channels(spec: RenderSpec, materials: list[Material], array: Array, faults: Faults) -> None:
    """Raise InputError when takes, responses or faults have another number of channels than the array."""
    for index, material in enumerate(materials):
        for key, rows in (("take", material.sound if material.take else None), ("responses", material.responses)):
            if rows is None:
                continue
            if len(rows) != array.channels:
                raise InputError(
                    f"key `talker[{index}].{key}`: {len(rows)} channels, but the array has {array.channels} microphones"
                )
            if faults.position_m.any():
                raise InputError(
                    f"key `faults.position_m`: positions cannot be moved in what was recorded (talker[{index}].{key})"
                )


def spec_seats(
    spec: RenderSpec,
    materials: list[Material],
    tracks: tuple[Track | None, ...],
    mics_m: Floats,
    orientation: Orientation | None,
) -> list[Seat | None]:
    """Where each rendered talker sits; None for those that were recorded."""
    centre = _centre(spec)
    seats: list[Seat | None] = []
    for index, (talker, material, track) in enumerate(zip(spec.talker, materials, tracks, strict=True)):
        if material.take or material.responses is not None:
            seats.append(None)
            continue
        key = f"talker[{index}]"
        if track is None:
            raise InputError(f"key `{key}`: {talker.name!r} has no place; give azimuth_deg (and distance_m) or track")
        seat = Seat(centre, mics_m, track, orientation)
        if seat.plane and spec.room is not None:
            raise InputError(
                f"key `{key}.distance_m`: a plane wave has no place in a room; give the distance in metres"
            )
        _check_place(seat, spec, key, talker.name)
        seats.append(seat)
    return seats


def _centre(spec: RenderSpec) -> Floats:
    if spec.array.centre_m is not None:
        return np.array(spec.array.centre_m, dtype=np.float64)
    if spec.room is None:
        return np.zeros(3)
    # Off the middle, where the modes of all three axes have their nodes.
    x, y, z = spec.room.size_m
    return np.array([0.47 * x, 0.45 * y, min(1.2, 0.5 * z)])


def _check_place(seat: Seat, spec: RenderSpec, key: str, name: str) -> None:
    if seat.plane:
        return
    times = seat.track.time_s
    if seat.orientation is not None:
        times = np.union1d(times, seat.orientation.time_s)
    source, mics = seat.source(times), seat.microphones(times)
    nearest = float(np.linalg.norm(source[:, None] - mics, axis=-1).min())
    if nearest < 0.01:
        raise InputError(f"key `{key}`: {name!r} is {1000 * nearest:.0f} mm from a microphone; keep 10 mm away")
    if spec.room is None:
        return
    size = np.array(spec.room.size_m)
    for what, places, where in (("microphones", mics.reshape(-1, 3), "array.centre_m"), (repr(name), source, key)):
        outside = ~np.all((places > 0.01) & (places < size - 0.01), axis=1)
        if outside.any():
            place = ", ".join(f"{v:.2f}" for v in places[np.argmax(outside)])
            raise InputError(
                f"key `{where}`: {what} would be at ({place}) m, outside the room of "
                f"{' x '.join(f'{v:g}' for v in size)} m"
            )


def spec_room(spec: RenderSpec, seats: list[Seat | None], reference: int, duration_s: float) -> Room | None:
    """The room around the seats, its walls set for the reverberation time asked for; None without one."""
    seated = [(k, seat) for k, seat in enumerate(seats) if seat is not None]
    if spec.room is None or not seated:
        return None
    if (spec.room.t20_s is None) == (spec.room.absorption is None):
        raise InputError("[room] needs `t20_s` or `absorption`, one of the two")
    middle = np.array([0.5 * duration_s])
    return build_room(
        np.array(spec.room.size_m),
        speed_m_s=speed_of_sound(spec.temperature_c),
        t20_s=spec.room.t20_s,
        absorption=None if spec.room.absorption is None else np.array(spec.room.absorption),
        sources_m={k: seat.source(middle)[0] for k, seat in seated},
        mic_m=seated[0][1].microphones(middle)[0, reference],
        sample_rate=spec.sample_rate,
        jitter_m=spec.room.jitter_m,
        seed=spec.seed,
        high_pass_hz=spec.room.high_pass_hz,
    )
