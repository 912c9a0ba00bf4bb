"""Where talkers and microphones are over time, in the room's coordinates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.physics import unit_vector
from unmix.track import Orientation, Track

__all__ = ["Seat"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Seat:
    """One talker and the array.

    ``centre_m`` (3,) is the array's origin in the room, ``mics_m`` (channels, 3) the microphones from there, turned by
    ``orientation`` where it is given; ``track`` the talker's bearing and distance from the origin in the world's axes,
    which are the room's. A track without distances is a plane wave.

    A moving talker's place at time t is where the sound that arrives at t was spoken.
    """

    centre_m: Floats
    mics_m: Floats
    track: Track
    orientation: Orientation | None = None

    @property
    def plane(self) -> bool:
        """Whether the talker is a plane wave."""
        return bool(np.isnan(self.track.distance_m).any())

    @property
    def moves(self) -> bool:
        """Whether the talker moves or the array turns."""
        turns = self.orientation is not None and bool(np.ptp(self.orientation.quaternions, axis=0).any())
        parts = (self.track.azimuth, self.track.elevation, self.track.distance_m)
        return turns or any(bool(np.any(part != part[0])) for part in parts if not np.isnan(part[0]))

    def source(self, time_s: Floats) -> Floats:
        """The talker's place in the room at the times (times,), or for a plane wave its unit vector: (times, 3)."""
        azimuth, elevation, distance = self.track.at(time_s)
        towards = unit_vector(azimuth, elevation)
        return towards if self.plane else self.centre_m + distance[:, None] * towards

    def microphones(self, time_s: Floats) -> Floats:
        """The microphones' places in the room: (times, channels, 3)."""
        if self.orientation is None:
            return np.broadcast_to(self.centre_m + self.mics_m, (len(time_s), *self.mics_m.shape))
        turned = self.orientation.matrices(time_s) @ self.mics_m.T
        return np.asarray(self.centre_m + turned.transpose(0, 2, 1))

    def straight(self, time_s: Floats) -> tuple[Floats, Floats]:
        """Length in metres and amplitude of the direct path to each microphone: (times, channels) each.

        Amplitude is 1/R at R metres; for a plane wave it is 1, and the length is counted from a plane just outside the
        array, so that it is never negative.
        """
        source, mics = self.source(time_s)[:, None, :], self.microphones(time_s)
        if self.plane:
            outside_m = 0.01 + float(np.linalg.norm(self.mics_m, axis=1).max())
            length = outside_m - np.sum((mics - self.centre_m) * source, axis=-1)
            return length, np.ones_like(length)
        length = np.linalg.norm(source - mics, axis=-1)
        return length, 1.0 / length
