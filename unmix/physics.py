"""Sound in air and the average voice: the few laws everything else stands on.

Lengths in metres, times in seconds, frequencies in hertz, angles in radians, temperatures in degrees Celsius.
Coordinates follow AES69: x to the front, y to the left, z up; azimuth counter-clockwise from the front, elevation up.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "SPEECH_SPECTRUM_DB",
    "SPEECH_SPECTRUM_HZ",
    "air_absorption_db_per_m",
    "diffuse_coherence",
    "direction_angles",
    "pairwise_distances",
    "speech_spectrum_db",
    "speed_of_sound",
    "unit_vector",
    "wrapped",
]

Floats = NDArray[np.float64]

_ABSOLUTE_ZERO_C = -273.15

SPEECH_SPECTRUM_HZ: Floats = np.array(
    [160, 200, 250, 315, 400, 500, 630, 800, 1000, 1250, 1600, 2000, 2500, 3150, 4000, 5000, 6300, 8000],
    dtype=np.float64,
)
SPEECH_SPECTRUM_DB: Floats = np.array(
    [
        *[32.41, 34.48, 34.75, 33.98, 34.59, 34.27, 32.06, 28.30, 25.01],
        *[23.00, 20.15, 17.32, 13.18, 11.55, 9.33, 5.31, 2.59, 1.13],
    ]
)
"""Standard speech spectrum level, normal vocal effort, dB per hertz: ANSI S3.5-1997, table 3."""

# Beyond the table no standard speaks: below the first band voices have no partials, above the last they keep falling.
_SLOPE_BELOW_DB_PER_OCTAVE = 12.0
_SLOPE_ABOVE_DB_PER_OCTAVE = -6.0


def speed_of_sound(temperature_c: float = 20.0) -> float:
    """Speed of sound in dry air in m/s: ``343.2 * sqrt(T / 293.15)`` with T in kelvin (ISO 9613-1)."""
    return 343.2 * math.sqrt((temperature_c - _ABSOLUTE_ZERO_C) / 293.15)


def air_absorption_db_per_m(
    frequencies_hz: ArrayLike, *, temperature_c: float = 20.0, humidity_percent: float = 50.0
) -> Floats:
    """Attenuation by air in dB per metre at one atmosphere, ISO 9613-1 equations (3) to (5).

    `frequencies_hz` of any shape; the result has the same shape.
    """
    f = np.asarray(frequencies_hz, dtype=np.float64)
    kelvin = temperature_c - _ABSOLUTE_ZERO_C
    t = kelvin / 293.15
    saturation = 10.0 ** (-6.8346 * (273.16 / kelvin) ** 1.261 + 4.6151)
    h = humidity_percent * saturation
    relax_oxygen = 24.0 + 4.04e4 * h * (0.02 + h) / (0.391 + h)
    relax_nitrogen = t**-0.5 * (9.0 + 280.0 * h * math.exp(-4.170 * (t ** (-1 / 3) - 1.0)))
    vibration = 0.01275 * math.exp(-2239.1 / kelvin) / (relax_oxygen + f**2 / relax_oxygen)
    vibration = vibration + 0.1068 * math.exp(-3352.0 / kelvin) / (relax_nitrogen + f**2 / relax_nitrogen)
    return np.asarray(8.686 * f**2 * (1.84e-11 * math.sqrt(t) + t**-2.5 * vibration))


def unit_vector(azimuth: ArrayLike, elevation: ArrayLike = 0.0) -> Floats:
    """Unit vectors from the origin towards the bearings: shape of the inputs, then 3 (x front, y left, z up)."""
    az, el = np.broadcast_arrays(np.asarray(azimuth, np.float64), np.asarray(elevation, np.float64))
    return np.stack([np.cos(el) * np.cos(az), np.cos(el) * np.sin(az), np.sin(el)], axis=-1)


def direction_angles(vectors: ArrayLike) -> tuple[Floats, Floats]:
    """Azimuth and elevation in radians of vectors of shape (..., 3): the inverse of `unit_vector`."""
    v = np.asarray(vectors, dtype=np.float64)
    return np.arctan2(v[..., 1], v[..., 0]), np.arctan2(v[..., 2], np.hypot(v[..., 0], v[..., 1]))


def wrapped(angle: ArrayLike) -> Floats:
    """Angles in radians, brought to between -pi and pi: what a difference of azimuths amounts to."""
    return np.asarray(np.angle(np.exp(1j * np.asarray(angle))))


def pairwise_distances(positions_m: ArrayLike) -> Floats:
    """Distances in metres between all pairs of points: (points, 3) in, (points, points) out."""
    p = np.asarray(positions_m, dtype=np.float64)
    return np.asarray(np.linalg.norm(p[:, None, :] - p[None, :, :], axis=-1))


def diffuse_coherence(distances_m: ArrayLike, frequencies_hz: ArrayLike, speed_m_s: float = 343.2) -> Floats:
    """Coherence of two points in a diffuse (spherically isotropic) field: ``sin(x)/x``, x = 2 pi f d / c.

    Returns the shape of `frequencies_hz` followed by the shape of `distances_m`. Source: Cook et al. 1955; Kuttruff.
    """
    f = np.asarray(frequencies_hz, dtype=np.float64)
    d = np.asarray(distances_m, dtype=np.float64)
    return np.sinc(2.0 * np.multiply.outer(f, d) / speed_m_s)


def speech_spectrum_db(frequencies_hz: ArrayLike) -> Floats:
    """Long-term average speech spectrum level in dB per hertz, interpolated over log frequency.

    ANSI S3.5-1997 table 3 between 160 Hz and 8 kHz; outside it continued at +12 dB per octave below and -6 dB per
    octave above (common practice, no source), and constant below 40 Hz so that the level stays finite at 0 Hz.
    """
    f = np.maximum(np.asarray(frequencies_hz, dtype=np.float64), 40.0)
    octave = np.log2(f)
    edges = np.log2(SPEECH_SPECTRUM_HZ)
    level = np.interp(octave, edges, SPEECH_SPECTRUM_DB)
    level = level + _SLOPE_BELOW_DB_PER_OCTAVE * np.minimum(octave - edges[0], 0.0)
    return np.asarray(level + _SLOPE_ABOVE_DB_PER_OCTAVE * np.maximum(octave - edges[-1], 0.0))
