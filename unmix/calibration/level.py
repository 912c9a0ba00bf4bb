"""Sound pressure level of full scale, from a tone of known level."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError

__all__ = ["find_tone", "full_scale_db_spl"]

Floats = NDArray[np.float64]

LEAST_SHARE = 0.5


def find_tone(signal: Floats, sample_rate: int, *, where: str = "recording") -> tuple[float, float]:
    """Frequency and mean square of the steady tone in (samples,).

    The power in the three semitones around the highest peak of a Hann-windowed spectrum. Raises InputError when that is
    less than half of all power, or the level changes over the recording.
    """
    x = signal - signal.mean()
    window = np.hanning(len(x) + 1)[:-1]
    power = np.abs(np.fft.rfft(x * window)) ** 2 / np.sum(window**2) / len(x) * 2.0
    f = np.fft.rfftfreq(len(x), 1.0 / sample_rate)
    audible = f >= 30.0
    peak = float(f[np.argmax(np.where(audible, power, 0.0))])
    near = np.abs(np.log2(np.maximum(f, 1e-9) / peak)) < 0.125
    tone = float(power[near].sum())
    if tone < LEAST_SHARE * max(float(power[audible].sum()), 1e-30):
        raise InputError(
            f"{where}: no steady tone stands out (the strongest, at {peak:.0f} Hz, holds "
            f"{100 * tone / max(float(power[audible].sum()), 1e-30):.0f} % of the power); record the calibrator alone"
        )
    parts = np.array_split(x, 8)
    level = 10.0 * np.log10(np.array([np.mean(p**2) for p in parts]) + 1e-30)
    if np.ptp(level) > 1.0:
        raise InputError(
            f"{where}: the tone's level changes by {np.ptp(level):.1f} dB over the recording; cut it to the steady "
            "part (start_s, stop_s)"
        )
    return peak, tone


def full_scale_db_spl(tone_power: float, tone_db_spl: float, gain_db: float = 0.0) -> float:
    """Level of a full-scale sine at the reference channel, given the mean square of a tone in a channel whose gain is
    `gain_db` above the reference's."""
    return tone_db_spl - (10.0 * float(np.log10(2.0 * tone_power)) - gain_db)
