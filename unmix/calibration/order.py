"""Whether channels are where the array file says: polarity, gain and order of the channels against the geometry.

From short stretches of the recording in which one direction dominates (a covariance of nearly rank one), the leading
eigenvector v of each time-frequency cell is compared with waves from all directions. If two channels are swapped,
exchanging them fits better:

    fit(order) = mean over cells of max_u |a(u)^H v_order|^2 / M

All exchanges of two channels are tried, the best one is kept, and again. What a symmetry of the array hides (a ring
turned by one microphone, a pair) is seen where the talkers' bearings are known, and u runs over those alone.

Polarity and gain come from low frequencies, at which the array is small against a quarter of the wavelength: there all
microphones hear alike whatever the sound field.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.array import Array
from unmix.model.delays import wave_delays
from unmix.physics import direction_angles, speed_of_sound, unit_vector

__all__ = ["FieldMeter", "FieldReading", "OrderFit"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

CHUNKS = 40
FRAME_S = 0.032
GROUP = 3
CELLS_PER_CHUNK = 120
PURE = 0.9
"""Least |C|_F^2 / tr(C)^2 of a cell: 1 for a single direction."""
LOWEST_HZ, HIGHEST_HZ = 1000.0, 4000.0
"""Of cells; a large array may use lower ones, down to a quarter wavelength across it."""
LEAST_LOW_HZ = 120.0
DIRECTIONS = 300
LEAST_GAIN = 0.01
TRIED, FEWEST_TRIED = 40_000, 300
"""Cells times exchanges that are tried, and the fewest cells."""


@dataclass(frozen=True)
class OrderFit:
    """order[m]: the recorded channel that fits microphone m best; how much better than as given, in deviations."""

    order: tuple[int, ...]
    fit: float
    fit_as_given: float
    deviations: float


@dataclass(frozen=True)
class FieldReading:
    """What low frequencies and cells tell.

    sign        (channels,) +1 or -1, relative to the majority; None when the array is too large or silent
    sureness    (channels,) least magnitude of the coherence that the sign was read off, 0 to 1
    gain_db     (channels,) level at low frequencies relative to the median channel
    order       None when there are too few cells, or two channels and no known source
    """

    sign: NDArray[np.int64] | None
    sureness: Floats
    gain_db: Floats | None
    order: OrderFit | None


class FieldMeter:
    """Takes in chunks in order; looks at `CHUNKS` of them."""

    def __init__(
        self,
        array: Array,
        sample_rate: int,
        samples: int,
        chunk: int,
        temperature_c: float = 20.0,
        *,
        sources: tuple[Floats, Floats] | None = None,
    ) -> None:
        """`sources` are directions (n, 3) and distances (n,), NaN for far, of the only sources, where they are known:
        a swap that a symmetry of the array would hide is then seen."""
        self._array, self._rate, self._c = array, sample_rate, speed_of_sound(temperature_c)
        self._sources = sources
        self._every = max(1, round(samples / max(chunk, 1) / CHUNKS))
        self._frame = scipy.fft.next_fast_len(round(FRAME_S * sample_rate), real=True)
        self._window = np.hanning(self._frame + 1)[:-1].astype(np.float32)
        self._f = scipy.fft.rfftfreq(self._frame, 1.0 / sample_rate)
        lowest = min(LOWEST_HZ, max(self._c / (4.0 * max(array.aperture_m, 1e-6)), 200.0))
        # Beams no narrower than the directions tried lie apart.
        highest = min(HIGHEST_HZ, max(2.0 * self._c / max(array.aperture_m, 1e-6), 600.0), 0.4 * sample_rate)
        self._used = np.flatnonzero((self._f >= lowest) & (self._f <= highest))
        self._low_hz = min(self._c / (4.0 * max(array.aperture_m, 1e-6)), 1000.0)
        self._low = np.flatnonzero((self._f >= 80.0) & (self._f <= self._low_hz))
        self._low_sum = np.zeros((array.channels, array.channels), np.complex128)
        self._seen = 0
        self._vectors: list[Complexes] = []
        self._bins: list[NDArray[np.int64]] = []
        self._when: list[NDArray[np.int64]] = []

    def add(self, chunk: Floats) -> None:
        """Take in (channels, samples)."""
        self._seen += 1
        if (self._seen - 1) % self._every or chunk.shape[1] < 2 * GROUP * self._frame:
            return
        count = chunk.shape[1] // self._frame
        frames = chunk[:, : count * self._frame].astype(np.float32).reshape(len(chunk), count, self._frame)
        spectra = scipy.fft.rfft(frames * self._window, axis=-1).transpose(2, 1, 0)  # (bins, frames, channels)
        low = spectra[self._low].reshape(-1, self._array.channels).astype(np.complex128)
        self._low_sum += low.T @ low.conj()
        self._add_cells(spectra[self._used])

    def _add_cells(self, spectra: NDArray[np.complex64]) -> None:
        groups = spectra.shape[1] // GROUP
        cells = spectra[:, : groups * GROUP].reshape(len(spectra), groups, GROUP, -1)
        power = np.mean(np.abs(cells) ** 2, axis=(2, 3))
        # Cells that stand out of their own frequency first, not the low frequencies that are loudest but tell least; of
        # them those of nearly one direction.
        standing = power / np.maximum(np.median(power, axis=1, keepdims=True), 1e-20)
        rank = np.argsort(standing, axis=None)[::-1][: 8 * CELLS_PER_CHUNK]
        bins, when = np.unravel_index(rank, power.shape)
        chosen = cells[bins, when].astype(np.complex128)
        covariance = np.swapaxes(chosen, 1, 2) @ chosen.conj()
        total = np.einsum("cmm->c", covariance).real
        pure = np.sum(np.abs(covariance) ** 2, axis=(1, 2)) / np.maximum(total, 1e-30) ** 2
        kept = np.flatnonzero((pure > PURE) & (total > 1e-18))[:CELLS_PER_CHUNK]
        if len(kept) == 0:
            return
        self._vectors.append(np.linalg.eigh(covariance[kept])[1][:, :, -1])
        self._bins.append(self._used[bins[kept]])
        self._when.append(1000 * self._seen + when[kept])

    def reading(self, trusted: NDArray[np.bool_]) -> FieldReading:
        """What was found; `trusted` channels are those that are alive and on the common clock."""
        m = self._array.channels
        sign, sureness, gain = self._low_frequencies(trusted)
        order = None
        if trusted.all() and (m > 2 or self._sources is not None) and sum(map(len, self._bins)) >= 40:
            order = self._order(np.asarray(self._array.polarity * (1 if sign is None else sign), np.float64), gain)
        return FieldReading(sign, sureness, gain, order)

    def _low_frequencies(self, trusted: NDArray[np.bool_]) -> tuple[NDArray[np.int64] | None, Floats, Floats | None]:
        m = self._array.channels
        power = np.diag(self._low_sum).real
        if self._low_hz < LEAST_LOW_HZ or trusted.sum() < 2 or not np.all(power[trusted] > 0.0):
            return None, np.zeros(m), None
        index = np.flatnonzero(trusted)
        scale = np.sqrt(power[index])
        coherence = (self._low_sum[np.ix_(index, index)] / np.outer(scale, scale)).real
        leading = np.linalg.eigh(coherence)[1][:, -1]
        side = np.where(leading >= 0.0, 1, -1)
        if side.sum() < 0 or (side.sum() == 0 and side[0] < 0):
            side = -side
        sign, sureness, gain = np.ones(m, np.int64), np.zeros(m), np.zeros(m)
        sign[index] = side
        off = np.abs(coherence - np.diag(np.diag(coherence)))
        sureness[index] = off.sum(axis=1) / max(1, len(index) - 1)
        known = self._array.gain_db[index]
        level = 10.0 * np.log10(power[index]) - known
        gain[index] = level - np.median(level)
        return sign * self._array.polarity, sureness, gain

    def _order(self, sign: Floats, gain_db: Floats | None) -> OrderFit:
        vectors, bins, when = np.concatenate(self._vectors), np.concatenate(self._bins), np.concatenate(self._when)
        level = np.zeros(len(sign)) if gain_db is None else gain_db
        equaliser = sign * 10.0 ** (-(level + self._array.gain_db) / 20.0)
        vectors = vectors * equaliser * np.exp(2j * np.pi * self._f[bins][:, None] * self._array.delay_s)
        vectors = vectors / np.linalg.norm(vectors, axis=1, keepdims=True)
        order = np.arange(len(sign))
        most = max(FEWEST_TRIED, TRIED // (len(sign) * (len(sign) - 1) // 2))
        kept = np.linspace(0, len(vectors) - 1, min(most, len(vectors))).astype(np.int64)
        vectors, bins, when = vectors[kept], bins[kept], when[kept]
        given = best = self._fits(vectors, bins, order[None])[:, 0]
        for _ in range(len(sign) - 1):
            trials = _exchanges(order)
            fits = self._fits(vectors, bins, trials)
            winner = int(np.argmax(fits.mean(axis=0)))
            if fits[:, winner].mean() <= best.mean() + LEAST_GAIN or _deviations(fits[:, winner] - best, when) < 3.0:
                break
            order, best = trials[winner], fits[:, winner]
        deviations = _deviations(best - given, when) if not np.array_equal(order, np.arange(len(sign))) else 0.0
        return OrderFit(tuple(int(o) for o in order), float(best.mean()), float(given.mean()), deviations)

    def _waves(self) -> tuple[Floats, Floats]:
        """Delays and gains (directions, channels) of the waves that are tried."""
        if self._sources is None:
            return wave_delays(self._array.positions_m, _sphere(DIRECTIONS), None, self._c)
        tau, gain = wave_delays(self._array.positions_m, *self._sources, self._c)
        return tau, _level(gain)

    def _fits(self, vectors: Complexes, bins: NDArray[np.int64], orders: NDArray[np.int64]) -> Floats:
        """max_u |a(u)^H v_order|^2 / M: (cells, orders)."""
        tau, gain = self._waves()
        out = np.zeros((len(vectors), len(orders)))
        for b in np.unique(bins):
            at = np.flatnonzero(bins == b)
            waves = (gain * np.exp(-2j * np.pi * self._f[b] * tau)).astype(np.complex64)
            tried = vectors[at][:, orders].astype(np.complex64)
            score = np.abs(tried.reshape(-1, tried.shape[-1]) @ waves.conj().T).max(axis=1) ** 2
            out[at] = score.reshape(len(at), len(orders)) / vectors.shape[1]
        return out


def _level(gain: Floats) -> Floats:
    """Gains of mean square 1 over the channels."""
    return np.asarray(gain / np.sqrt(np.mean(gain**2, axis=-1, keepdims=True)))


def _exchanges(order: NDArray[np.int64]) -> NDArray[np.int64]:
    """Every order that differs by one exchange: (exchanges, channels)."""
    first, second = np.triu_indices(len(order), 1)
    trials = np.repeat(order[None], len(first), axis=0)
    rows = np.arange(len(first))
    trials[rows, first], trials[rows, second] = order[second], order[first]
    return trials


def _deviations(gain: Floats, when: NDArray[np.int64]) -> float:
    """Mean gain over its standard error; cells of one moment count as one."""
    moments, index = np.unique(when, return_inverse=True)
    means = np.bincount(index, gain) / np.bincount(index)
    if len(moments) < 5:
        return 0.0
    return float(means.mean() / max(means.std(ddof=1) / np.sqrt(len(means)), 1e-9))


def _sphere(points: int) -> Floats:
    k = np.arange(points)
    z = 1.0 - (2.0 * k + 1.0) / points
    azimuth = np.pi * (1.0 + 5.0**0.5) * k
    r = np.sqrt(1.0 - z**2)
    vectors = np.stack([r * np.cos(azimuth), r * np.sin(azimuth), z], axis=-1)
    # Talkers sit level with the array more often than not: a ring besides.
    ring = unit_vector(2.0 * np.pi * np.arange(72) / 72)
    return np.asarray(unit_vector(*direction_angles(np.concatenate([vectors, ring]))))
