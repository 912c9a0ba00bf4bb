"""Several talkers fitted at once: separable least squares over bearings, signals solved out.

Tying all jets of a block makes every talker a signal that reaches the microphones by pure delays, and then frequencies
separate: Y_f = A_f(theta) S_f + V_f, with A the steering vectors. For given bearings the best signals are
S = A^+ Y; what is left,

    C(theta) = sum_f tr( Pi_f R_f ),     Pi = I - A A^+,     R_f = sum over frames of Y Y^H,

depends on bearings only (variable projection [1]_), and on the recording through R_f only, so that an hour costs no
more memory than a second. Gauss-Newton with analytic derivatives, in Kaufman's form:

    dC/d(ka)      = -2 sum_f Re( A^+ R Pi d_ka )_k
    d2C/d(ka)(lb) =  2 sum_f Re( d_ka^H Pi d_lb (A^+ R A^+H)_lk ).

Frames are half-overlapped with the root of a Hann window, whose squares sum to one: what is summed over frames is then
what is summed over samples. Delays bend a window by up to (pi tau / length)^2 of its power, the bias that takes over
at high ratios; frames are long for that reason. Seven microphones on 4 cm, 1 s: errors are 1.05 to 1.2 times the bound
up to 60 dB; with two talkers bias leads from 70 dB on. What the window loses counts as noise, so stated deviations are
too wide from 60 dB on, never too narrow. The covariance of the estimate is that of deterministic maximum
likelihood [2]_, which is the Cramer-Rao bound but for bins whose signal is below the noise.

.. [1] G. H. Golub and V. Pereyra, "Separable nonlinear least squares: the variable projection method and its
   applications", Inverse Problems 19, 2003; L. Kaufman, BIT 15, 1975.
.. [2] P. Stoica and A. Nehorai, "MUSIC, maximum likelihood, and Cramer-Rao bound", IEEE Trans. Acoust. Speech Signal
   Process. 37, 1989.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.bound import projected_derivatives, signal_part
from unmix.bearings.space import LocalFrame, SearchSpace
from unmix.model.delays import wave_delays
from unmix.physics import speed_of_sound

__all__ = [
    "FittedBearings",
    "FrameCovariance",
    "NormalEquations",
    "estimate_covariance",
    "fit_bearings",
    "normal_equations",
    "steering_with_derivatives",
]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

FRAME_S = 0.256
LOWEST_HZ = 100.0
_REDUNDANCY = 2.0
"""Half-overlapped frames hold every sample twice."""


class FrameCovariance:
    """Sums of Y Y^H over half-overlapped frames with a root-Hann window, per frequency; bounded memory."""

    def __init__(self, channels: int, sample_rate: int, *, highest_hz: float | None = None) -> None:
        self.frame = scipy.fft.next_fast_len(round(FRAME_S * sample_rate))
        self.frame += self.frame % 2
        hz = np.fft.rfftfreq(self.frame, 1.0 / sample_rate)
        highest = min(0.95 * sample_rate / 2.0, highest_hz or np.inf)
        self._band = slice(int(np.searchsorted(hz, LOWEST_HZ)), int(np.searchsorted(hz, highest, "right")))
        self.frequency_hz: Floats = hz[self._band].astype(np.float64)
        self._window = np.sin(np.pi * (np.arange(self.frame) + 0.5) / self.frame) / np.sqrt(self.frame)
        self._rest = np.zeros((channels, 0))
        self.total = np.zeros((len(self.frequency_hz), channels, channels), np.complex128)
        self.frames = 0

    def add(self, chunk: Floats) -> None:
        """Take in (channels, samples), the samples that follow those before."""
        hop = self.frame // 2
        signal = np.concatenate([self._rest, chunk], axis=1)
        count = max(0, (signal.shape[1] - self.frame) // hop + 1)
        for first in range(0, count, 64):
            some = min(64, count - first)
            views = np.lib.stride_tricks.sliding_window_view(signal, self.frame, axis=1)
            taken = views[:, first * hop : (first + some - 1) * hop + 1 : hop] * self._window
            y = scipy.fft.rfft(taken, axis=-1)[..., self._band].transpose(2, 0, 1)
            self.total += y @ y.conj().transpose(0, 2, 1)
        self.frames += count
        self._rest = signal[:, count * hop :]


@dataclass(frozen=True)
class FittedBearings:
    """Projections x (talkers, rank), their covariance (talkers d, talkers d) along ``axes`` (talkers, rank, d).

    noise      power per microphone and sample in the band, outside the talkers' range
    unexplained  what is left outside it, as a share of all (0 to 1)
    rounds     Gauss-Newton steps taken; converged whether the last was below a thousandth of a degree
    """

    x: Floats
    covariance: Floats
    axes: Floats
    noise: float
    unexplained: float
    rounds: int
    converged: bool

    def of_talker(self, k: int) -> Floats:
        """Covariance (rank, rank) of talker k's projection."""
        d = self.axes.shape[2]
        own = self.covariance[k * d : (k + 1) * d, k * d : (k + 1) * d]
        return np.asarray(self.axes[k] @ own @ self.axes[k].T)


def steering_with_derivatives(
    array: Array,
    frequency_hz: Floats,
    frames: list[LocalFrame],
    space: SearchSpace,
    *,
    speed_m_s: float,
    distance_m: float | None = None,
) -> tuple[Complexes, Complexes]:
    """A (frequencies, M, K) and dA (frequencies, M, K, d) at local frames, corrections of the channels included.

    Spherical waves bend by what they differ from the plane wave at the frame's centre; that difference is held fixed in
    the derivative, of which it is a share of the order of the array's radius over the distance.
    """
    omega = 2.0 * np.pi * frequency_hz
    v = np.stack([frame.centre for frame in frames]) @ space.basis.T
    tau, gain = wave_delays(array.positions_m, v, None, speed_m_s)
    if distance_m is not None:
        u = space.lift(np.stack([frame.centre for frame in frames]))
        near, gain = wave_delays(array.positions_m, u, np.full(len(u), distance_m), speed_m_s)
        tau = tau + near - wave_delays(array.positions_m, u, None, speed_m_s)[0]
    tau = tau + array.delay_s
    gain = gain * array.polarity * 10.0 ** (array.gain_db / 20.0)
    moved = np.stack([-array.positions_m @ space.basis @ frame.axes for frame in frames]) / speed_m_s
    a = (gain * np.exp(-1j * omega[:, None, None] * tau)).transpose(0, 2, 1)
    da = -1j * omega[:, None, None, None] * a[..., None] * moved.transpose(1, 0, 2)
    return a, da


def fit_bearings(
    seen: FrameCovariance,
    array: Array,
    start: Floats,
    space: SearchSpace,
    *,
    temperature_c: float = 20.0,
    distance_m: float | None = None,
    most_rounds: int = 30,
) -> FittedBearings:
    """Bearings of ``start`` (talkers, rank) moved to the least-squares fit of all of them together.

    Needs fewer talkers than microphones. Steps that do not lower the cost are halved.
    """
    x = np.array(start, dtype=np.float64)
    speed = speed_of_sound(temperature_c)
    scale = float(np.trace(seen.total.sum(axis=0)).real)

    def at(points: Floats) -> tuple[list[LocalFrame], NormalEquations]:
        frames = [space.local(point, 0.01) for point in points]
        a, da = steering_with_derivatives(
            array, seen.frequency_hz, frames, space, speed_m_s=speed, distance_m=distance_m
        )
        return frames, normal_equations(seen.total, a, da)

    frames, now = at(x)
    converged, rounds = False, 0
    while rounds < most_rounds and not converged:
        rounds += 1
        ridge = 1e-9 * np.trace(now.curvature) / len(now.curvature) * np.eye(len(now.curvature))
        step = np.linalg.solve(now.curvature + ridge, -now.gradient).reshape(len(x), -1)
        for _ in range(8):
            moved = np.stack([f.move(s) for f, s in zip(frames, step, strict=True)])
            frames_new, new = at(moved)
            if new.cost <= now.cost * (1.0 + 1e-12):
                break
            step = 0.5 * step
        frames, now, x = frames_new, new, moved
        converged = float(np.abs(step).max()) < np.radians(1e-3)
    m, k = array.channels, len(x)
    bins = seen.frames * len(seen.frequency_hz)
    noise = _REDUNDANCY * now.cost / max(bins * (m - k), 1)
    covariance = _REDUNDANCY * estimate_covariance(now, noise / _REDUNDANCY, seen.frames)
    return FittedBearings(
        x, covariance, np.stack([f.axes for f in frames]), noise, now.cost / max(scale, 1e-300), rounds, converged
    )


@dataclass(frozen=True)
class NormalEquations:
    """Cost, gradient (K d,) and curvature (K d, K d), with what the covariance needs: H and the signals' covariance."""

    cost: float
    gradient: Floats
    curvature: Floats
    h: Complexes
    signals: Complexes
    inverse: Complexes
    d: int


def normal_equations(r: Complexes, a: Complexes, da: Complexes) -> NormalEquations:
    """Cost and derivatives for R (frequencies, M, M), A (frequencies, M, K), dA (frequencies, M, K, d)."""
    inverse = np.asarray(np.linalg.pinv(a), np.complex128)
    d = da.shape[-1]
    left = r - a @ (inverse @ r)
    cost = float(np.trace(left.sum(axis=0)).real)
    # (A^+ R Pi)_k . d_ka: R Pi is the conjugate transpose of Pi R.
    outside = inverse @ np.swapaxes(left.conj(), 1, 2)
    gradient = -2.0 * np.einsum("fkm,fmka->ka", outside, da).real.ravel()
    h = projected_derivatives(a, da)
    signals = np.asarray(inverse @ r @ np.swapaxes(inverse.conj(), 1, 2), np.complex128)
    curvature = 2.0 * np.real(h * signal_part(signals, d)).sum(axis=0)
    return NormalEquations(cost, gradient, curvature, h, signals, inverse, d)


def estimate_covariance(now: NormalEquations, per_bin: float, frames: int, ties: Floats | None = None) -> Floats:
    """Covariance of deterministic maximum likelihood [2]_: H1^(-1) H2 H1^(-1) sigma2 / 2.

    H1 has the signals' own covariance, H2 that plus the noise that the solved-out signals carry.

    per_bin  noise power sigma2 per microphone, frequency and frame
    ties     (parameters, K d) when columns share parameters; None: each has its own
    """
    noise_in_signals = per_bin * frames * (now.inverse @ np.swapaxes(now.inverse.conj(), 1, 2))
    h1 = np.real(now.h * signal_part(now.signals - noise_in_signals, now.d)).sum(axis=0)
    h2 = np.real(now.h * signal_part(now.signals, now.d)).sum(axis=0)
    if ties is not None:
        h1, h2 = ties @ h1 @ ties.T, ties @ h2 @ ties.T
    if np.linalg.eigvalsh(h1)[0] <= 0.0:
        h1 = h2
    inverse = np.linalg.inv(h1)
    return np.asarray(per_bin / 2.0 * inverse @ h2 @ inverse)
