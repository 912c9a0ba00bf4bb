"""The model with `tied` jets, as short filters: y_m[n] = sum_k sum_j h_km[j] z_k[n + j], j = -R..R.

Putting z^(l)[n - i] = sum_j d_l[j] z[n - i + j] into the anchored expansion leaves one filter per talker and
microphone,

    h_km[j - i] = g_km sum_l (-d)^l / l! d_l[j],      tau_km / T = i + d

With finite differences on 2P + 1 points and order 2P this is the Lagrange fractional-delay filter (Laakso et al. 1996).
Measured or learned responses take the same form, so that everything below is one program.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.model.delays import Paths
from unmix.model.differentiators import Differentiators

__all__ = ["Anchor", "Mixing", "anchored_delays", "mixing_from_paths", "mixing_from_responses"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Anchor = Literal["nearest", "own"]


@dataclass(frozen=True)
class Mixing:
    """Filters from talkers to microphones.

    taps   (talkers, channels, 2R + 1) at rest, (groups, talkers, channels, 2R + 1) when something moves
    reach  R: tap R + j weighs the talker's sample n + j
    hold   samples for which one group of taps holds (0 at rest)
    start  sample at which the first group begins
    """

    taps: Floats
    reach: int
    hold: int = 0
    start: int = 0

    @property
    def talkers(self) -> int:
        """Number of talkers."""
        return int(self.taps.shape[-3])

    @property
    def channels(self) -> int:
        """Number of microphones."""
        return int(self.taps.shape[-2])

    def response(self, omega: Floats) -> Complexes:
        """Frequency response (frequencies, channels, talkers) at `omega` radians per sample; at rest only."""
        grid = 2 * (len(omega) - 1)
        if grid >= self.taps.shape[-1] and np.array_equal(omega, 2.0 * np.pi * np.arange(grid // 2 + 1) / grid):
            # On a full grid the same by FFT: tap j stands at index -j, since the filters look ahead.
            around = np.zeros((*self.taps.shape[:-1], grid))
            around[..., -np.arange(-self.reach, self.reach + 1) % grid] = self.taps
            return np.asarray(np.fft.rfft(around).transpose(2, 1, 0))
        basis = np.exp(1j * np.outer(omega, np.arange(-self.reach, self.reach + 1)))
        return np.asarray(np.einsum("kmj,fj->fmk", self.taps, basis, optimize=True))

    def apply(self, signals: Floats) -> Floats:
        """What the microphones hear of (talkers, samples): (channels, samples), zero outside; at rest only."""
        from scipy.signal import fftconvolve

        heard = np.zeros((self.channels, signals.shape[1]))
        for taps, signal in zip(self.taps, signals, strict=True):
            full = fftconvolve(signal[None, :], taps[:, ::-1], axes=1)
            heard += full[:, self.reach : self.reach + signals.shape[1]]
        return heard


def anchored_delays(delay_samples: Floats, anchor: Anchor) -> tuple[NDArray[np.int64], Floats]:
    """Split delays in samples into whole i and remainder d: |d| <= 1/2 with anchor "nearest", i = 0 with "own"."""
    if anchor == "own":
        return np.zeros(delay_samples.shape, np.int64), delay_samples
    whole = np.rint(delay_samples).astype(np.int64)
    return whole, delay_samples - whole


def taylor_terms(d: Floats, order: int) -> Floats:
    """(-d)^l / l! for l = 0..order, along a new last axis."""
    powers = np.arange(order + 1)
    return np.asarray((-d[..., None]) ** powers / [float(math.factorial(n)) for n in powers])


def mixing_from_paths(
    paths: Paths,
    differentiators: Differentiators,
    sample_rate: float,
    *,
    anchor: Anchor = "nearest",
    start: int = 0,
    samples: int = 0,
    hold: int = 8,
    reach: int | None = None,
) -> Mixing:
    """The model's filters for paths at rest, or for `samples` samples from `start` when they move.

    Moving delays are held for `hold` samples at their value in the middle of each group. `reach` widens the filters
    to a common width (blocks of one recording then have one shape). Measured responses take the place of all this.
    """
    if paths.taps is not None:
        return mixing_from_responses(paths.taps, paths.centre)
    if not paths.moving:
        return _placed(paths.delay_s, paths.gain, differentiators, sample_rate, anchor, reach, 0, 0)
    groups = -(-samples // hold)
    middle = (start + (np.arange(groups) + 0.5) * hold) / sample_rate
    delay, gain = paths.at(middle)
    return _placed(delay, gain, differentiators, sample_rate, anchor, reach, hold, start)


def model_reach(paths: Paths, differentiators: Differentiators, sample_rate: float, anchor: Anchor) -> int:
    """R: the farthest sample that the model's filters touch, over the whole recording."""
    whole, _ = anchored_delays(paths.delay_s * sample_rate, anchor)
    return int(np.abs(whole).max()) + differentiators.half_width


def _placed(
    delay_s: Floats,
    gain: Floats,
    differentiators: Differentiators,
    sample_rate: float,
    anchor: Anchor,
    reach: int | None,
    hold: int,
    start: int,
) -> Mixing:
    whole, d = anchored_delays(delay_s * sample_rate, anchor)
    p = differentiators.half_width
    r = max(int(np.abs(whole).max()) + p, reach or 0)
    core = gain[..., None] * (taylor_terms(d, differentiators.order) @ differentiators.weights)
    taps = np.zeros((*delay_s.shape, 2 * r + 1))
    columns = (r - whole - p)[..., None] + np.arange(2 * p + 1)
    np.put_along_axis(taps, columns, core, axis=-1)
    return Mixing(taps, r, hold, start)


def mixing_from_responses(responses: Floats, centre: int) -> Mixing:
    """Measured or learned responses as the model's filters.

    responses  (talkers, channels, taps): y_m[n] = sum_k sum_t a_km[t] z_k[n - t + centre]
    centre     index of the tap at time zero
    """
    before, after = centre, responses.shape[-1] - 1 - centre
    reach = max(before, after)
    taps = np.zeros((*responses.shape[:-1], 2 * reach + 1))
    taps[..., reach - after : reach + before + 1] = responses[..., ::-1]
    return Mixing(taps, reach)
