"""A scene in memory: mixture, images and references of every talker, and the truth about all of it."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array, ArrayFile
from unmix.errors import InputError, UnmixWarning
from unmix.physics import speed_of_sound
from unmix.render.faults import Faults, draw_faults
from unmix.render.noise import diffuse_noise, sensor_noise
from unmix.render.room import Room, build_room
from unmix.render.seats import Seat
from unmix.render.sound import Sound, sound_from_responses, sound_from_seat, sound_from_take
from unmix.render.sources import Material, load_material, read_channels, scene_samples, talker_track
from unmix.render.spec import NoiseSpec, RenderSpec
from unmix.track import Orientation, Track

__all__ = ["RenderedScene", "render_scene"]

Floats = NDArray[np.float64]

_PEAK = 0.99


@dataclass(frozen=True)
class RenderedScene:
    """A scene with known truth. Full scale is 1.

    mixture        (channels, samples), what the microphones recorded
    images         (talkers, channels, samples), each talker alone as recorded, without noise and clipping
    dry            (talkers, samples), direct sound alone at the reference microphone; NaN where it cannot be known
    early          (talkers, samples), up to 50 ms after the direct sound, likewise; NaN where it cannot be known
    noise          (channels, samples), all noise as recorded
    array          the array as its file says, without the faults
    tracks         bearings and distances by talker, None where the spec does not say
    t20_s, drr_db  per talker, measured on the responses at the reference microphone; None without reverberation
    absorption     of the six walls, None without a room
    scale_db       gain applied to the whole scene so that it stays within full scale; 0 when it did anyway
    clipped        number of clipped samples
    """

    names: tuple[str, ...]
    sample_rate: int
    mixture: Floats
    images: Floats
    dry: Floats
    early: Floats
    noise: Floats
    array: Array
    tracks: tuple[Track | None, ...]
    orientation: Orientation | None
    active_s: tuple[tuple[float, float], ...]
    t20_s: tuple[float | None, ...]
    drr_db: tuple[float | None, ...]
    absorption: Floats | None
    faults: Faults
    scale_db: float
    clipped: int
    temperature_c: float

    @property
    def image(self) -> Floats:
        """Each talker's image at the reference microphone: (talkers, samples)."""
        return self.images[:, self.array.reference_channel]


def render_scene(
    spec: RenderSpec,
    *,
    base: Path | str = ".",
    clips: Mapping[str, Floats] | None = None,
    tracks: Mapping[str, Track] | None = None,
    orientation: Orientation | None = None,
) -> RenderedScene:
    """Render ``spec`` without writing anything.

    Parameters
    ----------
    spec : RenderSpec
        What to render.
    base : path
        Folder that the spec's paths are relative to.
    clips : mapping, optional
        Dry speech by talker's name, (samples,) at the spec's sample rate, instead of files.
    tracks, orientation : optional
        Paths by talker's name and the array's turning, instead of files.

    Raises
    ------
    FileError, InputError
        Naming file, key and remedy.
    UnsolvableError
        The reverberation time asked for cannot be had in the room asked for.
    """
    base = Path(base)
    array = _array(spec, base)
    rng_faults, rng_sensor, rng_diffuse = (np.random.default_rng([spec.seed, stream]) for stream in (1, 2, 3))
    faults = draw_faults(spec.faults, array.channels, rng_faults)
    if orientation is None and spec.array.orientation is not None:
        orientation = Orientation.load(base / spec.array.orientation)
    _check_names(spec, {**(clips or {}), **(tracks or {})})
    materials = [load_material(t, k, spec, base, clips or {}) for k, t in enumerate(spec.talker)]
    _check_channels(spec, materials, array, faults)
    samples = scene_samples(spec, materials)
    where = tuple(talker_track(t, k, base, tracks or {}) for k, t in enumerate(spec.talker))
    seats = _seats(spec, materials, where, array.positions_m + faults.position_m, orientation)
    room = _room(spec, seats, array.reference_channel, samples / spec.sample_rate)

    sounds = []
    for index, (talker, material, seat) in enumerate(zip(spec.talker, materials, seats, strict=True)):
        sound = _sound(spec, index, material, seat, room, samples, array.reference_channel)
        sounds.append(
            _at_level(sound, talker.level_db, material.stretch(samples), array.reference_channel, talker.name)
        )
    noise = _noise(spec, base, sounds, materials, array, faults, samples, rng_sensor, rng_diffuse)
    return _assemble(spec, array, faults, sounds, noise, where, orientation, materials, room)


def _array(spec: RenderSpec, base: Path) -> Array:
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


def _check_names(spec: RenderSpec, given: Mapping[str, object]) -> None:
    names = [talker.name for talker in spec.talker]
    for index, name in enumerate(names):
        if name in names[:index]:
            raise InputError(f"key `talker[{index}].name`: two talkers are called {name!r}; rename one")
    for name in given:
        if name not in names:
            raise InputError(f"there is no talker {name!r} in the spec; it has {', '.join(names)}")


def _check_channels(spec: RenderSpec, materials: list[Material], array: Array, faults: Faults) -> None:
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


def _seats(
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


def _room(spec: RenderSpec, seats: list[Seat | None], reference: int, duration_s: float) -> Room | None:
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


def _sound(
    spec: RenderSpec,
    index: int,
    material: Material,
    seat: Seat | None,
    room: Room | None,
    samples: int,
    reference: int,
) -> Sound:
    placed = material.placed(samples)
    if material.take:
        return sound_from_take(placed)
    if material.responses is not None:
        return sound_from_responses(placed[0], material.responses, spec.sample_rate, reference)
    if seat is None:
        raise InputError(f"key `talker[{index}]`: has no place")
    return sound_from_seat(
        placed[0],
        seat,
        room,
        spec.sample_rate,
        speed_m_s=speed_of_sound(spec.temperature_c),
        reference=reference,
        source=index,
        path_step_m=spec.path_step_m,
    )


def _at_level(sound: Sound, level_db: float, stretch: slice, reference: int, name: str) -> Sound:
    rms = float(np.sqrt(np.mean(sound.image[reference, stretch] ** 2)))
    if rms == 0.0:
        raise InputError(f"talker {name!r}: nothing arrives at the reference microphone; its level cannot be set")
    return sound.scaled(10.0 ** (level_db / 20.0) / rms)


def _noise(
    spec: RenderSpec,
    base: Path,
    sounds: list[Sound],
    materials: list[Material],
    array: Array,
    faults: Faults,
    samples: int,
    rng_sensor: np.random.Generator,
    rng_diffuse: np.random.Generator,
) -> Floats:
    """All noise before the channels' faults; levels are relative to the quietest talker at the reference microphone."""
    table: NoiseSpec = spec.noise
    quietest = min(talker.level_db for talker in spec.talker)

    def rms(snr_db: float) -> float:
        return float(10.0 ** ((quietest - snr_db) / 20.0))

    total = np.zeros((array.channels, samples))
    if table.sensor_snr_db is not None:
        total += rms(table.sensor_snr_db) * sensor_noise(rng_sensor, array.channels, samples)
    if table.diffuse_snr_db is not None:
        total += rms(table.diffuse_snr_db) * diffuse_noise(
            rng_diffuse,
            array.positions_m + faults.position_m,
            samples,
            spec.sample_rate,
            speed_m_s=speed_of_sound(spec.temperature_c),
            spectrum=table.diffuse_spectrum,
        )
    if table.file is not None:
        recorded = read_channels(base / table.file, spec.sample_rate)
        if len(recorded) != array.channels:
            raise InputError(
                f"{base / table.file}: key `noise.file`: {len(recorded)} channels, but the array has {array.channels} "
                "microphones"
            )
        level = float(np.sqrt(np.mean(recorded[array.reference_channel] ** 2)))
        if level == 0.0:
            raise InputError(f"{base / table.file}: key `noise.file`: silent at the reference microphone")
        repeated = np.tile(recorded, -(-samples // recorded.shape[1]))[:, :samples]
        total += rms(table.file_snr_db) / level * repeated
    return total


def _assemble(
    spec: RenderSpec,
    array: Array,
    faults: Faults,
    sounds: list[Sound],
    noise: Floats,
    tracks: tuple[Track | None, ...],
    orientation: Orientation | None,
    materials: list[Material],
    room: Room | None,
) -> RenderedScene:
    """Everything through the channels' faults, within full scale."""
    rate, reference = spec.sample_rate, array.reference_channel
    at_reference = [reference]
    images = faults.record(np.stack([s.image for s in sounds]), rate)
    dry = faults.record(np.stack([s.dry for s in sounds])[:, None], rate, channels=at_reference)[:, 0]
    early = faults.record(np.stack([s.early for s in sounds])[:, None], rate, channels=at_reference)[:, 0]
    noise = faults.record(noise, rate)
    mixture = images.sum(axis=0) + noise
    peak, scale = float(np.abs(mixture).max()), 1.0
    if peak > 1.0 and faults.clip_db is None:
        scale = _PEAK / peak
        warnings.warn(
            f"the mixture would exceed full scale; it is {-20 * np.log10(scale):.1f} dB lower than asked for",
            UnmixWarning,
            stacklevel=3,
        )
        images, dry, early, noise, mixture = (scale * part for part in (images, dry, early, noise, mixture))
    mixture, clipped = faults.clip(mixture)
    samples = mixture.shape[1]
    stretches = [material.stretch(samples) for material in materials]
    return RenderedScene(
        names=tuple(talker.name for talker in spec.talker),
        sample_rate=rate,
        mixture=mixture,
        images=images,
        dry=dry,
        early=early,
        noise=noise,
        array=array,
        tracks=tracks,
        orientation=orientation,
        active_s=tuple((s.start / rate, s.stop / rate) for s in stretches),
        t20_s=tuple(s.t20_s for s in sounds),
        drr_db=tuple(s.drr_db for s in sounds),
        absorption=None if room is None else 1.0 - room.reflection**2,
        faults=faults,
        scale_db=20.0 * float(np.log10(scale)),
        clipped=clipped,
        temperature_c=spec.temperature_c,
    )
