"""Shoebox rooms whose measured reverberation time is the one asked for, and their impulse responses.

Walls reflect alike at all frequencies. `build_room` starts from Eyring's formula [1]_ and corrects the absorption by
the secant rule until the T20 measured on the responses of the actual seats is the one asked for: formulas and
measured responses of a box with equal walls differ by up to half.

With all reflections positive the image method piles up pressure at zero frequency; as in Allen and Berkley's paper a
high-pass takes it out (second-order Butterworth, causal), of every kind of response alike, so that references and
mixture stay consistent.

.. [1] H. Kuttruff, "Room Acoustics": Sabine 24 ln(10) V/(c A), Eyring with A = -S ln(1 - alpha).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace

import numpy as np
import scipy.signal
from numpy.typing import NDArray

from unmix.cores import usable_threads
from unmix.errors import InputError, UnsolvableError
from unmix.metrics.decay import Decay, measure_decay
from unmix.render.images import DEFAULT_JITTER_M, ImageField, Images, image_field
from unmix.render.pulses import LEAD, pulse_train

__all__ = [
    "DEFAULT_HIGH_PASS_HZ",
    "EARLY_S",
    "Responses",
    "Room",
    "absorption_eyring",
    "build_room",
    "eyring_s",
    "free_field",
    "high_pass",
    "paths",
    "response_decay",
    "responses",
    "sabine_s",
]

Floats = NDArray[np.float64]

EARLY_S = 0.05
DEFAULT_HIGH_PASS_HZ = 40.0
_T20_TOLERANCE = 0.005
_T20_ACCEPTED = 0.04
_T20_ROUNDS = 25


@dataclass(frozen=True, slots=True)
class Room:
    """A box with its corner at the origin.

    ``size_m`` (3,); ``reflection`` (6,) pressure reflection factors of the walls x=0, x=L, y=0, y=L, z=0, z=L, all zero
    for no room at all; responses last ``length_s``; ``seed`` and ``jitter_m`` displace images.
    """

    size_m: Floats
    reflection: Floats
    speed_m_s: float
    length_s: float
    jitter_m: float = DEFAULT_JITTER_M
    seed: int = 0
    high_pass_hz: float = DEFAULT_HIGH_PASS_HZ

    def field(self, source: int) -> ImageField:
        """Image lattice of source number ``source``; each source has displacements of its own."""
        reach_m = self.length_s * self.speed_m_s if self.reflection.any() else 0.0
        return image_field(self.size_m, reach_m, jitter_m=self.jitter_m, seed=(self.seed, 7, source))


@dataclass(frozen=True, slots=True)
class Responses:
    """Responses of one source to all microphones, (channels, taps) each; tap ``lead`` is time zero.

    ``direct`` is the direct sound alone, ``early`` what arrives up to 50 ms after it, ``full`` everything. The level is
    that of a source whose direct sound has amplitude 1/R at R metres.
    """

    direct: Floats
    early: Floats
    full: Floats
    direct_delay_s: Floats
    sample_rate: int
    lead: int = LEAD


def sabine_s(size_m: Floats, absorption: float, speed_m_s: float = 343.0) -> float:
    """Sabine's reverberation time in seconds for the same ``absorption`` on all walls."""
    volume, surface = _volume_surface(size_m)
    return 24.0 * math.log(10.0) * volume / (speed_m_s * surface * absorption)


def eyring_s(size_m: Floats, absorption: float, speed_m_s: float = 343.0) -> float:
    """Eyring's reverberation time in seconds for the same ``absorption`` on all walls."""
    return sabine_s(size_m, -math.log1p(-absorption), speed_m_s)


def absorption_eyring(size_m: Floats, t60_s: float, speed_m_s: float = 343.0) -> float:
    """Absorption at which Eyring's formula gives ``t60_s``."""
    return -math.expm1(-sabine_s(size_m, 1.0, speed_m_s) / t60_s)


def paths(
    places_m: Floats, gain: Floats, mic_m: Floats, per_metre: float, *, shortest_m: float = 0.0
) -> tuple[Floats, Floats]:
    """Delay (``per_metre`` times the distance) and amplitude (``gain`` over it) from ``places_m`` (3, images) to one
    microphone, (images,) each. No path is shorter than ``shortest_m``: displacing an image must not bring a reflection
    ahead of the direct sound."""
    length = np.square(places_m[0] - mic_m[0])
    for axis in (1, 2):
        length += np.square(places_m[axis] - mic_m[axis])
    np.sqrt(length, out=length)
    np.maximum(length, shortest_m, out=length)
    return length * per_metre, gain / length


def high_pass(signals: Floats, sample_rate: float, edge_hz: float = DEFAULT_HIGH_PASS_HZ) -> Floats:
    """Signals (..., samples) without what lies below ``edge_hz`` (second-order Butterworth); unchanged for zero."""
    if edge_hz <= 0.0:
        return signals
    sections = scipy.signal.butter(2, edge_hz, "highpass", fs=sample_rate, output="sos")
    return np.asarray(scipy.signal.sosfilt(sections, signals, axis=-1))


def response_decay(response: Floats, direct_delay_s: float, sample_rate: int) -> Decay:
    """T20 and direct-to-reverberant ratio of one row of `Responses.full`."""
    return measure_decay(response, sample_rate, onset=LEAD + round(direct_delay_s * sample_rate))


def responses(
    room: Room,
    source_m: Floats,
    mics_m: Floats,
    sample_rate: int,
    *,
    source: int = 0,
    early_s: float = EARLY_S,
) -> Responses:
    """Responses from ``source_m`` (3,) to the microphones ``mics_m`` (channels, 3), all in the room's coordinates.

    ``source`` numbers the sources of a scene: each has its own displacement of images.
    """
    images = room.field(source).images(source_m, mics_m.mean(axis=0))
    gain = images.amplitude(room.reflection)
    # Walls that absorb everything have no images.
    images, gain = images.select(gain > 0.0), gain[gain > 0.0]
    places = images.at(source_m)
    samples = _length_samples(room, source_m, mics_m, sample_rate)

    def one(mic: Floats) -> tuple[Floats, Floats, Floats, float]:
        shortest_m = float(np.linalg.norm(mic - source_m))
        delay, amplitude = paths(places, gain, mic, sample_rate / room.speed_m_s, shortest_m=shortest_m)
        start = float(delay[images.direct])
        straight = pulse_train(delay[[images.direct]], amplitude[[images.direct]], samples)
        soon = np.flatnonzero(delay <= start + early_s * sample_rate)
        early = pulse_train(delay[soon], amplitude[soon], samples)
        return straight, early, pulse_train(delay, amplitude, samples), start / sample_rate

    with ThreadPoolExecutor(min(2, usable_threads())) as pool:
        rows = list(pool.map(one, mics_m))
    direct_rows, early_rows, full_rows = (
        high_pass(np.stack([row[kind] for row in rows]), sample_rate, room.high_pass_hz) for kind in range(3)
    )
    return Responses(direct_rows, early_rows, full_rows, np.array([row[3] for row in rows]), sample_rate)


def free_field(length_m: Floats, amplitude: Floats, sample_rate: int, *, speed_m_s: float) -> Responses:
    """Responses without a room, from the length and amplitude of the direct path to each microphone, (channels,)."""
    delay = length_m * (sample_rate / speed_m_s)
    samples = math.ceil(float(delay.max())) + 1
    direct = np.stack([pulse_train(d[None], a[None], samples) for d, a in zip(delay, amplitude, strict=True)])
    return Responses(direct, direct, direct, delay / sample_rate, sample_rate)


def build_room(
    size_m: Floats,
    *,
    speed_m_s: float,
    t20_s: float | None = None,
    absorption: float | Floats | None = None,
    sources_m: Floats | Mapping[int, Floats] | None = None,
    mic_m: Floats | None = None,
    sample_rate: int = 16000,
    jitter_m: float = DEFAULT_JITTER_M,
    seed: int = 0,
    high_pass_hz: float = DEFAULT_HIGH_PASS_HZ,
) -> Room:
    """A room from its measured reverberation time or from its walls' absorption.

    Parameters
    ----------
    size_m : (3,)
        Length, width, height in metres.
    t20_s : float, optional
        Reverberation time to be measured, as the mean over ``sources_m`` (sources, 3) heard at ``mic_m`` (3,). A
        mapping gives the sources' numbers, as in `responses`.
    absorption : float or (6,), optional
        Energy absorbed by the walls x=0, x=L, y=0, y=L, z=0, z=L, instead.

    Raises
    ------
    InputError
        Neither or both of ``t20_s`` and ``absorption``.
    UnsolvableError
        No absorption gives ``t20_s`` in this room.
    """
    size = np.asarray(size_m, dtype=np.float64)
    if (t20_s is None) == (absorption is None):
        raise InputError("room: give either t20_s or absorption, not both and not neither")
    if absorption is not None:
        alpha = np.broadcast_to(np.asarray(absorption, dtype=np.float64), (6,))
        length_s = _length_from_absorption(size, alpha, speed_m_s)
        return Room(size, np.sqrt(1.0 - alpha), speed_m_s, length_s, jitter_m, seed, high_pass_hz)
    if sources_m is None or mic_m is None or t20_s is None:
        raise InputError("room: t20_s is measured at seats: give sources_m and mic_m")
    blank = Room(size, np.ones(6), speed_m_s, max(1.1 * t20_s, 0.1), jitter_m, seed, high_pass_hz)
    numbered = sources_m if isinstance(sources_m, Mapping) else dict(enumerate(sources_m))
    return _walls_for_t20(blank, t20_s, numbered, mic_m, sample_rate)


def _walls_for_t20(blank: Room, t20_s: float, sources_m: Mapping[int, Floats], mic_m: Floats, sample_rate: int) -> Room:
    """``blank`` with the walls that give ``t20_s``: secant rule on x = -ln(1 - alpha), to which the decay rate is
    nearly proportional."""
    seats = []
    for number, source in sources_m.items():
        images = blank.field(number).images(source, mic_m)
        shortest_m = float(np.linalg.norm(mic_m - source))
        delay, spread = paths(
            images.at(source), np.ones(1), mic_m, sample_rate / blank.speed_m_s, shortest_m=shortest_m
        )
        seats.append((images, delay, spread))

    def walls(x: float) -> Room:
        return replace(blank, reflection=np.full(6, math.exp(-0.5 * x)))

    def measured(x: float) -> float:
        def at_seat(seat: tuple[Images, Floats, Floats]) -> float:
            return _seat_t20(walls(x), *seat, sample_rate)

        with ThreadPoolExecutor(min(2, usable_threads())) as pool:
            return float(np.mean(list(pool.map(at_seat, seats))))

    x = -math.log1p(-absorption_eyring(blank.size_m, t20_s, blank.speed_m_s))
    history: list[tuple[float, float]] = []
    for _ in range(_T20_ROUNDS):
        history.append((x, 1.0 / measured(x)))
        if abs(history[-1][1] * t20_s - 1.0) < _T20_TOLERANCE:
            return walls(x)
        x = _next_absorption(history, 1.0 / t20_s)
        if not 1e-4 < x < 14.0:
            break
    # Few reflections make T20 jump: near enough is then the best there is.
    x, rate = min(history, key=lambda point: abs(math.log(point[1] * t20_s)))
    if abs(rate * t20_s - 1.0) < _T20_ACCEPTED:
        return walls(x)
    raise UnsolvableError(
        f"room: no absorption gives a measured T20 of {t20_s:g} s in a room of {_size_text(blank.size_m)} "
        f"(nearest: {1.0 / rate:.3f} s); change t20_s or size_m"
    )


def _next_absorption(history: list[tuple[float, float]], target: float) -> float:
    """Next x whose decay rate should be ``target``: secant where the last two points allow, proportional otherwise."""
    (x1, r1) = history[-1]
    proportional = x1 * min(max(target / r1, 0.5), 2.0)
    if len(history) < 2:
        return proportional
    (x0, r0) = history[-2]
    if x1 == x0 or (r1 - r0) / (x1 - x0) <= 0.0:
        return proportional
    step = x1 + (target - r1) * (x1 - x0) / (r1 - r0)
    return min(max(step, 0.5 * x1), 2.0 * x1)


def _seat_t20(room: Room, images: Images, delay: Floats, spread: Floats, sample_rate: int) -> float:
    samples = math.ceil(room.length_s * sample_rate) + 1
    coarse = pulse_train(delay, images.amplitude(room.reflection) * spread, samples, order=0)
    heard = high_pass(coarse, sample_rate, room.high_pass_hz)
    decay = response_decay(heard, float(delay[images.direct]) / sample_rate, sample_rate)
    # A room too dead to show 25 dB of decay behind the direct sound decays at once.
    return decay.t20_s if decay.t20_s is not None else 1e-3


def _length_samples(room: Room, source_m: Floats, mics_m: Floats, sample_rate: int) -> int:
    farthest_s = float(np.linalg.norm(mics_m - source_m, axis=1).max()) / room.speed_m_s
    length_s = max(room.length_s, farthest_s) if room.reflection.any() else farthest_s
    return math.ceil(length_s * sample_rate) + 1


def _length_from_absorption(size: Floats, alpha: Floats, speed_m_s: float) -> float:
    """Time until 60 dB of decay, with half as much again since equal walls decay slower than Eyring's formula says."""
    if np.all(alpha >= 1.0):
        return 0.0
    areas = np.repeat([size[1] * size[2], size[0] * size[2], size[0] * size[1]], 2)
    mean = min(float(areas @ alpha / areas.sum()), 0.999)
    return max(1.5 * eyring_s(size, mean, speed_m_s), 0.1)


def _volume_surface(size: Floats) -> tuple[float, float]:
    x, y, z = (float(v) for v in size)
    return x * y * z, 2.0 * (x * y + y * z + z * x)


def _size_text(size: Floats) -> str:
    return " x ".join(f"{v:g}" for v in size) + " m"
