"""Steered response power with phase transform, frame by frame.

Each frame's spectra are divided by their magnitudes, delayed to a direction and summed over microphones [1]_:

    P(x) = sum_f | sum_m exp(i omega_f tau_m(x)) Y_m(f) / |Y_m(f)| |^2 / (frequencies M^2),

which is one for a single undisturbed wave from x and 1/M for noise that microphones do not share. The coarse search
over the grid is followed by a Newton step on a quadratic through neighbouring points. One talker per frame: the
loudest. Who else is there shows in other frames.

.. [1] J. H. DiBiase, H. F. Silverman, M. S. Brandstein, "Robust localization in reverberant rooms", in: Microphone
   Arrays, Springer, 2001.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.bearings.bins import Steering
from unmix.bearings.peaks import FramePeaks
from unmix.bearings.space import SearchSpace

__all__ = ["frame_spectra", "srp_map", "srp_peaks"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Spectra = NDArray[np.complex64]

_STEP = 0.04
_BATCH = 256


def frame_spectra(samples: Floats, steering: Steering) -> Spectra:
    """Phase-transformed spectra of half-overlapped Hann frames, channels equalised: (frequencies, frames, channels)."""
    window = np.hanning(steering.frame + 1)[:-1].astype(np.float32)
    views = np.lib.stride_tricks.sliding_window_view(samples, steering.frame, axis=1)[:, :: steering.hop]
    last = steering.first_bin + len(steering.frequency_hz)
    y = scipy.fft.rfft(views.astype(np.float32) * window, axis=2)[..., steering.first_bin : last].transpose(2, 1, 0)
    y = y * steering.equaliser[:, None, :].astype(np.complex64)
    magnitude = np.abs(y)
    return np.asarray(y / np.maximum(magnitude, 1e-6 * magnitude.max(initial=1e-30)), dtype=np.complex64)


def srp_map(spectra: Spectra, waves: Spectra) -> Singles:
    """P of each frame in each direction: (frames, points), for steering vectors (frequencies, points, channels)."""
    total = np.zeros((spectra.shape[1], waves.shape[1]), dtype=np.float32)
    for y, b in zip(spectra, waves, strict=True):
        c = y @ b.conj().T
        total += c.real**2 + c.imag**2
    return total / np.float32(len(spectra) * spectra.shape[2])


def srp_peaks(
    samples: Floats,
    start_s: float,
    space: SearchSpace,
    steering: Steering,
    *,
    rotation: Floats | None = None,
    distance_m: float | None = None,
    waves: Spectra | None = None,
) -> FramePeaks:
    """Best direction of every frame of a stretch of recording.

    samples   (channels, samples) that start at ``start_s``
    rotation  (3, 3), array to world, when directions are the world's
    waves     of the grid, (frequencies, points, channels), when they are at hand
    """
    turn = np.eye(3) if rotation is None else rotation
    if waves is None:
        waves = steering.waves(space.grid @ space.basis.T @ turn, space.directions @ turn, distance_m)
    spectra = frame_spectra(samples, steering)
    table = srp_map(spectra, waves)
    best = table.argmax(axis=1)
    x = space.grid[best].copy()
    for first in range(0, len(x), _BATCH):
        part = slice(first, first + _BATCH)
        x[part] = _refined(spectra[:, part], x[part], space, steering, turn, distance_m)
    power = np.mean(samples**2, axis=0)
    frames = spectra.shape[1]
    loudness = np.array([power[i * steering.hop : i * steering.hop + steering.frame].mean() for i in range(frames)])
    time_s = start_s + (np.arange(frames) * steering.hop + 0.5 * steering.frame) / steering.sample_rate
    return FramePeaks(time_s, x, table.max(axis=1).astype(np.float64), loudness)


def _refined(
    spectra: Spectra, x: Floats, space: SearchSpace, steering: Steering, turn: Floats, distance_m: float | None
) -> Floats:
    """One Newton step from grid points x (frames, rank), no longer than the stencil."""
    frames = [space.local(point, _STEP) for point in x]
    points = len(frames[0].stencil)
    d = frames[0].axes.shape[1]
    stencil = np.concatenate([f.stencil for f in frames])
    waves = steering.waves(stencil @ space.basis.T @ turn, space.lift(stencil) @ turn, distance_m)
    waves = waves.reshape(len(waves), len(frames), points, -1)
    c = np.einsum("ftm,ftpm->ftp", spectra, waves.conj())
    p: Floats = np.asarray(np.sum(c.real**2 + c.imag**2, axis=0), dtype=np.float64)
    gradient = (p[:, 1 : 2 * d : 2] - p[:, 2 : 2 * d + 1 : 2]) / (2.0 * _STEP)
    curvature = np.zeros((len(frames), d, d))
    for a in range(d):
        curvature[:, a, a] = (p[:, 1 + 2 * a] - 2.0 * p[:, 0] + p[:, 2 + 2 * a]) / _STEP**2
    if d == 2:
        both = (p[:, 5] - p[:, 1] - p[:, 3] + p[:, 0]) / _STEP**2
        curvature[:, 0, 1] = curvature[:, 1, 0] = both
    moved = x.copy()
    for t, frame in enumerate(frames):
        if np.linalg.eigvalsh(curvature[t])[-1] >= 0.0:
            continue
        step = -np.linalg.solve(curvature[t], gradient[t])
        length = float(np.linalg.norm(step))
        moved[t] = frame.move(step * min(1.0, 2.0 * _STEP / max(length, 1e-12)))
    return moved
