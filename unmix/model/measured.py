"""Paths from measured responses: what each microphone hears relative to the reference microphone.

    A_km(f) = H_m(f, u_k) / H_ref(f, u_k),      talker k from bearing u_k, as received at the reference microphone

with the ratio regularised where the reference hears next to nothing. Beyond the measured band the ratio keeps its
magnitude and runs on with its delay. The array's corrections act on the ratio as on any channel. Taps to either side of
time zero are kept as far as they hold more than `TAIL_DB` of a channel's energy.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import UnsolvableError
from unmix.model.delays import Paths

__all__ = ["paths_from_responses"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

GRID = 4096
WIDEST = 1024
TAIL_DB = -70.0
_REGULARISATION = 1e-7
_MEASURED_TO = 0.96
"""Share of the measured band that is trusted: anti-aliasing filters bend the rest."""


def paths_from_responses(array: Array, azimuth: Floats, elevation: Floats, *, sample_rate: int) -> Paths:
    """Paths of talkers at rest, azimuth and elevation (talkers,) in radians, with taps for the model at `sample_rate`.

    Raises InputError when a bearing lies far from every measured direction, UnsolvableError for an array without
    responses.
    """
    if array.responses is None:
        raise UnsolvableError("the array has no measured responses")
    frequency = np.arange(GRID // 2 + 1) / GRID * sample_rate
    top = _MEASURED_TO * array.responses.sample_rate / 2.0
    inside = frequency <= top
    ratios = []
    for az, el in zip(azimuth, elevation, strict=True):
        h = array.responses.spectrum(float(az), float(el), frequency[inside])
        ratios.append(_beyond(_ratio(h, array.reference_channel), frequency, inside))
    ratio = np.stack(ratios)
    ratio *= _corrections(array, frequency)
    taps = np.roll(np.fft.irfft(ratio, GRID, axis=1).transpose(0, 2, 1), GRID // 2, axis=-1)
    reach = _reach(taps)
    middle = GRID // 2
    kept = taps[..., middle - reach : middle + reach + 1] * np.kaiser(2 * reach + 1, 2.0)
    exact = kept[:, array.reference_channel]
    exact[...] = 0.0
    exact[:, reach] = 1.0
    delay, gain = _as_delay(taps, sample_rate)
    ref = array.reference_channel
    return Paths(delay - delay[:, ref, None], gain, taps=kept, centre=reach)


def _ratio(h: Complexes, reference: int) -> Complexes:
    power = np.abs(h[:, reference]) ** 2
    return np.asarray(h * (h[:, reference].conj() / (power + _REGULARISATION * power.max()))[:, None])


def _beyond(ratio: Complexes, frequency: Floats, inside: NDArray[np.bool_]) -> Complexes:
    if inside.all():
        return ratio
    last = int(np.count_nonzero(inside)) - 1
    span = max(1, last // 16)
    # Delay over the top of the measured band, by the mean turn from one frequency to the next.
    turn = np.sum(ratio[last - span + 1 : last + 1] * ratio[last - span : last].conj(), axis=0)
    steps = np.arange(1, len(frequency) - last)[:, None]
    return np.concatenate([ratio, ratio[last] * np.exp(1j * np.angle(turn) * steps)])


def _corrections(array: Array, frequency: Floats) -> Complexes:
    """What gain, polarity and delay of the channels do to the ratio: (frequencies, channels)."""
    ref = array.reference_channel
    gain = array.polarity * 10.0 ** (array.gain_db / 20.0)
    delay = array.delay_s - array.delay_s[ref]
    return np.asarray(gain / gain[ref] * np.exp(-2j * np.pi * np.outer(frequency, delay)))


def _reach(taps: Floats) -> int:
    energy = np.sum(taps**2, axis=(0, 1))
    middle = GRID // 2
    both = energy[middle:] + np.concatenate([[0.0], energy[middle - 1 : 0 : -1]])
    left_over = np.cumsum(both[::-1])[::-1] / both.sum()
    needed = int(np.argmax(left_over < 10.0 ** (TAIL_DB / 10.0))) or WIDEST
    return min(max(needed, 16), WIDEST)


def _as_delay(taps: Floats, sample_rate: int) -> tuple[Floats, Floats]:
    """The delay and gain nearest to each filter, for what knows only those: (talkers, channels)."""
    up = 8
    fine = np.fft.irfft(np.fft.rfft(taps), up * GRID)
    at = np.argmax(np.abs(fine), axis=-1)
    sign = np.sign(np.take_along_axis(fine, at[..., None], axis=-1)[..., 0])
    gain = np.sqrt(np.sum(taps**2, axis=-1))
    return np.asarray((at / up - GRID // 2) / sample_rate), np.asarray(sign * gain)
