"""A scene in memory: mixture, images and references of every talker, and the truth about all of it."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import InputError, UnmixWarning
from unmix.physics import speed_of_sound
from unmix.render.faults import Faults, draw_faults
from unmix.render.noise import diffuse_noise, sensor_noise
from unmix.render.placing import check_channels, check_names, spec_array, spec_room, spec_seats
from unmix.render.room import Room
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
    progress: Callable[[float], None] | None = None,
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
    progress : optional
        Called with the share done, 0 to 1.

    Raises
    ------
    FileError, InputError
        Naming file, key and remedy.
    UnsolvableError
        The reverberation time asked for cannot be had in the room asked for.
    """
    base, spec = Path(base), spec.checked()
    array = spec_array(spec, base)
    rng_faults, rng_sensor, rng_diffuse = (np.random.default_rng([spec.seed, stream]) for stream in (1, 2, 3))
    faults = draw_faults(spec.faults, array.channels, rng_faults)
    if orientation is None and spec.array.orientation is not None:
        orientation = Orientation.load(base / spec.array.orientation)
    check_names(spec, {**(clips or {}), **(tracks or {})})
    materials = [load_material(t, k, spec, base, clips or {}) for k, t in enumerate(spec.talker)]
    check_channels(spec, materials, array, faults)
    samples = scene_samples(spec, materials)
    where = tuple(talker_track(t, k, base, tracks or {}) for k, t in enumerate(spec.talker))
    seats = spec_seats(spec, materials, where, array.positions_m + faults.position_m, orientation)
    room = spec_room(spec, seats, array.reference_channel, samples / spec.sample_rate)

    sounds = []
    for index, (talker, material, seat) in enumerate(zip(spec.talker, materials, seats, strict=True)):
        watch = _part(progress, index, len(seats))
        sound = _sound(spec, index, material, seat, room, samples, array.reference_channel, watch)
        watch(1.0)
        sounds.append(
            _at_level(sound, talker.level_db, material.stretch(samples), array.reference_channel, talker.name)
        )
    noise = _noise(spec, base, sounds, materials, array, faults, samples, rng_sensor, rng_diffuse)
    return _assemble(spec, array, faults, sounds, noise, where, orientation, materials, room)


def _part(progress: Callable[[float], None] | None, index: int, count: int) -> Callable[[float], None]:
    """Progress within part ``index`` of ``count`` equal parts."""

    def watch(share: float) -> None:
        if progress is not None:
            progress((index + share) / count)

    return watch


def _sound(
    spec: RenderSpec,
    index: int,
    material: Material,
    seat: Seat | None,
    room: Room | None,
    samples: int,
    reference: int,
    progress: Callable[[float], None],
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
        progress=progress,
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
