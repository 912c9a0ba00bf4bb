"""Short-time objective intelligibility: STOI and its extended form ESTOI.

Both compare third-octave envelopes of a signal y with those of its clean reference x, at 10 kHz, in frames of 256
samples of which those more than 40 dB below the reference's loudest are taken out. X_j(m), Y_j(m) are the envelopes
in band j, taken in segments of N = 30 frames (384 ms).

STOI [1]_: y is scaled to the reference's energy per band and segment and clipped, Y' = min(a Y, (1 + 10^(15/20)) X);
the figure is the mean over bands and segments of the correlation coefficient of X and Y'.

ESTOI [2]_: segments are normalised to zero mean and unit norm along time, then along bands; the figure is the mean
over segments of (1/N) sum over frames of the inner products of the columns.

The reference's part is computed once for any number of signals. Figures equal those of `pystoi`, whose resampling
and band matrix are used; where it returns 1e-5 for lack of frames, the figure here is undefined, with the reason.

.. [1] C. H. Taal, R. C. Hendriks, R. Heusdens, J. Jensen, "An algorithm for intelligibility prediction of
   time-frequency weighted noisy speech", IEEE Trans. Audio, Speech and Language Processing 19(7), 2011.
.. [2] J. Jensen, C. H. Taal, "An algorithm for predicting the intelligibility of speech masked by modulated noise
   maskers", IEEE/ACM Trans. Audio, Speech and Language Processing 24(11), 2016.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.metrics.distortion import describe_unusable

__all__ = ["Intelligibility", "SpeechReference"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

RATE_HZ = 10_000
FRAME, HOP, TRANSFORM = 256, 128, 512
WINDOW = np.hanning(FRAME + 2)[1:-1]
SEGMENT = 30
DYNAMIC_RANGE_DB = 40.0
CLIP = 1.0 + 10.0 ** (15.0 / 20.0)
EPS = float(np.finfo(np.float64).eps)
CHUNK = 2048
"""Frames, and segments, worked on at a time: an hour's segments would fill gigabytes."""
KEEP_SEGMENTS = 16_384
"""References up to this many segments (three and a half minutes) keep their prepared segments for the next signal."""
SILENT = 1e-10
"""A segment whose envelopes stay below this share of the signal's largest (-200 dB) is rounding, not sound."""


@dataclass(frozen=True)
class Intelligibility:
    """STOI and ESTOI of one signal; None where undefined, with the reason."""

    stoi: float | None
    estoi: float | None
    undefined: str | None = None


class SpeechReference:
    """The reference's side of STOI and ESTOI, computed once for any number of signals.

    Parameters
    ----------
    reference : (samples,)
        Clean speech.
    sample_rate : int
        In hertz; other rates than 10 kHz are resampled.
    """

    def __init__(self, reference: Signals, sample_rate: int) -> None:
        self.sample_rate = sample_rate
        self.samples = reference.size
        self.undefined: str | None = None
        why = describe_unusable(reference)
        if why is not None:
            self.undefined = f"the reference {why}"
            return
        x = _resample(reference, sample_rate)
        if x.size <= FRAME:
            self.undefined = _too_short(0)
            return
        energy_db = 20.0 * np.log10(_frame_norms(x) + EPS)
        self._speech = np.flatnonzero(energy_db > energy_db.max() - DYNAMIC_RANGE_DB)
        self._bands = _bands(x, self._speech)
        if self._bands.shape[1] < SEGMENT:
            self.undefined = _too_short(self._bands.shape[1])
        self._loudest = float(self._bands.max(initial=0.0))
        self._kept: dict[int, _Prepared] = {}

    def compare(self, signal: Signals) -> Intelligibility:
        """STOI and ESTOI of `signal` (samples,), of the reference's length and aligned with it."""
        if self.undefined is not None:
            return Intelligibility(None, None, self.undefined)
        why = describe_unusable(signal)
        if why is not None:
            return Intelligibility(None, None, f"the estimate {why}")
        bands = _bands(_resample(signal, self.sample_rate), self._speech)
        loudest = float(bands.max())
        count = bands.shape[1] - SEGMENT + 1
        stoi = estoi = 0.0
        for first in range(0, count, CHUNK):
            x, y = self._prepared(first), _segments(bands, first)
            scaled = y * (x.norms / (np.linalg.norm(y, axis=2, keepdims=True) + EPS))
            np.minimum(scaled, x.limit, out=scaled)
            stoi += float(np.vdot(_unit(_centred(scaled, 2), 2), x.correlated))
            estoi += float(np.vdot(_normalise(y, loudest), x.extended))
        return Intelligibility(stoi / (len(bands) * count), estoi / (SEGMENT * count))

    def _prepared(self, first: int) -> _Prepared:
        if first not in self._kept:
            x = _segments(self._bands, first)
            prepared = _Prepared(
                norms=np.linalg.norm(x, axis=2, keepdims=True),
                limit=CLIP * x,
                correlated=_unit(_centred(x, 2), 2),
                extended=_normalise(x, self._loudest),
            )
            if self._bands.shape[1] > KEEP_SEGMENTS:
                return prepared
            self._kept[first] = prepared
        return self._kept[first]


@dataclass(frozen=True)
class _Prepared:
    """What the figures need of a chunk of the reference's segments, (segments, bands, SEGMENT)."""

    norms: Floats
    limit: Floats
    correlated: Floats
    extended: Floats


def _too_short(frames: int) -> str:
    heard_s = frames * HOP / RATE_HZ
    return f"too short: {heard_s:.2f} s of speech once silence is taken out, {SEGMENT * HOP / RATE_HZ:.2f} s are needed"


def _resample(signal: Signals, sample_rate: int) -> Floats:
    x = np.asarray(signal, dtype=np.float64)
    if sample_rate == RATE_HZ:
        return x
    from pystoi.utils import resample_oct

    return np.asarray(resample_oct(x, RATE_HZ, sample_rate))


def _frames(x: Floats) -> Floats:
    """Frames of x, (frames, FRAME), a view; one that would end on the last sample is left out, as in published code."""
    return np.lib.stride_tricks.sliding_window_view(x[:-1], FRAME)[::HOP]


def _chunks(count: int) -> Iterator[slice]:
    return (slice(first, min(first + CHUNK, count)) for first in range(0, count, CHUNK))


def _frame_norms(x: Floats) -> Floats:
    frames = _frames(x)
    return np.concatenate([np.linalg.norm(frames[part] * WINDOW, axis=1) for part in _chunks(len(frames))])


def _bands(x: Floats, chosen: NDArray[np.intp]) -> Floats:
    """Third-octave envelopes (bands, frames) of the signal that the `chosen` frames of x overlap-add to."""
    from pystoi.stoi import OBM

    frames = _frames(x)
    joined = np.zeros((len(chosen) + 1, HOP))
    for part in _chunks(len(chosen)):
        windowed = frames[chosen[part]] * WINDOW
        joined[part] += windowed[:, :HOP]
        joined[part.start + 1 : part.stop + 1] += windowed[:, HOP:]
    again = _frames(joined.reshape(-1))
    bands = np.empty((len(OBM), len(again)))
    for part in _chunks(len(again)):
        spectra = scipy.fft.rfft(again[part] * WINDOW, n=TRANSFORM, axis=1)
        bands[:, part] = np.sqrt(OBM @ (np.square(spectra.real) + np.square(spectra.imag)).T)
    return bands


def _segments(bands: Floats, first: int) -> Floats:
    """Stretches of SEGMENT frames from `first` and the CHUNK - 1 frames after it on: (segments, bands, SEGMENT)."""
    stretch = bands[:, first : first + CHUNK + SEGMENT - 1]
    return np.lib.stride_tricks.sliding_window_view(stretch, SEGMENT, axis=1).transpose(1, 0, 2)


def _centred(x: Floats, axis: int) -> Floats:
    return np.asarray(x - x.mean(axis=axis, keepdims=True))


def _unit(x: Floats, axis: int) -> Floats:
    return np.asarray(x / (np.linalg.norm(x, axis=axis, keepdims=True) + EPS))


def _normalise(segments: Floats, loudest: float) -> Floats:
    """Zero mean and unit norm along time, then along bands; what is rounding only becomes zero."""
    rows = _centred(segments, 2)
    norms = np.linalg.norm(rows, axis=2, keepdims=True)
    rows = rows * np.divide(1.0, norms, out=np.zeros_like(norms), where=norms > SILENT * loudest)
    columns = _centred(rows, 1)
    norms = np.linalg.norm(columns, axis=1, keepdims=True)
    return np.asarray(columns * np.divide(1.0, norms, out=np.zeros_like(norms), where=norms > SILENT))
