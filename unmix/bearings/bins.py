"""Which parts of a recording say where talkers are: time-frequency bins in which the direct sound arrives first.

Frames of 32 ms overlap by half. A bin at frequency f and frame t is taken when

- its power, averaged over microphones, exceeds the noise floor (the power that the quietest twentieth of the frames
  stays below) by `SNR_DB`, and
- it exceeds what is left of earlier sound, the largest earlier power decaying by 60 dB in `DECAY_S`, by `ONSET_DB`.

The second is the precedence effect put into a rule: after a rise in level the direct sound is heard before the
room's answer [1]_. Spectra are freed of the channels' known gains, delays and polarities, then whitened with the
coherence of a diffuse field plus self-noise, so that reverberation and the long wavelengths, which all microphones of
a small array hear alike, do not look like a direction:

    z = C^(-1) y / |C^(-1) y|,     C C^H = sinc(2 f d / c) + FLOOR I.

.. [1] R. Y. Litovsky, H. S. Colburn, W. A. Yost, S. J. Guzman, "The precedence effect", J. Acoust. Soc. Am. 106, 1999.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.array import Array
from unmix.model.delays import wave_delays
from unmix.physics import diffuse_coherence, pairwise_distances, speed_of_sound

__all__ = ["Bins", "Steering", "bin_segments", "make_steering"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Spectra = NDArray[np.complex64]
Indices = NDArray[np.int64]

FRAME_S = 0.032
SEGMENT_S = 10.0
LOWEST_HZ = 250.0
HIGHEST_HZ = 5000.0
SNR_DB = 10.0
ONSET_DB = 6.0
DECAY_S = 0.5
FLOOR = 0.05
# A level no recording's noise is under: 24 bits end at -144 dB.
_SILENCE = 1e-15


@dataclass(frozen=True)
class Bins:
    """Chosen bins of a stretch of recording.

    z           (bins, channels) whitened spectra of unit length
    frequency   (bins,) index into `Steering.frequency_hz`
    time_s      (bins,) centre of the bin's frame
    loud        (frames,) frames in which any bin exceeds the noise floor; frame_s their times
    """

    z: Spectra
    frequency: Indices
    time_s: Floats
    frame_s: Floats
    loud: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.z)

    def take(self, index: Indices | NDArray[np.bool_]) -> Bins:
        """Some of the bins."""
        return Bins(self.z[index], self.frequency[index], self.time_s[index], self.frame_s, self.loud)


def join(parts: list[Bins]) -> Bins:
    """Bins of several stretches as one."""
    z, frequency, time_s, frame_s, loud = (
        np.concatenate([getattr(p, name) for p in parts]) for name in ("z", "frequency", "time_s", "frame_s", "loud")
    )
    return Bins(z, frequency, time_s, frame_s, loud)


@dataclass(frozen=True)
class Steering:
    """What an array hears of a wave, whitened like the bins.

    frame, hop      samples
    frequency_hz    (frequencies,) those in use, first_bin the index of the first among a frame's
    whitening       (frequencies, channels, channels) the inverse factor C^(-1)
    equaliser       (frequencies, channels) undoes the channels' gain, delay and polarity
    """

    sample_rate: int
    frame: int
    hop: int
    first_bin: int
    frequency_hz: Floats
    positions_m: Floats
    speed_m_s: float
    whitening: NDArray[np.complex128]
    equaliser: NDArray[np.complex128]

    @property
    def channels(self) -> int:
        """Number of microphones."""
        return len(self.positions_m)

    def waves(self, vectors: Floats, directions: Floats | None = None, distance_m: float | None = None) -> Spectra:
        """Whitened steering vectors of unit length: (frequencies, points, channels).

        vectors     (points, 3) in the array's frame: unit vectors, or their projections onto the array's span
        directions  (points, 3) the unit vectors meant, needed for spherical waves from ``distance_m``
        """
        tau, gain = wave_delays(self.positions_m, vectors, None, self.speed_m_s)
        if distance_m is not None and directions is not None:
            distance = np.full(len(directions), distance_m)
            near, gain = wave_delays(self.positions_m, directions, distance, self.speed_m_s)
            tau = tau + near - wave_delays(self.positions_m, directions, None, self.speed_m_s)[0]
        phase = (-2.0 * np.pi * self.frequency_hz)[:, None, None] * tau
        b = (gain * np.exp(1j * phase)) @ np.swapaxes(self.whitening, 1, 2)
        return np.asarray(b / np.linalg.norm(b, axis=-1, keepdims=True), dtype=np.complex64)


def make_steering(
    array: Array, sample_rate: int, *, temperature_c: float = 20.0, spacing: float = 0.11, whiten: bool = True
) -> Steering:
    """Steering for an array; ``spacing`` of the search grid limits the highest frequency of wide arrays."""
    speed = speed_of_sound(temperature_c)
    frame = 2 * round(FRAME_S * sample_rate / 2)
    all_hz = np.fft.rfftfreq(frame, 1.0 / sample_rate)
    # A beam is a wavelength over the aperture wide; the grid must not step over it.
    highest = min(HIGHEST_HZ, 0.45 * sample_rate, max(1000.0, speed / (2.5 * spacing * array.aperture_m)))
    chosen = np.flatnonzero((all_hz >= LOWEST_HZ) & (all_hz <= highest))
    f: Floats = all_hz[chosen].astype(np.float64)
    coherence = diffuse_coherence(pairwise_distances(array.positions_m), f, speed) if whiten else np.zeros(())
    whitening = np.linalg.inv(np.linalg.cholesky(coherence + FLOOR * np.eye(array.channels)))
    whitening = np.broadcast_to(whitening, (len(f), array.channels, array.channels)).astype(np.complex128)
    gain = array.polarity * 10.0 ** (-array.gain_db / 20.0)
    equaliser = gain * np.exp(2j * np.pi * f[:, None] * array.delay_s)
    return Steering(sample_rate, frame, frame // 2, int(chosen[0]), f, array.positions_m, speed, whitening, equaliser)


def bin_segments(chunks: Iterable[Floats], steering: Steering) -> Iterator[Bins]:
    """Chosen bins of a recording, segment by segment (about `SEGMENT_S` each).

    chunks  (channels, any) in order; memory holds one segment at a time
    """
    frame, hop = steering.frame, steering.hop
    decayed = np.zeros(len(steering.frequency_hz))
    want = round(SEGMENT_S * steering.sample_rate)
    held: list[Floats] = []
    at = 0
    for block, last in _with_last(chunks):
        held.append(block)
        size = sum(h.shape[1] for h in held)
        if (size < want and not last) or size < frame:
            continue
        samples = np.concatenate(held, axis=1)
        frames = (size - frame) // hop + 1
        bins, decayed = _segment(samples, frames, at, decayed, steering)
        yield bins
        held = [samples[:, frames * hop :]]
        at += frames * hop


def _with_last(chunks: Iterable[Floats]) -> Iterator[tuple[Floats, bool]]:
    previous: Floats | None = None
    for chunk in chunks:
        if previous is not None:
            yield previous, False
        previous = chunk
    if previous is not None:
        yield previous, True


def _segment(samples: Floats, frames: int, at: int, decayed: Floats, s: Steering) -> tuple[Bins, Floats]:
    """Bins of one segment of ``frames`` frames that starts at sample ``at``."""
    window = np.hanning(s.frame + 1)[:-1].astype(np.float32)
    views = np.lib.stride_tricks.sliding_window_view(samples, s.frame, axis=1)[:, : frames * s.hop : s.hop]
    last = s.first_bin + len(s.frequency_hz)
    spectra = np.stack(
        [scipy.fft.rfft(v.astype(np.float32) * window, axis=1)[:, s.first_bin : last] for v in views], axis=-1
    )
    power: Floats = np.mean(spectra.real**2 + spectra.imag**2, axis=-1, dtype=np.float64)
    floor = np.maximum(np.quantile(power, 0.05, axis=0), _SILENCE * s.frame)
    audible = power > floor * 10.0 ** (SNR_DB / 10.0)
    onset, decayed = _onsets(power, decayed, s)
    frame_index, frequency = np.nonzero(audible & onset)
    y = spectra[frame_index, frequency]
    z = np.empty_like(y)
    order = np.argsort(frequency, kind="stable")
    starts = np.searchsorted(frequency[order], np.arange(len(s.frequency_hz) + 1))
    for i, (first, stop) in enumerate(itertools.pairwise(starts)):
        rows = order[first:stop]
        z[rows] = y[rows] @ (s.whitening[i] * s.equaliser[i]).T.astype(np.complex64)
    z /= np.maximum(np.linalg.norm(z, axis=1, keepdims=True), 1e-30)
    frame_s = (at + np.arange(frames) * s.hop + s.frame / 2) / s.sample_rate
    loud = np.mean(audible, axis=1) > 0.05
    return Bins(z, frequency, frame_s[frame_index], frame_s, loud), decayed


def _onsets(power: Floats, decayed: Floats, s: Steering) -> tuple[NDArray[np.bool_], Floats]:
    """Where power stands out of what is left of earlier sound; the frame just before overlaps and is left out."""
    decay = 10.0 ** (-6.0 * s.hop / s.sample_rate / DECAY_S)
    left = decayed
    before = np.empty_like(power)
    for t in range(len(power)):
        before[t] = left
        left = np.maximum(left * decay, power[t - 1] * decay if t else 0.0)
    return power > 10.0 ** (ONSET_DB / 10.0) * before, left
