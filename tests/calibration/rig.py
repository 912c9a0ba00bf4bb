"""Arrays with known faults, and what they record of one source or of diffuse noise."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from tests.conftest import delayed, speech
from unmix.array import Array
from unmix.model.delays import paths_from_bearings

RATE = 16000
Floats = np.ndarray


@dataclass(frozen=True)
class Faults:
    """Gains in dB, delays, polarities, displacements of each channel."""

    gain_db: Floats
    delay_s: Floats
    sign: Floats
    position_m: Floats

    @classmethod
    def draw(cls, rng: np.random.Generator, channels: int, *, position_m: float = 0.0) -> Faults:
        """2 dB and 20 us."""
        sign = np.where(rng.random(channels) < 0.2, -1, 1)
        place = position_m * rng.standard_normal((channels, 3))
        return cls(2.0 * rng.standard_normal(channels), 20e-6 * rng.standard_normal(channels), sign, place)

    def record(self, signals: Floats) -> Floats:
        """What the channels make of (..., channels, samples)."""
        samples = signals.shape[-1]
        size = 1 << (samples + 1024).bit_length()
        omega = 2 * np.pi * np.fft.rfftfreq(size, 1 / RATE)
        spectrum = np.fft.rfft(signals, size) * np.exp(-1j * omega * self.delay_s[:, None])
        gain = self.sign * 10 ** (self.gain_db / 20)
        return np.asarray(np.fft.irfft(spectrum, size)[..., :samples] * gain[:, None])

    def against(self, reference: int) -> Faults:
        """The same relative to the reference channel, as calibration states them."""
        return Faults(
            self.gain_db - self.gain_db[reference], self.delay_s - self.delay_s[reference],
            self.sign * self.sign[reference], self.position_m - self.position_m[reference],
        )  # fmt: skip


def take(
    array: Array,
    faults: Faults,
    azimuth: float,
    elevation: float,
    rng: np.random.Generator,
    *,
    seconds: float = 4.0,
    snr_db: float = 20.0,
    distance_m: float | None = None,
    source: Floats | None = None,
) -> Floats:
    """One source at a bearing, recorded with the faults; each microphone's noise is `snr_db` below."""  # fmt: skip
    signal = speech("novel-reader", seconds) if source is None else source
    true = replace(array, positions_m=array.positions_m + faults.position_m)
    image = delayed(signal[None], paths_from_bearings(true, [azimuth], [elevation], [distance_m or np.nan]), RATE)[0]
    noise = 10 ** (-snr_db / 20) * np.sqrt(np.mean(signal**2)) * rng.standard_normal(image.shape)
    return faults.record(image + noise)
