"""Talkers that move and arrays that turn: responses that change over time.

The direct sound and all reflections of up to second order are exact at every sample (`FineClip`). Behind them, the
tail is made of responses at places along the path, cross-faded linearly in distance moved. Half way between two places
D metres apart, a wave of wavenumber k is then up to 1 - cos(k D/2) of its amplitude short: with 2 cm, 0.02 at 1 kHz
(-36 dB), 0.07 at 2 kHz, 0.26 at 4 kHz, of the tail alone. References and mixture are cut from the same sound, so that
truth and mixture agree exactly all the same.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray

from unmix.cores import usable_threads
from unmix.render.convolve import convolve_responses
from unmix.render.fine import FineClip
from unmix.render.images import Images
from unmix.render.pulses import LEAD, pulse_train
from unmix.render.room import EARLY_S, Room, high_pass, paths
from unmix.render.seats import Seat

__all__ = ["render_moving"]

Floats = NDArray[np.float64]
Kinds = tuple[Floats, Floats, Floats]

_EXACT_ORDER = 2
_CHUNK = 8192
_TAIL_EXPANSION = 2
_EARLY_FADE_S = 0.001


def render_moving(
    clip: Floats,
    seat: Seat,
    room: Room | None,
    sample_rate: int,
    *,
    speed_m_s: float,
    reference: int,
    source: int = 0,
    path_step_m: float = 0.02,
    progress: Callable[[float], None] | None = None,
) -> Kinds:
    """``clip`` (samples,) as heard while talker or array move.

    ``progress`` is called with the share done, 0 to 1. Returns dry and early at microphone ``reference`` (samples,)
    and the image at all (channels, samples).
    """
    if room is None:
        return _near_sound(clip, seat, None, None, sample_rate, speed_m_s, reference)
    clip = high_pass(clip, sample_rate, room.high_pass_hz)
    middle_s = np.array([0.5 * clip.size / sample_rate])
    images = room.field(source).images(seat.source(middle_s)[0], seat.centre_m)
    order = images.order
    near, far = images.select(order <= _EXACT_ORDER), images.select(order > _EXACT_ORDER)
    dry, early, image = _near_sound(clip, seat, near, room, sample_rate, speed_m_s, reference)
    early_tail, tail = _tail_sound(clip, seat, room, far, sample_rate, reference, path_step_m, progress)
    return dry, early + early_tail, image + tail


def _near_sound(
    clip: Floats,
    seat: Seat,
    near: Images | None,
    room: Room | None,
    sample_rate: int,
    speed_m_s: float,
    reference: int,
) -> Kinds:
    """Direct sound and first reflections, exact at every sample."""
    starts = range(0, clip.size, _CHUNK)
    per_metre = sample_rate / speed_m_s

    def chunk(start: int) -> Kinds:
        sample = np.arange(start, min(start + _CHUNK, clip.size))
        time_s = sample / sample_rate
        length, amplitude = seat.straight(time_s)
        paths = [(length, amplitude)]
        if near is not None and room is not None:
            paths += _reflections(near, room, seat, time_s, length)
        delays = [path * per_metre for path, _ in paths]
        first = math.floor(sample[0] - max(d.max() for d in delays))
        fine = FineClip(clip, first, math.ceil(sample[-1] - min(d.min() for d in delays)))
        heard = [gain.T * fine.at(sample - d.T) for (_, gain), d in zip(paths, delays, strict=True)]
        early = heard[0][reference].copy()
        for sound, d in zip(heard[1:], delays[1:], strict=True):
            ahead = delays[0][:, reference] + EARLY_S * sample_rate - d[:, reference]
            early += np.clip(0.5 + ahead / (_EARLY_FADE_S * sample_rate), 0.0, 1.0) * sound[reference]
        return heard[0][reference], early, np.sum(heard, axis=0)

    with ThreadPoolExecutor(min(2, usable_threads())) as pool:
        parts = list(pool.map(chunk, starts))
    return (
        np.concatenate([p[0] for p in parts]),
        np.concatenate([p[1] for p in parts]),
        np.concatenate([p[2] for p in parts], axis=1),
    )


def _reflections(
    near: Images, room: Room, seat: Seat, time_s: Floats, shortest: Floats
) -> Iterator[tuple[Floats, Floats]]:
    """Length and amplitude of each reflected path, (times, channels) each, none below ``shortest``."""
    source, mics = seat.source(time_s), seat.microphones(time_s)
    # Place is affine in the source along each axis: two places tell the rest.
    offset = near.at(np.zeros(3))
    sign = near.at(np.ones(3)) - offset
    for index, gain in enumerate(near.amplitude(room.reflection)):
        if index == near.direct:
            continue
        image = sign[:, index] * source + offset[:, index]
        length = np.maximum(np.linalg.norm(image[:, None, :] - mics, axis=-1), shortest)
        yield length, gain / length


def _tail_sound(
    clip: Floats,
    seat: Seat,
    room: Room,
    far: Images,
    sample_rate: int,
    reference: int,
    path_step_m: float,
    progress: Callable[[float], None] | None,
) -> tuple[Floats, Floats]:
    """What comes behind the exact images: its early part at ``reference``, and all of it at all microphones."""
    knots_s, weights = _path(seat, clip.size, sample_rate, path_step_m)
    gain = far.amplitude(room.reflection)
    early, image = np.zeros(clip.size), np.zeros((len(seat.mics_m), clip.size))

    def block(knot: int) -> tuple[slice, Floats]:
        source, mics = seat.source(knots_s[[knot]])[0], seat.microphones(knots_s[[knot]])[0]
        rows = _tail_responses(room, far.at(source), gain, source, mics, sample_rate, reference)
        weight = np.maximum(1.0 - np.abs(weights - knot), 0.0)
        heard_at = np.flatnonzero(weight)
        start, stop = int(heard_at[0]), int(heard_at[-1]) + 1
        first = max(0, start - rows.shape[1])
        sound = convolve_responses(clip[first : stop + LEAD], rows, LEAD, stop - first)[:, start - first :]
        return slice(start, stop), weight[start:stop] * sound

    with ThreadPoolExecutor(min(2, usable_threads())) as pool:
        for knot, (place, sound) in enumerate(pool.map(block, range(len(knots_s)))):
            early[place] += sound[0]
            image[:, place] += sound[1:]
            if progress is not None:
                progress((knot + 1) / len(knots_s))
    return early, image


def _tail_responses(
    room: Room, places_m: Floats, gain: Floats, source_m: Floats, mics_m: Floats, sample_rate: int, reference: int
) -> Floats:
    """Responses of all images beyond the exact ones: the early part at ``reference``, then all microphones in full."""
    samples = math.ceil(room.length_s * sample_rate) + 1
    full, early = [], np.zeros(0)
    for channel, mic in enumerate(mics_m):
        delay, amplitude = paths(places_m, gain, mic, sample_rate / room.speed_m_s)
        full.append(pulse_train(delay, amplitude, samples, order=_TAIL_EXPANSION))
        if channel == reference:
            direct_s = float(np.linalg.norm(source_m - mic)) / room.speed_m_s
            soon = np.flatnonzero(delay <= (direct_s + EARLY_S) * sample_rate)
            early = pulse_train(delay[soon], amplitude[soon], samples, order=_TAIL_EXPANSION)
    return np.stack([early, *full])


def _path(seat: Seat, samples: int, sample_rate: int, step_m: float) -> tuple[Floats, Floats]:
    """Times of the knots, and for each sample its place among them (between knots k and k+1: from k to k+1)."""
    coarse_s = np.arange(0.0, samples / sample_rate + 0.01, 0.01)
    source, mics = seat.source(coarse_s), seat.microphones(coarse_s)
    talker_m = np.linalg.norm(np.diff(source, axis=0), axis=1)
    array_m = np.linalg.norm(np.diff(mics, axis=0), axis=2).max(axis=1)
    moved_m = np.concatenate([[0.0], np.cumsum(talker_m + array_m)])
    count = max(2, math.ceil(moved_m[-1] / step_m) + 1)
    # Standing still moves nothing: a hair of slope keeps the path invertible.
    moved_m += 1e-9 * coarse_s
    knots_s = np.interp(np.linspace(0.0, moved_m[-1], count), moved_m, coarse_s)
    place = np.interp(np.arange(samples) / sample_rate, coarse_s, moved_m) / moved_m[-1] * (count - 1)
    return knots_s, place
