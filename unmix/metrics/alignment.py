"""Time alignment of estimates with references, to a fraction of a sample.

The offset of an estimate e behind its reference s is where their generalised cross-correlation peaks [1]_:

    c(tau) = sum over bins of W(f) E(f) conj(S(f)) exp(i 2 pi f tau),    W = 1 / sqrt(P_e(f) P_s(f)),

P being power spectra smoothed over frequency (the smoothed coherence transform [2]_), so that the tilt of speech
does not blunt the peak while strong bins keep their weight. The correlation is band-limited, so its peak between the
samples is found on c itself, evaluated at any tau. Long signals are cut into stretches whose correlations are summed.
The offset of each stretch on its own shows whether the two sample clocks drift apart.

Grading lets a reference be filtered by causal taps only, so an estimate must never lead its reference: an otherwise
perfect one that is early by 0.1, 0.3 or 0.5 samples is graded 28, 17 and 12 dB. Estimates are therefore moved to
their references exactly, and then held back by a guard. The guard also admits what a talker's leakage gains on its
reference by reaching another microphone first.

.. [1] C. H. Knapp, G. C. Carter, "The generalized correlation method for estimation of time delay", IEEE Trans.
   Acoustics, Speech and Signal Processing 24(4), 1976.
.. [2] G. C. Carter, A. H. Nuttall, P. G. Cable, "The smoothed coherence transform", Proc. IEEE 61(10), 1973.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import scipy.fft
import scipy.ndimage
import scipy.optimize
import scipy.signal
import scipy.special
import scipy.stats
from numpy.typing import NDArray

from unmix.metrics.distortion import describe_unusable

__all__ = ["GUARD_S", "MAX_OFFSET_S", "Offset", "OffsetFinder", "advance", "guard_samples"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Signals = NDArray[np.floating[Any]]

MAX_OFFSET_S = 1.0
GUARD_S = 0.002
"""2 ms: sound travels 0.7 m in it, more than a small array is wide."""

STRETCH_S, MOST_STRETCHES = 2.5, 48
CLEAR_PEAK, CLEAR_STRETCH = 18.0, 8.0
"""Peaks count from this many standard deviations of the correlation on; unrelated speech reaches 13 over +-1 s."""
EARLIER_PEAK, EARLIER_S = 0.6, 0.02
"""A peak up to 20 ms earlier with this share of the highest is the direct sound, and the highest a reflection."""
SMOOTH_HZ = 100.0
FLOOR = 1e-6
"""Bins this far below the strongest (-60 dB) hold no speech and are not raised to its level."""

DRIFT_STRETCH_S, DRIFT_REACH_S, MOST_DRIFT_STRETCHES = 1.0, 0.05, 120
DRIFT_PPM, DRIFT_SLIP = 2.0, 0.5
"""Drift is worth a warning beyond 2 ppm, when it adds up to half a sample and chance is an unlikely cause (0.1 %)."""

HALF_WIDTH, KAISER_BETA = 512, 8.0
"""Of the windowed-sinc fractional delay: error under -80 dB up to 0.99 of the Nyquist frequency."""
ADVANCED = 1 << 18
"""Samples moved at a time."""
PEAK_HALF_WIDTH = 64
"""Samples to either side of a peak that locate it."""


@dataclass(frozen=True)
class Offset:
    """By how much a signal is behind its reference, and how much faster that grows than time does.

    samples      positive when the signal is late; None when no peak is clear
    clarity      height of the peak in standard deviations of the correlation about it
    drift_ppm    parts per million; None when fewer than four stretches tell
    drift_std_ppm  its standard error
    slips        whether the drift is real, beyond `DRIFT_PPM`, and adds up to more than `DRIFT_SLIP` samples
    undefined    why there is no offset
    """

    samples: float | None
    clarity: float = 0.0
    drift_ppm: float | None = None
    drift_std_ppm: float | None = None
    slips: bool = False
    undefined: str | None = None


def guard_samples(sample_rate: int, guard_s: float = GUARD_S) -> int:
    """The guard in whole samples."""
    return int(np.ceil(guard_s * sample_rate))


class OffsetFinder:
    """Finds how far signals are behind one reference; what depends on the reference alone is computed once.

    Parameters
    ----------
    reference : (samples,)
    sample_rate : int
        In hertz.
    max_offset_s : float
        Offsets are searched within this, of either sign. Either polarity is accepted.
    """

    def __init__(self, reference: Signals, sample_rate: int, *, max_offset_s: float = MAX_OFFSET_S) -> None:
        self.reference = reference
        self.sample_rate = sample_rate
        self._unusable = describe_unusable(reference)
        self._lags = min(round(max_offset_s * sample_rate), max(reference.size - 1, 0))

    @cached_property
    def _stretches(self) -> list[tuple[int, Complexes]]:
        """Starts of the stretches the offset is read from, and the reference's weighted spectrum in each."""
        return self._spectra(STRETCH_S, MOST_STRETCHES, self._lags)

    @cached_property
    def _short_stretches(self) -> list[tuple[int, Complexes]]:
        return self._spectra(DRIFT_STRETCH_S, MOST_DRIFT_STRETCHES, round(DRIFT_REACH_S * self.sample_rate))

    def find(self, signal: Signals) -> Offset:
        """The offset of `signal` (samples,) behind the reference, to a fraction of a sample."""
        for name, why in (("reference", self._unusable), ("signal", describe_unusable(signal))):
            if why is not None:
                return Offset(None, undefined=f"the {name} {why}")
        length = self._length(STRETCH_S)
        spectra = [self._cross(signal, s, S, length, self._lags, 0) for s, S in self._stretches]
        lag, clarity = self._peak(np.sum(spectra, axis=0), length, self._lags)
        if clarity < CLEAR_PEAK and len(spectra) > 1:
            # Clocks that drift apart smear the sum; a single stretch is still sharp.
            lag, clarity = max((self._peak(c, length, self._lags) for c in spectra), key=lambda found: found[1])
        if clarity < CLEAR_PEAK:
            return Offset(None, clarity, undefined="the signal does not resemble the reference at any offset searched")
        return self._follow(signal, lag, clarity)

    def _follow(self, signal: Signals, lag: float, clarity: float) -> Offset:
        """Drift from a line through the offsets of short stretches; where it is real, the offset is the middle's."""
        length, reach = self._length(DRIFT_STRETCH_S), round(DRIFT_REACH_S * self.sample_rate)
        whole = round(lag)
        times, lags = [], []
        for start, S in self._short_stretches:
            near, clear = self._peak(self._cross(signal, start, S, length, reach, whole), length, reach)
            if clear >= CLEAR_STRETCH:
                times.append(start + length / 2)
                lags.append(whole + near)
        if len(times) < 4:
            return Offset(lag, clarity)
        t, y = np.array(times), np.array(lags)
        slope, intercept, *_ = scipy.stats.theilslopes(y, t)
        rest = np.abs(y - intercept - slope * t)
        kept = rest <= max(1.0, 4.0 * float(np.median(rest)))
        if np.count_nonzero(kept) < 4:
            return Offset(lag, clarity)
        fit = scipy.stats.linregress(t[kept], y[kept])
        unlikely = float(scipy.stats.t.ppf(0.9995, np.count_nonzero(kept) - 2))
        slips = (
            abs(fit.slope) > DRIFT_PPM * 1e-6
            and abs(fit.slope) * self.reference.size > DRIFT_SLIP
            and abs(fit.slope) > unlikely * fit.stderr
        )
        middle = float(fit.intercept + fit.slope * self.reference.size / 2)
        return Offset(middle if slips else lag, clarity, 1e6 * float(fit.slope), 1e6 * float(fit.stderr), bool(slips))

    def _length(self, stretch_s: float) -> int:
        return min(round(stretch_s * self.sample_rate), self.reference.size)

    def _spectra(self, stretch_s: float, most: int, reach: int) -> list[tuple[int, Complexes]]:
        """The louder stretches, spread over the reference, with their weighted spectra; silent ones are left out."""
        length = self._length(stretch_s)
        count = max(1, self.reference.size // length)
        starts = np.linspace(0, self.reference.size - length, count).astype(int)
        energy = np.array([float(np.sum(np.square(self.reference[s : s + length], dtype=float))) for s in starts])
        parts = np.array_split(np.arange(count), min(count, most))
        chosen = [int(part[np.argmax(energy[part])]) for part in parts]
        n = _transform_length(length, reach)
        return [
            (int(starts[i]), np.conj(self._whiten(self.reference[starts[i] : starts[i] + length], n)))
            for i in chosen
            if energy[i] > 1e-4 * energy.max()
        ]

    def _cross(self, signal: Signals, start: int, S: Complexes, length: int, reach: int, offset: int) -> Complexes:
        """Weighted cross-spectrum of one stretch with the signal's samples that lie within `reach` of `offset`."""
        stretch = _within(signal, start + offset - reach, start + offset + length + reach)
        return np.asarray(self._whiten(stretch, _transform_length(length, reach)) * S)

    def _whiten(self, stretch: Signals, n: int) -> Complexes:
        spectrum = scipy.fft.rfft(np.asarray(stretch, dtype=np.float64), n=n)
        power = np.square(spectrum.real) + np.square(spectrum.imag)
        width = max(3, round(SMOOTH_HZ * n / self.sample_rate))
        smooth = scipy.ndimage.uniform_filter1d(power, width, mode="nearest")
        level = float(smooth.max())
        if level <= 0.0:
            return np.zeros_like(spectrum)
        return np.asarray(spectrum / np.sqrt(smooth + FLOOR * level))

    def _peak(self, cross: Complexes, length: int, reach: int) -> tuple[float, float]:
        """Lag of the peak in samples, between the samples, and its clarity."""
        n = _transform_length(length, reach)
        c = scipy.fft.irfft(cross, n=n)[: 2 * reach + 1]
        size = np.abs(c)
        highest = int(np.argmax(size))
        spread = float(np.median(size)) / 0.6745
        if spread <= 0.0:
            return 0.0, 0.0
        clarity = float(size[highest]) / spread
        first = max(1, highest - round(EARLIER_S * self.sample_rate))
        before = np.arange(first, highest)
        peaks = before[(size[before] >= size[before - 1]) & (size[before] >= size[before + 1])]
        strong = peaks[size[peaks] >= EARLIER_PEAK * size[highest]]
        peak = int(strong[0]) if strong.size else highest
        return _between_samples(c, peak) - reach, clarity


def _transform_length(length: int, reach: int) -> int:
    return int(scipy.fft.next_fast_len(length + 2 * reach, real=True))


def _between_samples(c: Floats, peak: int) -> float:
    """Where |c| peaks within one sample of index `peak`, by band-limited interpolation."""
    first, last = max(0, peak - PEAK_HALF_WIDTH), min(c.size, peak + PEAK_HALF_WIDTH + 1)
    points, values = np.arange(first, last, dtype=np.float64), np.sign(c[peak]) * c[first:last]

    def negative(at: float) -> float:
        return -float(values @ _interpolator(np.asarray(at - points), PEAK_HALF_WIDTH))

    found = scipy.optimize.minimize_scalar(
        negative, bounds=(peak - 1.0, peak + 1.0), method="bounded", options={"xatol": 1e-4}
    )
    return float(found.x)


def _interpolator(distance: Floats, half_width: int) -> Floats:
    """The windowed sinc at `distance` samples from its centre."""
    inside = np.clip(1.0 - np.square(distance / (half_width + 1)), 0.0, None)
    return np.asarray(
        np.sinc(distance) * scipy.special.i0(KAISER_BETA * np.sqrt(inside)) / scipy.special.i0(KAISER_BETA)
    )


def advance(
    signal: Signals, samples: float, *, length: int | None = None, out: NDArray[np.floating[Any]] | None = None
) -> NDArray[np.floating[Any]]:
    """`signal` (samples,) moved earlier: y[n] = x(n + samples), n = 0..length - 1, zeros where x has no samples.

    A fraction of a sample is made by band-limited interpolation. The result goes into `out` (length,) where that is
    given, in its precision.
    """
    moved = np.empty(signal.size if length is None else length) if out is None else out
    whole = round(samples)
    fraction = samples - whole
    margin = HALF_WIDTH if abs(fraction) > 1e-6 else 0
    taps = _interpolator(np.arange(-HALF_WIDTH, HALF_WIDTH + 1, dtype=np.float64) + fraction, HALF_WIDTH)
    for first in range(0, moved.size, ADVANCED):
        last = min(first + ADVANCED, moved.size)
        x = _within(signal, first + whole - margin, last + whole + margin)
        moved[first:last] = scipy.signal.oaconvolve(x, taps, mode="valid") if margin else x
    return moved


def _within(signal: Signals, first: int, last: int) -> Floats:
    """Samples first..last - 1 of a signal, zeros where it has none."""
    stretch = np.zeros(last - first)
    low, high = max(0, first), min(signal.size, last)
    if low < high:
        stretch[low - first : high - first] = signal[low:high]
    return stretch
