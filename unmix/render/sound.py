"""One talker's sound at the microphones, in the three kinds of reference."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.decay import DIRECT_WINDOW_S, direct_onset, measure_decay
from unmix.render.convolve import convolve_responses
from unmix.render.motion import render_moving
from unmix.render.room import EARLY_S, Responses, Room, free_field, response_decay, responses
from unmix.render.seats import Seat

__all__ = ["Sound", "sound_from_responses", "sound_from_seat", "sound_from_take"]

Floats = NDArray[np.float64]

_FADE_S = 0.001


@dataclass(frozen=True, slots=True)
class Sound:
    """``image`` (channels, samples); ``dry`` and ``early`` (samples,) at the reference microphone, NaN where they
    cannot be known; T20 and direct-to-reverberant ratio there, None without reverberation."""

    dry: Floats
    early: Floats
    image: Floats
    t20_s: float | None = None
    drr_db: float | None = None

    def scaled(self, factor: float) -> Sound:
        """The same sound, louder."""
        return replace(self, dry=factor * self.dry, early=factor * self.early, image=factor * self.image)


def sound_from_take(take: Floats) -> Sound:
    """A talker recorded alone, (channels, samples): the image is all that is known."""
    unknown = np.full(take.shape[1], np.nan)
    return Sound(unknown, unknown, take)


def sound_from_responses(clip: Floats, measured: Floats, sample_rate: int, reference: int) -> Sound:
    """``clip`` (samples,) through measured responses (channels, taps).

    The direct sound is taken to end 2.5 ms after its peak at the reference microphone, the early part 50 ms after it;
    both fade out over 1 ms.
    """
    response = measured[reference]
    decay = measure_decay(response, sample_rate)
    peak = direct_onset(response)
    kinds = np.stack([response * _until(peak + length * sample_rate, response.size, sample_rate) for length in _CUTS_S])
    dry, early = convolve_responses(clip, kinds, 0, clip.size)
    image = convolve_responses(clip, measured, 0, clip.size)
    return Sound(dry, early, image, decay.t20_s, decay.drr_db)


_CUTS_S = (DIRECT_WINDOW_S, EARLY_S)


def _until(sample: float, taps: int, sample_rate: int) -> Floats:
    """1 up to ``sample``, then falling to 0 over the fade."""
    return np.clip(1.0 - (np.arange(taps) - sample) / (_FADE_S * sample_rate), 0.0, 1.0)


def sound_from_seat(
    clip: Floats,
    seat: Seat,
    room: Room | None,
    sample_rate: int,
    *,
    speed_m_s: float,
    reference: int,
    source: int,
    path_step_m: float,
    progress: Callable[[float], None] | None = None,
) -> Sound:
    """``clip`` (samples,) spoken from ``seat``; ``source`` numbers the talkers, ``progress`` gets the share done."""
    middle = np.array([0.5 * clip.size / sample_rate])
    answer = None if seat.moves and room is None else _responses_at(seat, room, middle, sample_rate, speed_m_s, source)
    t20_s = drr_db = None
    if room is not None and answer is not None:
        decay = response_decay(answer.full[reference], float(answer.direct_delay_s[reference]), sample_rate)
        t20_s, drr_db = decay.t20_s, decay.drr_db
    if seat.moves or answer is None:
        dry, early, image = render_moving(
            clip,
            seat,
            room,
            sample_rate,
            speed_m_s=speed_m_s,
            reference=reference,
            source=source,
            path_step_m=path_step_m,
            progress=progress,
        )
        return Sound(dry, early, image, t20_s, drr_db)
    image = convolve_responses(clip, answer.full, answer.lead, clip.size)
    if room is None:
        return Sound(image[reference], image[reference], image)
    kinds = np.stack([answer.direct[reference], answer.early[reference]])
    dry, early = convolve_responses(clip, kinds, answer.lead, clip.size)
    return Sound(dry, early, image, t20_s, drr_db)


def _responses_at(
    seat: Seat, room: Room | None, time_s: Floats, sample_rate: int, speed_m_s: float, source: int
) -> Responses:
    if room is None:
        length, amplitude = seat.straight(time_s)
        return free_field(length[0], amplitude[0], sample_rate, speed_m_s=speed_m_s)
    return responses(room, seat.source(time_s)[0], seat.microphones(time_s)[0], sample_rate, source=source)
