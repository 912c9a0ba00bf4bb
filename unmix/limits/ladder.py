"""Talkers ever closer, over third octaves: singular values, noise gain, usable band, best output SNR.

Talkers are plane waves of equal power, spread evenly `separation` apart; `CENTRES` bearings of the group are tried, as
few arrays see alike in all directions. With H (channels, talkers) at one frequency and white noise in the microphones,

    noise gain of talker k    [(H^H H)^-1]_kk                              noise out over noise in one microphone
    best error of talker k    sigma2 [(H^H H + sigma2 / P I)^-1]_kk         least mean square error, talker power P

the first of the solve that lets every talker through unchanged, the second of any linear one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.array import Array
from unmix.model.delays import paths_from_bearings
from unmix.physics import speech_spectrum_db

__all__ = [
    "SEPARATIONS_DEG",
    "Ladder",
    "UsableBand",
    "best_snr_db",
    "climb",
    "noise_gain",
    "responses",
    "spectrum_weights",
    "third_octaves",
    "usable_band",
]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Spectrum = Literal["white", "speech"]

SEPARATIONS_DEG = (5.0, 10.0, 15.0, 20.0, 30.0, 45.0, 60.0, 90.0, 120.0, 150.0, 180.0)
CENTRES = 24
"""Bearings tried of each group of talkers."""
POINTS = 5
"""Frequencies per third octave."""
CAP_DB = 200.0
"""Noise gains are not told apart beyond this: double precision ends there."""
# Off the axes of symmetry, so that no talker sits on one by accident of the grid.
_TURN = 0.0371


@dataclass(frozen=True)
class Ladder:
    """Resolution over separations and third octaves; gains in dB, capped at `CAP_DB`.

    separation_deg   (separations,)
    band_hz          (bands,) midbands
    singular_values  (separations, bands, talkers), largest first, median over bearings
    noise_gain_db    (separations, bands) of the worst talker, median over bearings
    worst_gain_db    the same at the worst bearing
    best_snr_db      (separations,) output SNR over all bands at best, median over bearings
    """

    separation_deg: Floats
    band_hz: Floats
    singular_values: Floats
    noise_gain_db: Floats
    worst_gain_db: Floats
    best_snr_db: Floats


@dataclass(frozen=True)
class UsableBand:
    """Third octaves in which a talker comes out far enough above the noise.

    lowest_hz, highest_hz  lower edge of the first, upper edge of the last usable one; None when there is none
    share                  of the bands between them that are usable
    """

    lowest_hz: float | None
    highest_hz: float | None
    share: float


def third_octaves(lowest_hz: float, highest_hz: float) -> Floats:
    """Exact midbands 1000 * 2^(n/3) whose whole band lies between the two frequencies."""
    n = np.arange(-40, 41)
    middle = 1000.0 * 2.0 ** (n / 3.0)
    edge = 2.0 ** (1.0 / 6.0)
    tolerance = 1.0 + 1e-9
    inside = (middle / edge >= lowest_hz / tolerance) & (middle * edge <= highest_hz * tolerance)
    return np.asarray(middle[inside])


def band_points(band_hz: Floats, points: int = POINTS) -> Floats:
    """Frequencies (bands, points) that stand for each third octave, evenly spaced in it."""
    share = (np.arange(points) + 0.5) / points
    low, high = band_hz / 2.0 ** (1.0 / 6.0), band_hz * 2.0 ** (1.0 / 6.0)
    return np.asarray(low[:, None] + share * (high - low)[:, None])


def group_azimuths(separation: float, talkers: int = 2, centres: int = CENTRES) -> Floats:
    """Azimuths (centres, talkers) in radians of talkers `separation` radians apart, about bearings all around."""
    centre = 2.0 * np.pi * np.arange(centres) / centres + _TURN
    return np.asarray(centre[:, None] + separation * (np.arange(talkers) - 0.5 * (talkers - 1)))


def responses(array: Array, azimuth: Floats, frequency_hz: Floats, temperature_c: float = 20.0) -> Complexes:
    """H of plane waves: azimuth (groups, talkers) and frequencies (n,) to (groups, n, channels, talkers)."""
    paths = paths_from_bearings(array, azimuth, temperature_c=temperature_c)
    delay, gain = np.swapaxes(paths.delay_s, -1, -2)[:, None], np.swapaxes(paths.gain, -1, -2)[:, None]
    return np.asarray(gain * np.exp(-2j * np.pi * frequency_hz[:, None, None] * delay))


def noise_gain(h: Complexes, precision: ArrayLike = 0.0) -> Floats:
    """[(H^H H + q)^-1 H^H H (H^H H + q)^-1]_kk for H (..., channels, talkers); q (...) a prior's precision, or 0.

    Power of a talker's noise over that in one microphone. Capped at `CAP_DB`.
    """
    gram, inverse = _inverse(h, precision)
    diagonal = np.einsum("...kk->...k", inverse @ gram @ inverse).real
    return np.asarray(np.clip(diagonal, 10.0 ** (-CAP_DB / 10.0), 10.0 ** (CAP_DB / 10.0)))


def _inverse(h: Complexes, precision: ArrayLike) -> tuple[Complexes, Complexes]:
    gram = np.swapaxes(h.conj(), -1, -2) @ h
    floor = 1e-15 * np.einsum("...kk->...", gram).real
    q = np.asarray(precision, np.float64) + floor
    return gram, np.asarray(np.linalg.inv(gram + q[..., None, None] * np.eye(h.shape[-1])))


def spectrum_weights(frequency_hz: Floats, spectrum: Spectrum) -> Floats:
    """Power density of a talker relative to its mean over the frequencies, which are evenly spread."""
    if spectrum == "white":
        return np.ones_like(frequency_hz)
    power = 10.0 ** (speech_spectrum_db(frequency_hz) / 10.0)
    return np.asarray(power / power.mean())


def best_snr_db(h: Complexes, power: Floats, noise: float) -> Floats:
    """Output SNR over all frequencies at best, in dB: (..., frequencies, channels, talkers) to (..., talkers).

    power  (frequencies,) a talker's power density at one microphone; noise: that of the microphone's own noise
    """
    _, inverse = _inverse(h, noise / power)
    error = noise * np.einsum("...kk->...k", inverse).real
    return np.asarray(10.0 * np.log10(power.sum() / error.sum(axis=-2)))


def climb(
    array: Array,
    band_hz: Floats,
    *,
    separations_deg: ArrayLike = SEPARATIONS_DEG,
    talkers: int = 2,
    snr_db: float = 30.0,
    spectrum: Spectrum = "speech",
    temperature_c: float = 20.0,
) -> Ladder:
    """The ladder of an array. `snr_db` is a talker over one microphone's own noise, over all bands."""
    separations = np.asarray(separations_deg, np.float64)
    frequency = band_points(band_hz)
    even = np.linspace(frequency.min(), frequency.max(), 128)
    power = spectrum_weights(even, spectrum)
    values, gains, worst, best = [], [], [], []
    for separation in np.radians(separations):
        azimuth = group_azimuths(float(separation), talkers)
        h = responses(array, azimuth, frequency.ravel(), temperature_c)
        shape = (len(azimuth), *frequency.shape)
        s = np.linalg.svd(h, compute_uv=False).reshape(*shape, talkers)
        in_band = 10.0 * np.log10(noise_gain(h).reshape(*shape, talkers).mean(axis=2).max(axis=-1))
        values.append(np.median(s.mean(axis=2), axis=0))
        gains.append(np.median(in_band, axis=0))
        worst.append(in_band.max(axis=0))
        snr = best_snr_db(responses(array, azimuth, even, temperature_c), power, 10.0 ** (-snr_db / 10.0))
        best.append(np.median(snr.min(axis=-1)))
    return Ladder(separations, band_hz, np.array(values), np.array(gains), np.array(worst), np.array(best))


def usable_band(band_hz: Floats, noise_gain_db: Floats, snr_db: float, required_db: float = 10.0) -> UsableBand:
    """Where talkers come out at least `required_db` above the noise when each microphone hears them at `snr_db`."""
    usable = np.flatnonzero(snr_db - noise_gain_db >= required_db)
    if len(usable) == 0:
        return UsableBand(None, None, 0.0)
    first, last = int(usable[0]), int(usable[-1])
    edge = 2.0 ** (1.0 / 6.0)
    return UsableBand(float(band_hz[first] / edge), float(band_hz[last] * edge), len(usable) / (last - first + 1))
