"""What is wrong with the hardware: each channel's gain, delay, polarity and position, dead channels, clipping."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.errors import InputError
from unmix.render.spec import FaultSpec

__all__ = ["Faults", "draw_faults"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Faults:
    """The true faults of a scene, (channels,) each and ``position_m`` (channels, 3): a channel records
    ``polarity * gain * ideal(t - delay)`` at its position plus ``position_m``; ``alive`` is False where it records
    nothing."""

    gain_db: Floats
    delay_s: Floats
    polarity: NDArray[np.int64]
    position_m: Floats
    alive: NDArray[np.bool_]
    clip_db: float | None

    def record(self, signals: Floats, sample_rate: int, *, channels: slice | list[int] | None = None) -> Floats:
        """What the channels make of ideal ``signals`` (..., channels, samples); clipping is not part of it.

        ``channels`` tells which channels the signals belong to, all when it is None.
        """
        chosen = slice(None) if channels is None else channels
        factor = self.polarity[chosen] * 10.0 ** (self.gain_db[chosen] / 20.0) * self.alive[chosen]
        delay = self.delay_s[chosen] * sample_rate
        out = _delayed(signals, delay) if np.any(delay) else signals
        return out if np.all(factor == 1.0) else out * factor[:, None]

    def clip(self, signals: Floats) -> tuple[Floats, int]:
        """Signals held to the clipping level, and how many samples that changed."""
        if self.clip_db is None:
            return signals, 0
        limit = 10.0 ** (self.clip_db / 20.0)
        return np.clip(signals, -limit, limit), int(np.count_nonzero(np.abs(signals) > limit))


def draw_faults(spec: FaultSpec, channels: int, rng: np.random.Generator) -> Faults:
    """Faults of ``channels`` channels: those stated plus the random ones. Raises InputError naming the key."""
    for key in ("gain_db", "delay_s", "polarity", "position_m"):
        values = getattr(spec, key)
        if values is not None and len(values) != channels:
            raise InputError(f"key `faults.{key}`: {len(values)} values for {channels} channels; give one for each")
        if values is not None and not np.all(np.isfinite(values)):
            raise InputError(f"key `faults.{key}`: values must be finite numbers")
    for channel in spec.dead:
        if channel >= channels:
            raise InputError(f"key `faults.dead`: there is no channel {channel}; the array has 0 to {channels - 1}")

    def stated(values: list[float] | None) -> Floats:
        return np.zeros(channels) if values is None else np.array(values, dtype=np.float64)

    # All are drawn whatever their scale, so that one kind of fault does not change the draw of another.
    gain, delay = rng.standard_normal((2, channels))
    place = rng.standard_normal((channels, 3))
    position = np.zeros((channels, 3)) if spec.position_m is None else np.array(spec.position_m, dtype=np.float64)
    alive = np.ones(channels, dtype=np.bool_)
    alive[spec.dead] = False
    return Faults(
        gain_db=stated(spec.gain_db) + spec.gain_std_db * gain,
        delay_s=stated(spec.delay_s) + spec.delay_std_s * delay,
        polarity=np.ones(channels, np.int64) if spec.polarity is None else np.array(spec.polarity, np.int64),
        position_m=position + spec.position_std_m * place,
        alive=alive,
        clip_db=spec.clip_db,
    )


def _delayed(signals: Floats, delay: Floats) -> Floats:
    """Each channel of ``signals`` (..., channels, samples) later by ``delay`` (channels,) samples, exactly, by FFT."""
    samples = signals.shape[-1]
    length = scipy.fft.next_fast_len(samples + 2 * (int(np.ceil(np.abs(delay).max())) + 512), real=True)
    omega = 2.0 * np.pi * scipy.fft.rfftfreq(length)
    spectrum = scipy.fft.rfft(signals, length, axis=-1) * np.exp(-1j * omega * delay[:, None])
    return np.asarray(scipy.fft.irfft(spectrum, length, axis=-1)[..., :samples])
