"""Dry clips through responses."""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["convolve_responses"]

Floats = NDArray[np.float64]


def convolve_responses(clip: Floats, responses: Floats, lead: int, samples: int) -> Floats:
    """``clip`` (samples_in,) through ``responses`` (rows, taps) whose tap ``lead`` is time zero: (rows, ``samples``).

    The clip is taken as silent before and after; output sample 0 is the clip's sample 0 heard without any delay.
    """
    length = scipy.fft.next_fast_len(clip.size + responses.shape[1] - 1, real=True)
    spectrum = scipy.fft.rfft(clip, length)
    out = np.zeros((responses.shape[0], samples))
    for row, response in zip(out, responses, strict=True):
        heard = scipy.fft.irfft(spectrum * scipy.fft.rfft(response, length), length)[lead : lead + samples]
        row[: heard.size] = heard
    return out
