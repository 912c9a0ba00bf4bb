"""Short-time Fourier transform with exact reconstruction.

Analysis and synthesis share the periodic Hann window w; with hop H = frame / overlap the synthesis window is its dual,
w[n] / sum_j w[n + jH]^2, so that synthesis after analysis gives the signal back to rounding [1]_.

.. [1] D. W. Griffin and J. S. Lim, "Signal estimation from modified short-time Fourier transform", IEEE Trans. ASSP
   32(2), 1984.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.settings import TransformSettings

__all__ = ["Complexes", "Reals", "Transform"]

Reals = NDArray[np.floating[Any]]
Complexes = NDArray[np.complexfloating[Any, Any]]


@dataclass(frozen=True)
class Transform:
    """Frames of ``frame`` samples every ``hop`` samples; spectra are (frequencies, channels, frames).

    The first frame starts ``frame - hop`` samples before the signal and the last one ends behind it: every sample
    lies in frame / hop frames.
    """

    frame: int
    hop: int
    sample_rate: float
    single: bool = True

    @classmethod
    def from_settings(cls, settings: TransformSettings, sample_rate: float) -> Transform:
        """The transform of the settings at a sample rate: the hop is rounded to a length that the FFT likes."""
        hop = scipy.fft.next_fast_len(max(1, round(settings.frame_s * sample_rate / settings.overlap)), real=True)
        frame = hop * settings.overlap
        return cls(frame + frame % 2, hop, sample_rate, settings.precision == "single")

    @property
    def frequencies_hz(self) -> NDArray[np.float64]:
        """Centre of each frequency bin."""
        return np.asarray(np.arange(self.frame // 2 + 1) * (self.sample_rate / self.frame), dtype=np.float64)

    @property
    def real(self) -> type[np.floating[Any]]:
        """Type of the samples inside."""
        return np.float32 if self.single else np.float64

    @property
    def complex(self) -> type[np.complexfloating[Any, Any]]:
        """Type of the spectra inside."""
        return np.complex64 if self.single else np.complex128

    def frames(self, samples: int) -> int:
        """Number of frames of a signal."""
        return -(-(samples + self.frame - self.hop) // self.hop)

    def window(self) -> NDArray[np.float64]:
        """Periodic Hann window."""
        window: NDArray[np.float64] = 0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(self.frame) / self.frame)
        return window

    def dual_window(self) -> NDArray[np.float64]:
        """Synthesis window."""
        window = self.window()
        total = np.zeros(self.hop)
        for at in range(0, self.frame, self.hop):
            piece = window[at : at + self.hop]
            total[: len(piece)] += np.square(piece)
        return window / np.resize(total, self.frame)

    def analyse(self, signals: Reals, *, workers: int = 1) -> Complexes:
        """Spectra (frequencies, channels, frames) of (channels, samples)."""
        channels, samples = signals.shape
        count, lead = self.frames(samples), self.frame - self.hop
        padded = np.zeros((channels, (count - 1) * self.hop + self.frame), self.real)
        padded[:, lead : lead + samples] = signals
        taper: Reals = self.window().astype(self.real)
        views = np.lib.stride_tricks.sliding_window_view(padded, self.frame, axis=1)[:, :: self.hop]
        spectra = np.empty((self.frame // 2 + 1, channels, count), self.complex)
        for channel in range(channels):
            spectra[:, channel] = scipy.fft.rfft(views[channel] * taper, axis=-1, workers=workers).T
        return spectra

    def synthesise(self, spectra: Complexes, samples: int, *, workers: int = 1) -> Reals:
        """Signals (channels, samples) of spectra (frequencies, channels, frames)."""
        _, channels, count = spectra.shape
        window, overlap = self.dual_window().astype(self.real), -(-self.frame // self.hop)
        out = np.zeros((channels, (count + overlap) * self.hop), self.real)
        for channel in range(channels):
            frames = scipy.fft.irfft(spectra[:, channel].T, self.frame, axis=-1, workers=workers) * window
            for part in range(overlap):
                piece = frames[:, part * self.hop : (part + 1) * self.hop]
                target = out[channel, part * self.hop :][: count * self.hop].reshape(count, self.hop)
                target[:, : piece.shape[1]] += piece
        lead = self.frame - self.hop
        return out[:, lead : lead + samples]
