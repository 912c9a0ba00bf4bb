"""Short-time objective intelligibility: STOI and its extended form ESTOI.

Both compare third-octave envelopes of a signal y with those of its clean reference x, at 10 kHz, in frames of 256
samples of which those more than 40 dB below the reference's loudest are taken out. X_j(m), Y_j(m) are the envelopes
in band j, taken in segments of N = 30 frames (384 ms).

STOI [1]_: y is scaled to the reference's energy per band and segment and clipped, Y' = min(a Y, (1 + 10^(15/20)) X);
the figure is the mean over bands and segments of the correlation coefficient of X and Y'.

ESTOI [2]_: segments are normalised to zero mean and unit norm along time, then along bands; the figure is the mean
over segments of (1/N) sum over frames of the inner products of the columns.

The reference's part is computed once for any number of signals. Figures equal those of `pystoi`, whose band matrix and
resampling filter are used; where it returns 1e-5 for lack of frames, the figure here is undefined, with the reason.

Segments overlap by all but one frame. They are never laid out: sums over their frames run over N shifts of the
envelopes, a few hundred segments at a time, which stay in the processor's cache; an hour needs its envelopes only.

Frames are chosen by the reference, so those of a mixture s + g n are the sums of its parts', and with S, N the parts'
spectra its squared envelopes are sum |S|^2 + 2 g sum Re(S* N) + g^2 sum |N|^2 over the band: `SpeechReference.mixed`.

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
from unmix.metrics.resampling import Resampled

__all__ = ["Intelligibility", "Mixtures", "SpeechReference"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Signals = NDArray[np.floating[Any]]

RATE_HZ = 10_000
FRAME, HOP, TRANSFORM = 256, 128, 512
WINDOW = np.hanning(FRAME + 2)[1:-1]
SEGMENT = 30
DYNAMIC_RANGE_DB = 40.0
CLIP = 1.0 + 10.0 ** (15.0 / 20.0)
EPS = float(np.finfo(np.float64).eps)
CHUNK = 1024
"""Frames worked on at a time."""
PAUSE = 64
"""Frames of a pause from which on it is jumped over, not read."""
SEGMENTS = 384
"""Segments worked on at a time: few enough for the processor's cache."""
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
        x = self._resampled(reference)
        if x.size <= FRAME:
            self.undefined = _too_short(0)
            return
        energy_db = 20.0 * np.log10(_frame_norms(x) + EPS)
        self._speech = np.flatnonzero(energy_db > energy_db.max() - DYNAMIC_RANGE_DB)
        self._bands = self._envelopes(x)
        if self._bands.shape[1] < SEGMENT:
            self.undefined = _too_short(self._bands.shape[1])
        self._loudest = float(self._bands.max(initial=0.0))

    def compare(self, signal: Signals) -> Intelligibility:
        """STOI and ESTOI of `signal` (samples,), of the reference's length and aligned with it."""
        if self.undefined is not None:
            return Intelligibility(None, None, self.undefined)
        why = describe_unusable(signal)
        if why is not None:
            return Intelligibility(None, None, f"the estimate {why}")
        bands = self._envelopes(self._resampled(signal))
        loudest = float(bands.max())
        stoi = estoi = 0.0
        for x, y in self._side_by_side(bands):
            stoi += _correlation(x, y)
            estoi += _extended_correlation(x, y, self._loudest, loudest)
        count = bands.shape[1] - SEGMENT + 1
        return Intelligibility(stoi / (len(bands) * count), estoi / (SEGMENT * count))

    def mixed(self, reference: Signals, other: Signals) -> Mixtures:
        """Mixtures of the reference, given again, with `other` (samples,); for a reference that is not undefined."""
        return Mixtures(self, *self._products(self._resampled(reference), self._resampled(other)))

    def stoi_of(self, bands: Floats) -> float:
        """STOI of a signal of which the envelopes in the reference's frames of speech are known: (bands, frames)."""
        total = sum((_correlation(x, y) for x, y in self._side_by_side(bands)), 0.0)
        return float(total / (len(bands) * (bands.shape[1] - SEGMENT + 1)))

    def _side_by_side(self, bands: Floats) -> Iterator[tuple[_Segments, _Segments]]:
        """The segments of the reference and those of a signal's envelopes, some at a time."""
        count = bands.shape[1] - SEGMENT + 1
        for first in range(0, count, SEGMENTS):
            last = min(first + SEGMENTS, count)
            yield _Segments(self._bands, first, last), _Segments(bands, first, last)

    def _resampled(self, signal: Signals) -> Resampled:
        return Resampled(signal, self.sample_rate, RATE_HZ)

    def _envelopes(self, x: Resampled) -> Floats:
        """Third-octave envelopes (bands, frames) of the signal that the frames of speech overlap-add to."""
        bands = _no_bands(self._speech)
        for part in _chunks(bands.shape[1]):
            S = _spectra(x, self._speech, part)
            bands[:, part] = np.sqrt(_summed(np.square(S.real) + np.square(S.imag)))
        return bands

    def _products(self, x: Resampled, other: Resampled) -> tuple[Floats, Floats, Floats]:
        """Sums over each band of |S|^2, Re(S* N) and |N|^2: (bands, frames) each."""
        own, joint, others = (_no_bands(self._speech) for _ in range(3))
        for part in _chunks(own.shape[1]):
            S, N = (_spectra(y, self._speech, part) for y in (x, other))
            own[:, part] = _summed(np.square(S.real) + np.square(S.imag))
            joint[:, part] = _summed(S.real * N.real + S.imag * N.imag)
            others[:, part] = _summed(np.square(N.real) + np.square(N.imag))
        return own, joint, others


@dataclass(frozen=True)
class Mixtures:
    """A reference with others mixed in at any gain; `own`, `joint`, `others` as `_products` gives them."""

    speech: SpeechReference
    own: Floats
    joint: Floats
    others: Floats

    def stoi(self, gain: float) -> float:
        """STOI of the reference plus `gain` times the others."""
        power = self.own + 2.0 * gain * self.joint + gain**2 * self.others
        return self.speech.stoi_of(np.sqrt(np.maximum(power, 0.0)))


class _Segments:
    """Segments first..last - 1 of envelopes (bands, frames), frame by frame of the segments."""

    def __init__(self, bands: Floats, first: int, last: int) -> None:
        self._bands, self._first, self._last = bands, first, last
        self.mean = np.sum([*self.frames()], axis=0) / SEGMENT
        energy, spread = np.zeros_like(self.mean), np.zeros_like(self.mean)
        for frame in self.frames():
            energy += np.square(frame)
            spread += np.square(frame - self.mean)
        self.norm = np.sqrt(energy)
        self.spread = np.sqrt(spread)

    def frames(self) -> Iterator[Floats]:
        """The segments' first frames, then their second, ...: SEGMENT times (bands, segments)."""
        return (self._bands[:, self._first + n : self._last + n] for n in range(SEGMENT))

    def unit_scale(self, loudest: float) -> Floats:
        """Factors that make centred segments as long as 1; 0 for those that are rounding only."""
        heard = self.spread > SILENT * loudest
        return np.asarray(np.divide(1.0, self.spread, out=np.zeros_like(self.spread), where=heard))


def _correlation(x: _Segments, y: _Segments) -> float:
    """Sum over bands and segments of the correlation coefficients of x with y, scaled and clipped."""
    scale = x.norm / (y.norm + EPS)
    middle = scale * y.mean  # near the clipped segments' means, so that little cancels
    total, energy, product = (np.zeros_like(middle) for _ in range(3))
    for X, Y in zip(x.frames(), y.frames(), strict=True):
        clipped = np.minimum(scale * Y, CLIP * X)
        clipped -= middle
        total += clipped
        energy += np.square(clipped)
        clipped *= X - x.mean
        product += clipped
    spread = np.sqrt(np.maximum(energy - np.square(total) / SEGMENT, 0.0))
    return float(np.sum(product / ((x.spread + EPS) * (spread + EPS))))


def _extended_correlation(x: _Segments, y: _Segments, loudest_x: float, loudest_y: float) -> float:
    """Sum over segments and frames of the correlation of x and y along the bands, both of unit norm along time."""
    scale_x, scale_y = x.unit_scale(loudest_x), y.unit_scale(loudest_y)
    total = 0.0
    for X, Y in zip(x.frames(), y.frames(), strict=True):
        rows, others = (X - x.mean) * scale_x, (Y - y.mean) * scale_y
        rows -= rows.mean(axis=0)
        others -= others.mean(axis=0)
        norms = [np.sqrt(np.einsum("bs,bs->s", r, r)) for r in (rows, others)]
        heard = (norms[0] > SILENT) & (norms[1] > SILENT)
        inner = np.einsum("bs,bs->s", rows, others)
        total += float(np.sum(inner[heard] / (norms[0][heard] * norms[1][heard])))
    return total


def _too_short(frames: int) -> str:
    heard_s = frames * HOP / RATE_HZ
    return f"too short: {heard_s:.2f} s of speech once silence is taken out, {SEGMENT * HOP / RATE_HZ:.2f} s are needed"


def _chunks(count: int) -> Iterator[slice]:
    return (slice(first, min(first + CHUNK, count)) for first in range(0, count, CHUNK))


def _frames(x: Floats) -> Floats:
    return np.asarray(np.lib.stride_tricks.sliding_window_view(x, FRAME)[::HOP])


def _frame_norms(x: Resampled) -> Floats:
    """Norms of the windowed frames; one that would end on the last sample is left out, as in published code."""
    count = (x.size - 1 - FRAME) // HOP + 1
    norms = np.empty(count)
    for part in _chunks(count):
        frames = _frames(x.stretch(part.start * HOP, (part.stop - 1) * HOP + FRAME))
        norms[part] = np.linalg.norm(frames * WINDOW, axis=1)
    return norms


def _chosen(x: Resampled, chosen: NDArray[np.intp]) -> Floats:
    """The chosen frames, windowed: (frames, FRAME). Long pauses between them are not read."""
    runs = np.split(chosen, np.flatnonzero(np.diff(chosen) > PAUSE) + 1)
    frames = [_frames(x.stretch(run[0] * HOP, run[-1] * HOP + FRAME))[run - run[0]] for run in runs]
    return np.asarray(np.concatenate(frames) * WINDOW)


def _spectra(x: Resampled, speech: NDArray[np.intp], part: slice) -> Complexes:
    """Spectra of frames `part` of the signal that the frames of speech overlap-add to: (frames, bins)."""
    before = 1 if part.start else 0
    windowed = _chosen(x, speech[part.start - before : part.stop + 1])
    halves = windowed[before:, :HOP].copy()
    halves[1 - before :] += windowed[:-1, HOP:]
    return np.asarray(scipy.fft.rfft(_frames(halves.reshape(-1)) * WINDOW, n=TRANSFORM, axis=1))


def _no_bands(speech: NDArray[np.intp]) -> Floats:
    """Room for envelopes: the frames that overlap-add to a signal stand in one frame less."""
    from pystoi.stoi import OBM

    return np.empty((len(OBM), max(0, len(speech) - 1)))


def _summed(power: Floats) -> Floats:
    """Sums of bins (frames, bins) over third octaves: (bands, frames)."""
    from pystoi.stoi import OBM

    return np.asarray(OBM @ power.T)
