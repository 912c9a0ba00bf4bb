"""Equivalent signal-to-noise ratio: how far below the talker the others would have to be for the same STOI.

With s_k the talker's reference and n the sum of the other talkers', the mixture at a ratio of g dB is

    m_g = s_k + 10^((g0 - g) / 20) n,    g0 = 10 log10(|s_k|^2 / |n|^2),

and the equivalent ratio of a signal is the g at which STOI(s_k, m_g) is the signal's. The gain, that of the separated
signal less that of the microphone, says how many decibels quieter the other talkers would have had to be to be as
little in the way. It counts what intelligibility counts: artifacts that cost words cost decibels here.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.interpolate
import scipy.optimize
from numpy.typing import NDArray

from unmix.metrics.distortion import describe_unusable
from unmix.metrics.intelligibility import SpeechReference

__all__ = ["EquivalentRatio"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

RATIOS_DB = np.arange(-30.0, 42.5, 2.5)
"""Where mixtures are made; between these STOI is interpolated."""
BESIDE = 2
"""Points to either side of the value that the interpolation rests on."""


class EquivalentRatio:
    """Mixtures of one talker with the others, made as they are asked for and kept.

    Parameters
    ----------
    references : (references, samples)
    talker : int
    speech : SpeechReference
        Of that talker.
    """

    def __init__(self, references: Signals, talker: int, speech: SpeechReference) -> None:
        others = [s for k, s in enumerate(references) if k != talker and describe_unusable(s) is None]
        self.undefined: str | None = None
        self._known: dict[int, float] = {}
        if speech.undefined is not None:
            self.undefined = speech.undefined
        elif not others:
            self.undefined = "no other talker has a reference to be mixed in"
        else:
            own = np.asarray(references[talker], dtype=np.float64)
            together = np.asarray(np.sum(others, axis=0, dtype=np.float64))
            self._ratio = float(np.linalg.norm(own) / np.linalg.norm(together))
            self._mixtures = speech.mixed(own, together)

    def ratio_db(self, stoi: float | None) -> tuple[float | None, str | None]:
        """The ratio in dB at which a mixture has this STOI; None with the reason."""
        if self.undefined is not None:
            return None, self.undefined
        if stoi is None:
            return None, "STOI is undefined"
        low, high = 0, len(RATIOS_DB) - 1
        while high - low > 1:
            middle = (low + high) // 2
            low, high = (middle, high) if self._stoi(middle) < stoi else (low, middle)
        if low == 0 and stoi <= self._stoi(low):
            return None, f"less intelligible than with the others {-RATIOS_DB[0]:.0f} dB above the talker"
        if high == len(RATIOS_DB) - 1 and stoi >= self._stoi(high):
            return None, f"more intelligible than with the others {RATIOS_DB[-1]:.0f} dB below the talker"
        return self._between(stoi, low, high), None

    def _between(self, stoi: float, low: int, high: int) -> float:
        points = range(max(0, low - BESIDE + 1), min(len(RATIOS_DB), high + BESIDE))
        curve = scipy.interpolate.PchipInterpolator(RATIOS_DB[points], [self._stoi(p) for p in points])
        ratio, end = RATIOS_DB[low], RATIOS_DB[high]
        return float(scipy.optimize.brentq(lambda g: float(curve(g)) - stoi, ratio, end, xtol=1e-6))

    def _stoi(self, point: int) -> float:
        if point not in self._known:
            gain = self._ratio * 10.0 ** (-RATIOS_DB[point] / 20.0)
            self._known[point] = self._mixtures.stoi(gain)
        return self._known[point]
