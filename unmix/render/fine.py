"""A clip read at delays that change from sample to sample, exactly.

The clip is laid on a grid Q times finer together with its derivatives, all from one FFT, and each sample is expanded
about the nearest point of that grid: clip(t - tau) = sum_l d^l/l! clip^(l)(t0), |d| <= 1/2 of the fine grid. The error
is that of `unmix.render.pulses`, whose low-pass the clip passes on the way.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.render.pulses import FINENESS, LEAD, ORDER, band_limit_spectrum

__all__ = ["FineClip"]

Floats = NDArray[np.float64]


class FineClip:
    """The stretch of ``clip`` (samples,) from sample ``first`` to ``last``, to be read anywhere between them."""

    def __init__(self, clip: Floats, first: int, last: int) -> None:
        start, stop = first - LEAD - 1, last + LEAD + 2
        stretch = np.zeros(stop - start)
        inside = slice(max(start, 0), min(stop, clip.size))
        if inside.start < inside.stop:
            stretch[inside.start - start : inside.stop - start] = clip[inside]
        length = scipy.fft.next_fast_len(stretch.size, real=True)
        length += length % 2
        spectrum = scipy.fft.rfft(stretch, length) * band_limit_spectrum(length)
        omega = 2.0 * np.pi * np.arange(spectrum.size) / (length * FINENESS)
        self._start = start
        self._table = np.empty((length * FINENESS, ORDER + 1))
        for power in range(ORDER + 1):
            if power:
                spectrum = spectrum * (1j * omega / power)
            self._table[:, power] = FINENESS * scipy.fft.irfft(spectrum, length * FINENESS)

    def at(self, samples: Floats) -> Floats:
        """The clip at the places ``samples``, counted from the clip's start in samples and fractions."""
        fine = (samples - self._start) * FINENESS
        spot = np.rint(fine)
        rest = fine - spot
        rows = self._table[spot.astype(np.intp)]
        value = rows[..., ORDER]
        for power in range(ORDER - 1, -1, -1):
            value = value * rest + rows[..., power]
        return np.asarray(value)
