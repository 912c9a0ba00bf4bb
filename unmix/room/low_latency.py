"""The room stage in a few milliseconds: statistics on long frames, filters that see little of the future.

Refinement needs frames as long as the room's first reflections; a frame's length is not the latency, though. Frames are
taken from what has already been heard and only teach the separating matrix, which is turned into filters

    z_k[n] = sum_m sum_j b_km[j] y_m[n - j],   j = -lookahead ... past,

applied to blocks of a few milliseconds. Latency: look-ahead plus block. Per frame, with forgetting a,

    V_k <- a V_k + x x^H / r_k,   C <- a C + x x^H,   r_k = mean over frequency of |w_k^H x|^2,

and one update of the rows as in `refinement.update_rows` (the recursive form of auxiliary-function independent vector
analysis [1]_), its matrices held to the bearings: strongly at first, lightly once enough has been heard. The update is
spread over the blocks between two frames, so that no block costs more than another; new filters are cross-faded in.

What it gives up against the whole chain: the future, several looks at the same sound, dereverberation and the post
filter.

.. [1] T. Taniguchi, N. Ono, A. Kawamura, S. Sagayama, "An auxiliary-function approach to online independent vector
   analysis for real-time blind source separation", HSCMA 2014.
"""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any, cast

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.room.blockwise import Blockwise
from unmix.room.chain import Look
from unmix.room.linalg import adjoint, power
from unmix.room.refinement import independent_start, look_penalty, scaled_rows, update_rows
from unmix.room.stft import Complexes, Transform
from unmix.settings import RoomSettings

__all__ = ["AdaptiveFilters"]

Floats = NDArray[np.float64]

_FLOOR = 1e-3
_QUIET = 1e-5
_SPREAD = 0.05
"""Power from elsewhere, beside that of each talker, in what is believed before anything is heard."""


class AdaptiveFilters(Blockwise):
    """Filters that are learned from what is heard, started from and held to the bearings.

    look  from the stage's frequencies in hertz to what the model knows there
    """

    def __init__(
        self, settings: RoomSettings, look: Callable[[Floats], Look], *, sample_rate: float, reference: int
    ) -> None:
        if settings.low_latency is None:
            raise ValueError("the settings have no low-latency form")
        own, transform = settings.low_latency, settings.transform
        self._reference = reference
        self._look_weight = settings.refinement.look_weight if settings.refinement else 0.0
        self._block = max(1, round(own.block_s * sample_rate))
        blocks = max(1, round(transform.frame_s / transform.overlap * sample_rate / self._block))
        hop = blocks * self._block
        self._transform = Transform(hop * transform.overlap, hop, sample_rate)
        self._lookahead = min(round(own.look_ahead_s * sample_rate), self._transform.frame // 2)
        self._past = self._transform.frame // 2 - 1
        self._window = self._transform.window().astype(np.float32)
        f = self._transform.frame // 2 + 1
        edges = [f * i // blocks for i in range(blocks + 1)]
        self._slices = [slice(a, b) for a, b in pairwise(edges)]
        self._forget = float(np.exp(-hop / sample_rate / own.forgetting_s))
        self._prior_frames = own.prior_s * sample_rate / hop
        self._size = scipy.fft.next_fast_len(self._past + self._lookahead + self._block, real=True)
        self._taper = self._tapered()
        self._hold(look(self._transform.frequencies_hz))
        self._begin()

    @property
    def frequencies_hz(self) -> Floats:
        """Frequencies at which bearings are to be known."""
        return self._transform.frequencies_hz

    @property
    def block(self) -> int:
        """Samples that are filtered at once."""
        return self._block

    @property
    def latency(self) -> int:
        """Samples by which what comes out is late."""
        return self._lookahead + self._block

    @property
    def talkers(self) -> int:
        """Number of talkers."""
        return int(self._rows.shape[1])

    @property
    def taps(self) -> Floats:
        """The filters in force, (talkers, channels, lookahead + 1 + past), future first."""
        return cast(
            "Floats", scipy.fft.irfft(self._kernel, self._size, axis=-1)[..., : self._past + self._lookahead + 1]
        )

    def steer(self, look: Look) -> None:
        """Other bearings from now on: what was learned of the old ones is given up, filters are cross-faded."""
        self._hold(look)
        self._forget_all()

    def follow(self, look: Look) -> None:
        """Bearings that have moved on a little: what was learned stays, the pull is toward the new ones."""
        self._hold(look)

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything that depends on what was pushed."""
        return {name: np.array(getattr(self, f"_{name}")) for name in _STATE}

    def restore(self, state: dict[str, NDArray[Any]]) -> None:
        """Go on from a state; raises KeyError or ValueError when it is not one of this stage's."""
        for name in _STATE:
            mine, value = np.asarray(getattr(self, f"_{name}")), np.asarray(state[name])
            fixed = mine.shape[:-1] if name in ("in", "out") else mine.shape
            if (value.shape[:-1] if name in ("in", "out") else value.shape) != fixed:
                raise ValueError(f"{name}: shape {value.shape} is not {mine.shape}")
        for name in _STATE:
            value = np.array(state[name])
            setattr(self, f"_{name}", value if value.ndim else value.item())

    def _hold(self, look: Look) -> None:
        """What is believed before anything is heard, and the pull toward the bearings that stays."""
        self._believed_of = look
        a = look.responses.astype(np.complex64)
        m = a.shape[1]
        spread = (_SPREAD / m) * np.eye(m, dtype=np.complex64)
        self._others = look_penalty(a, 1.0).astype(np.complex64)
        self._believed = self._others + spread
        self._believed_all = (a @ adjoint(a)) / m + spread

    def _begin(self) -> None:
        """The start of a stream."""
        f, m, k = self._believed_of.responses.shape
        self._in = np.zeros((m, 0))
        self._out = np.zeros((k, self._block))
        self._history = np.zeros((m, self._size))
        self._recent = np.zeros((m, self._transform.frame))
        self._at = 0
        self._level = 0.0
        self._frame = np.zeros((f, m), np.complex64)
        self._inverse_power = np.zeros(k, np.float32)
        self._forget_all()
        self._kernel = self._fading = self._kernels(self._projected)

    def _forget_all(self) -> None:
        f, m, k = self._believed_of.responses.shape
        self._rows = independent_start(self._believed_of.rows).astype(np.complex64)
        self._weighted = np.zeros((f, k, m, m), np.complex64)
        self._covariance = np.zeros((f, m, m), np.complex64)
        self._count = 0.0
        self._projected = np.empty((f, k, m), np.complex64)
        for b in self._slices:
            self._update(b)

    def _step(self, block: Floats) -> Floats:
        """One block: filter it, remember it, learn a slice of what the last frame had to say."""
        n = self._block
        self._history = np.concatenate([self._history[:, n:], block], axis=1)
        spectrum = scipy.fft.rfft(self._history, self._size, axis=-1)
        part = self._at % len(self._slices)
        fading = part == 0 and self._fading is not self._kernel
        talkers = self._filtered(spectrum, self._kernel)
        if fading:
            ramp = (np.arange(n) + 0.5) / n
            talkers = self._filtered(spectrum, self._fading) * (1.0 - ramp) + talkers * ramp
            self._fading = self._kernel
        self._recent = np.concatenate([self._recent[:, n:], block], axis=1)
        self._learn(self._slices[part])
        self._at += 1
        if self._at % len(self._slices) == 0:
            self._fading, self._kernel = self._kernel, self._kernels(self._projected)
            self._hear()
        return talkers

    def _filtered(self, spectrum: Complexes, kernel: Complexes) -> Floats:
        product = np.einsum("kmf,mf->kf", kernel, spectrum)
        return cast("Floats", scipy.fft.irfft(product, self._size, axis=-1)[:, self._size - self._block :])

    def _hear(self) -> None:
        """A new frame: its spectra and the talkers' power in it."""
        frame = scipy.fft.rfft(self._recent.astype(np.float32) * self._window, axis=-1).T
        heard = float(power(frame).mean())
        self._level = max(heard, self._forget * self._level)
        if heard <= _QUIET * self._level or heard == 0.0:
            self._inverse_power = np.zeros_like(self._inverse_power)
            return
        self._frame = np.ascontiguousarray(frame, np.complex64)
        r = power(self._projected @ self._frame[:, :, None])[:, :, 0].mean(axis=0)
        self._inverse_power = (1.0 / np.maximum(r, _FLOOR * self._level)).astype(np.float32)
        self._count = self._forget * self._count + 1.0

    def _learn(self, b: slice) -> None:
        """Put the frame into a slice's statistics and update its rows."""
        if not self._inverse_power.any():
            return
        x = self._frame[b]
        outer = x[:, :, None] * np.conjugate(x[:, None, :])
        self._weighted[b] *= self._forget
        self._weighted[b] += outer[:, None] * self._inverse_power[:, None, None]
        self._covariance[b] *= self._forget
        self._covariance[b] += outer
        self._update(b)

    def _update(self, b: slice) -> None:
        share = np.float32(self._prior_frames / (self._prior_frames + self._count))
        v, c = self._weighted[b], self._covariance[b]
        m = c.shape[-1]
        if self._count == 0.0:
            v, c = v + self._believed[b], c + self._believed_all[b]
        level = np.trace(c, axis1=1, axis2=2).real[:, None, None] / m
        held = np.float32(self._look_weight) * self._others[b] + share * self._believed[b]
        c = c + (share * level) * self._believed_all[b]
        update_rows(self._rows[b], v, c, held)
        self._projected[b] = scaled_rows(self._rows[b], c, self._reference)

    def _kernels(self, rows: Complexes) -> Complexes:
        """Spectra (talkers, channels, frequencies) of the filters that the rows become, cut to what they may see."""
        frame = self._transform.frame
        taps = scipy.fft.irfft(rows.transpose(1, 2, 0), frame, axis=-1)
        taps = np.roll(taps, self._lookahead, axis=-1)[..., : self._past + self._lookahead + 1] * self._taper
        return cast("Complexes", scipy.fft.rfft(taps.astype(np.float64), self._size, axis=-1))

    def _tapered(self) -> Floats:
        """One, falling to zero over the last quarter of the past."""
        taper = np.ones(self._past + self._lookahead + 1)
        n = self._past // 4
        taper[-n:] = 0.5 + 0.5 * np.cos(np.pi * (np.arange(n) + 0.5) / n)
        return taper


_STATE = (
    "in", "out", "history", "recent", "at", "level", "frame", "inverse_power", "count", "rows", "weighted",
    "covariance", "projected", "kernel", "fading",
)  # fmt: skip
"""Names of what changes while sound comes in."""
