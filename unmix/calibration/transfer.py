"""What one source at one bearing does to the channels: gain, delay and polarity against the reference.

Channels are shifted by whole samples onto the reference, then at each frequency the covariance over frames is
C = P h h^H + sigma2 I, once channels are divided by their gains (their noise has gone through the same gain). Its
leading eigenvector is h; with N independent frames, both the phase and the logarithm of h_m / h_r have the variance

    var(f) = lambda_1 sigma2 / (2 N (lambda_1 - sigma2)^2) (1 / |h_m|^2 + 1 / |h_r|^2),        |h|^2 = 1,

to first order in the noise. Gain is the weighted mean of log |h_m / h_r|, delay the weighted slope of its phase through
zero frequency or through pi (polarity). Reflections, which bend both, are a further error of their own (`_fitted`).

Source of the eigenvector's variance: D. R. Brillinger, "Time Series: Data Analysis and Theory", 1975, theorem 9.2.4.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.calibration.clocks import chunk_delays
from unmix.errors import InputError

__all__ = ["Transfer", "measure_transfer"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

FRAME_S = 0.064
LOWEST_HZ, HIGHEST_SHARE = 150.0, 0.45
LEAST_BANDWIDTH_HZ = 400.0
LEAST_SNR = 2.0
MOST_SECOND = 0.1
"""Second eigenvalue over the first: above, one source does not explain the take."""
SECOND_FROM_HZ, SECOND_SNR = 800.0, 10.0
"""Where a second source would show: a small array hears low frequencies as one whatever their number."""
LONGEST_COARSE_S = 16.0
OVERLAP = 2.08
"""Neighbouring frequencies share Hann frames a quarter apart: each is that much better known than if it stood alone."""
_ROUNDS = 4
_HALVINGS = 40
PLAIN_MISFIT = 1.5
"""Misfit that chance alone explains."""


@dataclass(frozen=True)
class Transfer:
    """Channels against the reference, (channels,) each; the reference's own are 0 and its sign 1.

    gain      natural logarithm of the gain; delay_s; sign +1 or -1
    *_std     standard deviations
    misfit    (channels,) mean square residual of the phase over its noise's variance; near 1 without reflections
    snr_db    of the source over the noise, median over the frequencies used
    second    second eigenvalue over the first, weighted by power
    bandwidth_hz  of the frequencies at which the source stands out
    """

    gain: Floats
    gain_std: Floats
    delay_s: Floats
    delay_std: Floats
    sign: NDArray[np.int64]
    misfit: Floats
    snr_db: float
    second: float
    bandwidth_hz: float


def measure_transfer(samples: Floats, reference: int, sample_rate: int, *, where: str = "take") -> Transfer:
    """Gain, delay and polarity of (channels, samples) against channel `reference`.

    Raises InputError when a channel is silent, one source does not explain the take, or its bandwidth is too small.
    """
    for channel in np.flatnonzero(np.ptp(samples, axis=1) == 0.0):
        raise InputError(f"{where}: channel {channel} is silent; check its cable, or leave it out of the array")
    coarse, sign = _coarse(samples, reference, sample_rate)
    if np.ptp(coarse) > 0.25 * samples.shape[1]:
        raise InputError(
            f"{where}: the channels have no plain sound in common: too little bandwidth, or other recordings; play "
            "noise, a sweep or speech, and give at least a second"
        )
    aligned = _aligned(samples, coarse)
    covariance, frames, frequency = _covariance(aligned, sample_rate)
    gain = np.zeros(len(samples))
    for _ in range(_ROUNDS):
        scale = np.exp(-gain) * sign
        h, lead, noise = _leading(covariance * np.outer(scale, scale))
        variance = _variance(h, lead, noise, frames, reference)
        ratio = h / h[:, reference, None]
        weight = 1.0 / variance
        gain = gain + np.sum(weight * np.log(np.abs(ratio)), axis=0) / np.sum(weight, axis=0)
    snr = (lead - noise) / np.maximum(noise * len(samples), 1e-300)
    used = snr > LEAST_SNR
    step = float(frequency[1] - frequency[0])
    _check_bandwidth(used, step, where)
    second = _second(covariance * np.outer(np.exp(-gain), np.exp(-gain)), used, frequency)
    if second > MOST_SECOND:
        raise InputError(
            f"{where}: one source does not explain it ({100 * second:.0f} % of the power comes from elsewhere): two "
            "sources, or strong reflections; record one source alone, close by or in the open"
        )
    delay, delay_std, turn, misfit = _slopes(ratio[used], variance[used], frequency[used])
    rest, gain_std, _ = _fitted(np.log(np.abs(ratio[used])), np.ones(np.count_nonzero(used)), variance[used])
    at = np.arange(len(samples)) == reference
    return Transfer(
        gain=np.where(at, 0.0, gain + rest),
        gain_std=np.where(at, 0.0, gain_std),
        delay_s=np.where(at, 0.0, coarse / sample_rate + delay),
        delay_std=np.where(at, 0.0, delay_std),
        sign=sign * turn,
        misfit=np.where(at, 1.0, misfit),
        snr_db=float(10.0 * np.log10(np.median(snr[used]))),
        second=second,
        bandwidth_hz=float(np.count_nonzero(used) * step),
    )


def _coarse(samples: Floats, reference: int, sample_rate: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Delays in whole samples and signs, from the correlation peaks of the loudest stretch."""
    length = min(samples.shape[1], round(LONGEST_COARSE_S * sample_rate))
    total = np.cumsum(np.concatenate([[0.0], samples[reference] ** 2]))
    start = int(np.argmax(total[length:] - total[: len(total) - length]))
    delay, peak = chunk_delays(samples[:, start : start + length], reference, sample_rate)
    sign = np.where(peak < 0.0, -1, 1)
    sign[reference] = 1
    return np.rint(delay * sample_rate).astype(np.int64), sign


def _aligned(samples: Floats, shift: NDArray[np.int64]) -> Floats:
    """Each channel earlier by its shift, cut to what all share."""
    first, last = int(shift.min()), int(shift.max())
    length = samples.shape[1] - (last - first)
    return np.stack([row[s - first : s - first + length] for row, s in zip(samples, shift, strict=True)])


def _covariance(samples: Floats, sample_rate: int) -> tuple[Complexes, float, Floats]:
    """Covariance (frequencies, channels, channels) over frames, the number of independent frames, frequencies."""
    frame = scipy.fft.next_fast_len(round(FRAME_S * sample_rate), real=True)
    hop = frame // 4
    f = scipy.fft.rfftfreq(frame, 1.0 / sample_rate)
    band = (f >= LOWEST_HZ) & (f <= HIGHEST_SHARE * sample_rate)
    window = np.hanning(frame + 1)[:-1]
    total = np.zeros((int(band.sum()), len(samples), len(samples)), np.complex128)
    count = max(0, (samples.shape[1] - frame) // hop + 1)
    if count < 8:
        raise InputError(f"the take lasts {samples.shape[1] / sample_rate:.2f} s; give at least a second")
    views = np.lib.stride_tricks.sliding_window_view(samples, frame, axis=1)[:, ::hop]
    for at in range(0, count, 256):
        spectra = scipy.fft.rfft(views[:, at : at + 256] * window, axis=-1)[..., band].transpose(2, 0, 1)
        total += spectra @ np.swapaxes(spectra.conj(), 1, 2)
    # With a quarter of a frame's hop every sample counts alike: T times the spacing of the frequencies is independent.
    independent = samples.shape[1] / frame
    return total / count, independent, f[band]


def _leading(covariance: Complexes) -> tuple[Complexes, Floats, Floats]:
    """Leading eigenvector (frequencies, channels), its eigenvalue, and the mean of the others."""
    values, vectors = np.linalg.eigh(covariance)
    return vectors[:, :, -1], values[:, -1], np.maximum(values[:, :-1].mean(axis=1), 1e-9 * values[:, -1])


def _variance(h: Complexes, lead: Floats, noise: Floats, frames: float, reference: int) -> Floats:
    inverse = 1.0 / np.maximum(np.abs(h) ** 2, 1e-12)
    common = lead * noise / (2.0 * frames * np.maximum(lead - noise, 1e-6 * lead) ** 2)
    variance = common[:, None] * (inverse + inverse[:, reference, None])
    variance[:, reference] = 1.0
    return np.asarray(variance)


def _check_bandwidth(used: NDArray[np.bool_], step: float, where: str) -> None:
    width = np.count_nonzero(used) * step
    if width < LEAST_BANDWIDTH_HZ:
        raise InputError(
            f"{where}: the source stands out over {width:.0f} Hz only, too little bandwidth for a delay; play noise, a "
            "sweep or speech, louder or closer"
        )


def _second(covariance: Complexes, used: NDArray[np.bool_], frequency: Floats) -> float:
    """What stands out of the noise besides the first eigenvalue, over the first; mean over clear frequencies."""
    values = np.linalg.eigvalsh(covariance)
    channels = values.shape[1]
    # Two sources take two eigenvalues, their reflections more: the smallest half are noise.
    floor = values[:, : channels // 2].mean(axis=1) if channels > 2 else np.zeros(len(values))
    clear = used & (values[:, -1] > SECOND_SNR * channels * floor)
    high = clear & (frequency > SECOND_FROM_HZ)
    chosen = high if np.count_nonzero(high) > 10 else used
    return float(np.mean((values[chosen, -2] - floor[chosen]) / values[chosen, -1]))


def _stretch(residual: Floats) -> float:
    """Over how many frequencies a residual stays alike: 1 + 2 sum of its autocorrelation up to the first zero."""
    x = residual - residual.mean()
    size = 1 << (2 * len(x) - 1).bit_length()
    correlation = np.fft.irfft(np.abs(np.fft.rfft(x, size)) ** 2)[: len(x) // 2]
    correlation = correlation / max(correlation[0], 1e-30)
    ends = np.flatnonzero(correlation < 0.05)
    return float(1.0 + 2.0 * correlation[1 : int(ends[0]) if len(ends) else None].sum())


def _slopes(ratio: Complexes, variance: Floats, frequency: Floats) -> tuple[Floats, Floats, NDArray[np.int64], Floats]:
    """Delay by the phase's slope, its deviation, polarity, misfit; (channels,) each."""
    omega = 2.0 * np.pi * frequency
    weight = 1.0 / variance
    phasor = ratio / np.abs(ratio)
    # A coarse search first, so that the phase left over needs no unwrapping.
    grid = np.linspace(-1.5, 1.5, 121) / (frequency[-1] / HIGHEST_SHARE)
    score = np.real(np.exp(1j * np.outer(grid, omega)) @ (weight * phasor))
    best = np.argmax(np.abs(score), axis=0)
    channels = np.arange(ratio.shape[1])
    turn = np.where(score[best, channels] < 0.0, -1, 1)
    start = grid[best]
    rest = np.angle(phasor * turn * np.exp(1j * omega[:, None] * start))
    slope, std, misfit = _fitted(rest, -omega, variance)
    return start + slope, std, turn, misfit


def _fitted(data: Floats, basis: Floats, variance: Floats) -> tuple[Floats, Floats, Floats]:
    """Factor a of data (frequencies, channels) = a basis + noise + reflections, its deviation, and the misfit of noise
    alone.

    Reflections are taken as a further error, as strong at all frequencies, of just the variance that explains the
    misfit (the random effects of R. DerSimonian and N. Laird, "Meta-analysis in clinical trials", Control. Clin.
    Trials 7, 1986). Clear frequencies then no longer outweigh all others, whose reflections are no stronger.
    """
    x = basis[:, None]

    def fit(extra: Floats) -> tuple[Floats, Floats, Floats]:
        weight = 1.0 / (variance + extra)
        information = np.sum(weight * x**2, axis=0)
        a = np.sum(weight * x * data, axis=0) / information
        excess = OVERLAP * np.sum(weight * (data - a * x) ** 2, axis=0) / max(1, len(basis) - 1)
        return np.asarray(a), np.asarray(information), np.asarray(excess)

    a, information, misfit = fit(np.zeros(data.shape[1]))
    low, high = np.zeros(data.shape[1]), OVERLAP * np.mean((data - a * x) ** 2, axis=0) * 4.0
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        too_small = fit(middle)[2] > 1.0
        low, high = np.where(too_small, middle, low), np.where(too_small, high, middle)
    extra = np.where(misfit > PLAIN_MISFIT, high, 0.0)
    a, information, _ = fit(extra)
    alike = np.array([_stretch(row) for row in ((data - a * x) / np.sqrt(variance + extra)).T])
    wider = np.where(extra > 0.0, np.sqrt(np.maximum(alike, OVERLAP) / OVERLAP), 1.0)
    return a, wider / np.sqrt(information), misfit
