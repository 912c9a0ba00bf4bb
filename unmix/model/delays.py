"""How each talker reaches each microphone: delays and gains relative to the reference microphone.

A plane wave from direction u reaches microphone m early by u.p_m / c; a spherical wave from distance R travels |R u -
p_m|. With the array's corrections, y_m(t) = sum_k g_mk s_k(t - tau_mk), s_k as received at the reference channel.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.array import Array
from unmix.physics import speed_of_sound, unit_vector

__all__ = ["Paths", "paths_from_bearings", "wave_delays"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Paths:
    """Delays and gains of every talker at every microphone, relative to the reference microphone.

    delay_s, gain   (talkers, channels), or (times, talkers, channels) with `time_s` (times,) when something moves;
                    gains carry the channel's polarity
    taps, centre    measured responses relative to the reference (talkers, channels, taps) with time zero at `centre`;
                    None where delays and gains say all. Delays and gains are then those nearest to the responses
    """

    delay_s: Floats
    gain: Floats
    time_s: Floats | None = None
    taps: Floats | None = None
    centre: int = 0

    @property
    def moving(self) -> bool:
        """Whether delays change over time."""
        return self.time_s is not None

    @property
    def talkers(self) -> int:
        """Number of talkers."""
        return int(self.delay_s.shape[-2])

    @property
    def channels(self) -> int:
        """Number of microphones."""
        return int(self.delay_s.shape[-1])

    def at(self, time_s: ArrayLike) -> tuple[Floats, Floats]:
        """Delays and gains at the given times: (times, talkers, channels), linear in between, held at both ends."""
        t = np.atleast_1d(np.asarray(time_s, dtype=np.float64))
        if self.time_s is None:
            shape = (len(t), *self.delay_s.shape)
            return np.broadcast_to(self.delay_s, shape), np.broadcast_to(self.gain, shape)
        right = np.clip(np.searchsorted(self.time_s, t), 1, len(self.time_s) - 1)
        left = right - 1
        share = np.clip((t - self.time_s[left]) / (self.time_s[right] - self.time_s[left]), 0.0, 1.0)[:, None, None]
        mixed = [value[left] * (1.0 - share) + value[right] * share for value in (self.delay_s, self.gain)]
        return mixed[0], mixed[1]

    def still(self, time_s: float | None = None) -> Paths:
        """The paths at one instant (default: the middle of the recording), as if nothing moved."""
        if self.time_s is None:
            return self
        delay, gain = self.at(0.5 * (self.time_s[0] + self.time_s[-1]) if time_s is None else time_s)
        return Paths(delay[0], gain[0])


def wave_delays(
    positions_m: Floats, directions: Floats, distance_m: Floats | None, speed_m_s: float
) -> tuple[Floats, Floats]:
    """Travel time in seconds relative to the origin, and gain, of waves at points.

    positions_m  (..., channels, 3);  directions (..., 3) unit vectors towards the source
    distance_m   (...) from the origin, NaN or None for a plane wave (gain 1)

    Returns two arrays (..., channels).
    """
    plane = -np.einsum("...mi,...i->...m", positions_m, directions) / speed_m_s
    if distance_m is None:
        return plane, np.ones_like(plane)
    near = np.isfinite(distance_m)[..., None]
    r = np.where(near, np.nan_to_num(distance_m)[..., None], 1.0)
    source = r[..., None] * directions[..., None, :]
    travelled = np.linalg.norm(source - positions_m, axis=-1)
    return np.where(near, (travelled - r) / speed_m_s, plane), np.where(near, r / travelled, 1.0)


def paths_from_bearings(
    array: Array,
    azimuth: ArrayLike,
    elevation: ArrayLike = 0.0,
    distance_m: ArrayLike | None = None,
    *,
    time_s: Floats | None = None,
    rotation: Floats | None = None,
    temperature_c: float = 20.0,
) -> Paths:
    """Paths of talkers at the given bearings (radians), with the array's corrections put in.

    azimuth, elevation, distance_m  (talkers,), or (times, talkers) with `time_s`; distance NaN means a plane wave
    rotation                        (times, 3, 3) array to world, when bearings are the world's
    """
    directions = unit_vector(azimuth, elevation)
    if rotation is not None:
        directions = np.einsum("tij,tki->tkj", rotation, directions)
    distance = (
        None if distance_m is None else np.broadcast_to(np.asarray(distance_m, np.float64), directions.shape[:-1])
    )
    delay, gain = wave_delays(array.positions_m, directions, distance, speed_of_sound(temperature_c))
    delay = delay + array.delay_s
    gain = gain * array.polarity * 10.0 ** (array.gain_db / 20.0)
    ref = array.reference_channel
    return Paths(delay - delay[..., ref, None], gain / gain[..., ref, None], time_s)
