"""The noise's covariance over frequency, and the filters that whiten it.

R(omega), (channels, channels) Hermitian, scaled so that its diagonal is 1 on average. What the solvers need is a
matrix filter W with W^H W = R^-1; its taps come from the Hermitian root R^(-1/2), cut to a stated length. Every
method uses the same cut filter, so that they solve the same problem.

    white      each channel's own noise, equal and independent
    diffuse    a spherically isotropic field plus self-noise (the field alone is singular at low frequencies)
    measured   from stretches without talkers
    fitted     white plus diffuse powers per band, fitted to what a first solution leaves outside the model's range
    observed   the recording's own covariance, so that the solution has the least output power
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError
from unmix.model.mixing import Mixing
from unmix.physics import diffuse_coherence, pairwise_distances

__all__ = ["Noise", "NoiseKind", "Spectra", "diffuse_covariance", "fitted_covariance", "noise_from_covariance"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
NoiseKind = Literal["white", "diffuse", "measured", "fitted", "observed"]

GRID = 1024
"""FFT length on which covariances are held."""
_FLOOR = 1e-6


@dataclass(frozen=True)
class Noise:
    """Noise covariance and its whitening filter.

    kind        which of the models
    covariance  (GRID / 2 + 1, channels, channels), mean diagonal 1; None for white
    taps        (channels, channels, 2 half_width + 1): w[n] = sum_j taps[..., half_width + j] v[n + j]; None for white
    """

    kind: NoiseKind
    covariance: Complexes | None = None
    taps: Floats | None = None

    @property
    def half_width(self) -> int:
        """Samples that whitening reaches to either side."""
        return 0 if self.taps is None else self.taps.shape[-1] // 2

    def response(self, omega: Floats) -> Complexes | None:
        """Response of the whitening filter (frequencies, channels, channels); None for white."""
        if self.taps is None:
            return None
        basis = np.exp(1j * np.outer(omega, np.arange(-self.half_width, self.half_width + 1)))
        return np.asarray(np.einsum("cmj,fj->fcm", self.taps, basis, optimize=True))

    def whiten(self, recording: Floats) -> Floats:
        """Whiten (channels, samples), zero outside; same shape."""
        if self.taps is None:
            return recording
        from scipy.signal import fftconvolve

        w, samples = self.half_width, recording.shape[1]
        flipped = self.taps[:, :, ::-1]
        whitened = np.zeros_like(recording)
        for channel in range(len(recording)):
            whitened += fftconvolve(recording[channel][None, :], flipped[:, channel], axes=1)[:, w : w + samples]
        return whitened

    def whiten_mixing(self, mixing: Mixing) -> Mixing:
        """The model's filters followed by whitening; the reach grows by the filter's half-width."""
        if self.taps is None:
            return mixing
        from scipy.signal import fftconvolve

        if mixing.taps.ndim == 4:
            raise UnsolvableError(
                f'noise {self.kind!r} needs talkers at rest; use noise = "white" while something moves'
            )
        # y'[n] = sum_i W[i] y[n+i], y[n] = sum_j h[j] z[n+j]: the taps of the chain are the plain convolution.
        taps = np.zeros((mixing.talkers, mixing.channels, mixing.taps.shape[-1] + 2 * self.half_width))
        for channel in range(mixing.channels):
            rows = self.taps[:, channel]
            taps += fftconvolve(mixing.taps[:, channel, None, :], rows[None, :, :], axes=-1)
        return Mixing(taps, mixing.reach + self.half_width)


class Spectra:
    """Running covariance of a recording over frequency, from half-overlapped Hann frames; bounded memory."""

    def __init__(self, channels: int) -> None:
        self._window = np.hanning(GRID + 1)[:-1]
        self._rest = np.zeros((channels, 0))
        self._sum = np.zeros((GRID // 2 + 1, channels, channels), np.complex128)
        self.frames = 0

    def add(self, chunk: Floats) -> None:
        """Take in (channels, samples); stretches must be contiguous (see `break_off`)."""
        hop = GRID // 2
        signal = np.concatenate([self._rest, chunk], axis=1)
        count = max(0, (signal.shape[1] - GRID) // hop + 1)
        if count:
            frames = np.lib.stride_tricks.sliding_window_view(signal, GRID, axis=1)[:, : count * hop : hop]
            spectra = np.fft.rfft(frames * self._window, axis=-1).transpose(2, 0, 1)
            self._sum += spectra @ spectra.conj().transpose(0, 2, 1)
            self.frames += count
        self._rest = signal[:, count * hop :]

    def break_off(self) -> None:
        """Forget the samples that wait for the next chunk: what follows is another stretch."""
        self._rest = self._rest[:, :0]

    @classmethod
    def of(cls, stretches: Iterable[Floats], channels: int) -> Spectra:
        """Spectra of separate stretches."""
        spectra = cls(channels)
        for stretch in stretches:
            spectra.add(stretch)
            spectra.break_off()
        return spectra

    def covariance(self) -> Complexes:
        """(GRID / 2 + 1, channels, channels). Raises UnsolvableError with fewer frames than twice the channels."""
        least = 2 * self._sum.shape[-1]
        if self.frames < least:
            raise UnsolvableError(
                f"a covariance of {self._sum.shape[-1]} channels needs {least} frames of {GRID} samples; "
                f"there are {self.frames}: give longer stretches in `noise_only_s`"
            )
        return np.asarray(self._sum / self.frames)


def diffuse_covariance(positions_m: Floats, sample_rate: float, self_noise_db: float, speed_m_s: float) -> Complexes:
    """Isotropic field of unit power plus self-noise at `self_noise_db` relative to it, on the grid."""
    frequencies = np.fft.rfftfreq(GRID, 1.0 / sample_rate)
    field = diffuse_coherence(pairwise_distances(positions_m), frequencies, speed_m_s)
    return np.asarray(field + 10.0 ** (self_noise_db / 10.0) * np.eye(len(positions_m)), dtype=np.complex128)


def fitted_covariance(
    observed: Complexes, mixing: Mixing, positions_m: Floats, sample_rate: float, speed_m_s: float
) -> Complexes:
    """White plus diffuse powers per band, fitted to what lies outside the model's range.

    With P the projector onto the complement of the columns of H, the powers minimise, over the bins of each third of an
    octave, || P S P - P (a I + b Gamma) P ||_F^2 subject to a, b >= 0. Residuals inside the range carry no information.
    """
    from scipy.optimize import nnls

    frequencies = np.fft.rfftfreq(GRID, 1.0 / sample_rate)
    h = mixing.response(np.asarray(2.0 * np.pi * frequencies / sample_rate, np.float64))
    u, s, _ = np.linalg.svd(h, full_matrices=False)
    u = u * (s > 1e-3 * s.max())[:, None, :]
    eye = np.eye(len(positions_m))
    project = eye - u @ u.conj().transpose(0, 2, 1)
    gamma = diffuse_coherence(pairwise_distances(positions_m), frequencies, speed_m_s)

    def flat(matrices: Complexes) -> Floats:
        return np.asarray(matrices).view(np.float64).reshape(len(matrices), -1)

    outside, white, field = (
        flat(np.ascontiguousarray(project @ m @ project, dtype=np.complex128)) for m in (observed, eye, gamma)
    )
    level = np.trace(observed, axis1=1, axis2=2).real / len(positions_m)
    bands = np.minimum(np.floor(3.0 * np.log2(np.maximum(frequencies, 50.0) / 50.0)).astype(int), 40)
    powers = np.zeros((len(frequencies), 2))
    for band in np.unique(bands):
        at = bands == band
        weight = 1.0 / np.maximum(level[at], 1e-30)[:, None]
        columns = np.column_stack([(white[at] * weight).ravel(), (field[at] * weight).ravel()])
        powers[at] = nnls(columns, (outside[at] * weight).ravel())[0]
    floor = 1e-6 * level.mean()
    return np.asarray((powers[:, :1, None] + floor) * eye + powers[:, 1:, None] * gamma, dtype=np.complex128)


def noise_from_covariance(kind: NoiseKind, covariance: Complexes, half_width: int) -> Noise:
    """Scale a covariance to mean diagonal 1, load it lightly, and cut its whitening filter to 2 half_width + 1 taps."""
    covariance = 0.5 * (covariance + covariance.conj().transpose(0, 2, 1))
    channels = covariance.shape[-1]
    power = np.trace(covariance, axis1=1, axis2=2).real / channels
    covariance = covariance / power.mean()
    loading = _FLOOR * (1.0 + power / power.mean())
    covariance = covariance + loading[:, None, None] * np.eye(channels)
    values, vectors = np.linalg.eigh(covariance)
    root = (vectors / np.sqrt(np.maximum(values, _FLOOR))[:, None, :]) @ vectors.conj().transpose(0, 2, 1)
    full = np.fft.irfft(root.conj(), GRID, axis=0).transpose(1, 2, 0)
    half_width = min(half_width, GRID // 2 - 1)
    taps = np.concatenate([full[..., -half_width:], full[..., : half_width + 1]], axis=-1)
    taper = np.kaiser(2 * half_width + 1, 6.0)
    return Noise(kind, covariance, np.ascontiguousarray(taps * taper))
