"""Calibration from diffuse noise alone, no bearing known.

In a diffuse field all microphones hear the same power, so the ratio of powers is the ratio of gains. The coherence of
two microphones d apart, their delays differing by delta, their polarities by s, is

    Gamma(f) = s rho sinc(2 f d / c) exp(-j 2 pi f delta),

rho the field's share of the power beside the microphones' own noise. Fitted to the coherence of a pair, weighted by its
variance ((1 - G^2)^2 / 2N along G, (1 - G^2) / 2N across), it gives d, delta, rho and s. Positions, when asked for, are
moved as little as may be so that their distances are those found; what distances leave open (turns, mirrors, height of
a flat array) stays as it was.

Source: R. K. Cook et al., "Measurement of correlation coefficients in reverberant sound fields", J. Acoust. Soc. Am.
27, 1955; the variance of coherence estimates: G. C. Carter, "Coherence and time delay estimation", Proc. IEEE 75, 1987.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import InputError
from unmix.physics import pairwise_distances, speed_of_sound

__all__ = ["BlindFit", "blind_fit"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

FRAME_S = 0.064
LOWEST_HZ = 100.0
LEAST_S = 5.0
LEAST_SHARE = 0.5
MOST_MISFIT = 4.0
LONGEST_DELAY_S = 1e-3
OVERLAP = 2.08
"""Neighbouring frequencies share Hann frames a quarter apart: each is that much better known than if it stood alone."""


@dataclass(frozen=True)
class BlindFit:
    """The array with corrections found from diffuse noise.

    distance_m, distance_std_m  (channels, channels) found, with deviations
    share     (channels, channels) of the power that is diffuse
    misfit    mean square residual of the coherences over their variances: near 1 in a diffuse field
    """

    array: Array
    distance_m: Floats
    distance_std_m: Floats
    share: Floats
    misfit: float
    notes: tuple[str, ...]


@dataclass(frozen=True)
class _Pair:
    distance: float
    distance_std: float
    delay: float
    delay_std: float
    share: float
    sign: int
    misfit: float


def blind_fit(
    samples: Floats, array: Array, sample_rate: int, *, positions: bool = False, temperature_c: float = 20.0
) -> BlindFit:
    """Gains, delays, polarities and spacings from (channels, samples) of diffuse noise.

    Raises InputError when the noise is too short or not diffuse.
    """
    if samples.shape[1] < LEAST_S * sample_rate:
        raise InputError(
            f"{samples.shape[1] / sample_rate:.1f} s of noise; calibration from diffuse noise needs {LEAST_S:g} s, "
            "better a minute"
        )
    c = speed_of_sound(temperature_c)
    covariance, frames, f = _spectra(samples, sample_rate)
    power = np.einsum("fmm->fm", covariance).real
    coherence = covariance / np.sqrt(power[:, :, None] * power[:, None, :])
    nominal = pairwise_distances(array.positions_m)
    m, ref = array.channels, array.reference_channel
    pairs = {(a, b): _fit_pair(coherence[:, a, b], f, frames, nominal[a, b], c) for a in range(m) for b in range(a)}
    misfit = float(np.mean([p.misfit for p in pairs.values()]))
    share = float(np.median([p.share for p in pairs.values()]))
    if misfit > MOST_MISFIT or share < LEAST_SHARE:
        raise InputError(
            f"the noise is not diffuse (misfit {misfit:.1f}, diffuse share {100 * share:.0f} %): record steady noise "
            "from all sides in a reverberant room, several loudspeakers facing the walls, or give takes with bearings"
        )
    gain, gain_std = _gains(power, coherence, frames, ref)
    distance, spread, shares = np.zeros((m, m)), np.zeros((m, m)), np.ones((m, m))
    for (a, b), p in pairs.items():
        distance[a, b] = distance[b, a] = p.distance
        spread[a, b] = spread[b, a] = p.distance_std
        shares[a, b] = shares[b, a] = p.share
    delay, delay_std, sign = _against_reference(pairs, m, ref)
    place, place_std = array.positions_m, None
    if positions:
        place, place_std = _placed(array.positions_m, distance, spread, ref)
    fitted = replace(
        array, positions_m=place, gain_db=20.0 / np.log(10.0) * gain, gain_std_db=20.0 / np.log(10.0) * gain_std,
        delay_s=delay, delay_std_s=delay_std, polarity=sign, position_std_m=place_std,
    )  # fmt: skip
    return BlindFit(fitted, distance, spread, shares, misfit, tuple(_notes(distance, spread, nominal, positions)))


def _spectra(samples: Floats, sample_rate: int) -> tuple[Complexes, float, Floats]:
    frame = scipy.fft.next_fast_len(round(FRAME_S * sample_rate), real=True)
    hop = frame // 4
    f = scipy.fft.rfftfreq(frame, 1.0 / sample_rate)
    band = (f >= LOWEST_HZ) & (f <= 0.45 * sample_rate)
    window = np.hanning(frame + 1)[:-1]
    views = np.lib.stride_tricks.sliding_window_view(samples, frame, axis=1)[:, ::hop]
    total = np.zeros((int(band.sum()), len(samples), len(samples)), np.complex128)
    for at in range(0, views.shape[1], 256):
        spectra = scipy.fft.rfft(views[:, at : at + 256] * window, axis=-1)[..., band].transpose(2, 0, 1)
        total += spectra @ np.swapaxes(spectra.conj(), 1, 2)
    return total / views.shape[1], samples.shape[1] / frame, f[band]


def _model(x: Floats, f: Floats, c: float) -> Complexes:
    """Coherence for x = (distance, delay, share)."""
    return np.asarray(x[2] * np.sinc(2.0 * f * x[0] / c) * np.exp(-2j * np.pi * f * x[1]))


def _fit_pair(coherence: Complexes, f: Floats, frames: float, nominal: float, c: float) -> _Pair:
    """Least squares over distance, delay and share, to frequencies that still say something of the distance."""
    from scipy.optimize import least_squares

    used = f <= max(1.5 * c / max(nominal, 1e-3), 1000.0)
    g, f = coherence[used], f[used]
    low = f <= max(0.35 * c / max(nominal, 1e-3), 300.0)
    grid = np.linspace(-LONGEST_DELAY_S, LONGEST_DELAY_S, 401)
    score = np.real(np.exp(2j * np.pi * np.outer(grid, f[low])) @ g[low])
    best = int(np.argmax(np.abs(score)))
    sign = -1 if score[best] < 0.0 else 1
    start = np.array([nominal, grid[best], min(0.99, float(np.abs(g[low]).max()))])
    scale = np.array([0.01, 1e-5, 0.1])
    for _ in range(2):  # the weights once from the start, once from the fit
        mean = _model(start, f, c)
        size2 = np.minimum(np.abs(mean) ** 2, 0.9999)
        along, across = (1.0 - size2) / np.sqrt(2.0 * frames), np.sqrt((1.0 - size2) / (2.0 * frames))
        turn = np.exp(2j * np.pi * f * start[1])

        residual = _residual(sign * g, f, c, scale, (turn, along, across))
        found = least_squares(residual, start / scale, bounds=([1e-6, -np.inf, 0.05], [np.inf, np.inf, 9.9999]))
        start = found.x * scale
    std = np.sqrt(np.diag(np.linalg.inv(found.jac.T @ found.jac))) * scale
    misfit = OVERLAP * 2.0 * found.cost / max(1, 2 * len(f) - 3)
    widen = np.sqrt(max(misfit, 1.0))
    return _Pair(start[0], std[0] * widen, start[1], std[1] * widen, start[2], sign, misfit)


def _residual(
    target: Complexes, f: Floats, c: float, scale: Floats, weights: tuple[Complexes, Floats, Floats]
) -> Callable[[Floats], Floats]:
    turn, along, across = weights

    def residual(x: Floats) -> Floats:
        left = (target - _model(x * scale, f, c)) * turn
        return np.concatenate([left.real / along, left.imag / across])

    return residual


def _gains(power: Floats, coherence: Complexes, frames: float, ref: int) -> tuple[Floats, Floats]:
    """Half the logarithm of the power ratio, weighted by its variance (1 - |G|^2) / (2 N) per frequency."""
    ratio = 0.5 * np.log(power / power[:, ref, None])
    variance = np.maximum(1.0 - np.abs(coherence[:, :, ref]) ** 2, 1e-6) / (2.0 * frames)
    weight = 1.0 / variance
    gain = np.sum(weight * ratio, axis=0) / weight.sum(axis=0)
    std = 1.0 / np.sqrt(weight.sum(axis=0))
    std[ref] = 0.0
    return gain, std


def _against_reference(
    pairs: dict[tuple[int, int], _Pair], m: int, ref: int
) -> tuple[Floats, Floats, NDArray[np.int64]]:
    delay, std, sign = np.zeros(m), np.zeros(m), np.ones(m, np.int64)
    for a in range(m):
        if a == ref:
            continue
        pair = pairs[max(a, ref), min(a, ref)]
        delay[a] = pair.delay if a > ref else -pair.delay
        std[a], sign[a] = pair.delay_std, pair.sign
    return delay, std, sign


def _placed(place: Floats, distance: Floats, spread: Floats, ref: int) -> tuple[Floats, Floats]:
    """Positions moved as little as may be to the distances found, and their deviations; Gauss-Newton, minimum norm."""
    m = len(place)
    a, b = np.triu_indices(m, 1)
    w = 1.0 / np.maximum(spread[a, b], 1e-7)
    p = place.copy()
    for _ in range(8):
        apart = p[a] - p[b]
        length = np.linalg.norm(apart, axis=1)
        rows = np.zeros((len(a), 3 * m))
        unit = apart / length[:, None]
        for axis in range(3):
            rows[np.arange(len(a)), 3 * a + axis] = unit[:, axis]
            rows[np.arange(len(a)), 3 * b + axis] = -unit[:, axis]
        # Turns, shifts and, for a flat array, its height change no distance: they are left alone.
        inverse = np.linalg.pinv(rows * w[:, None], rcond=1e-3)
        p = p + (inverse @ ((distance[a, b] - length) * w)).reshape(m, 3)
    # All pairs come from m signals, and count as m of them.
    covariance = 0.5 * (m - 1) * np.einsum("ij,ij->i", inverse, inverse).reshape(m, 3)
    return p - p[ref] + place[ref], np.sqrt(covariance.mean(axis=1))


def _notes(distance: Floats, spread: Floats, nominal: Floats, positions: bool) -> list[str]:
    a, b = np.triu_indices(len(distance), 1)
    off = (distance[a, b] - nominal[a, b]) / np.maximum(spread[a, b], 1e-9)
    worst = int(np.argmax(np.abs(off)))
    if positions or abs(off[worst]) < 5.0:
        return []
    i, j = a[worst], b[worst]
    return [
        f"microphones {i} and {j} are {1e3 * distance[i, j]:.1f} mm apart, not {1e3 * nominal[i, j]:.1f} mm as the "
        "array file says: measure them again, or ask for positions"
    ]
