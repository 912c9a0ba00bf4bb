"""Frame by frame: late reverberation predicted recursively, then the model's separating matrix.

What the `dereverb` preset does with a whole segment, in memory that does not grow: recursive least squares with
forgetting (`prediction.RecursivePrediction`), the constrained solution's rows, overlap-add. Latency: one frame.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.room.blockwise import Blockwise
from unmix.room.chain import Look
from unmix.room.prediction import RecursivePrediction
from unmix.room.stft import Transform
from unmix.settings import RoomSettings

__all__ = ["RecursiveDereverberation"]

Floats = NDArray[np.float64]


class RecursiveDereverberation(Blockwise):
    """The model on frames whose late reverberation has been predicted from those before.

    look  from the stage's frequencies in hertz to what the model knows there
    """

    def __init__(
        self, settings: RoomSettings, look: Callable[[Floats], Look], *, sample_rate: float, channels: int
    ) -> None:
        if settings.prediction is None:
            raise ValueError("the settings predict nothing")
        self._prediction = settings.prediction
        self._transform = Transform.from_settings(settings.transform, sample_rate)
        self._forget = float(np.exp(-self._transform.hop / sample_rate / settings.prediction.forgetting_s))
        self._window, self._dual = self._transform.window(), self._transform.dual_window()
        self._channels = channels
        self._recent: Floats
        self._sum: Floats
        self.follow(look(self._transform.frequencies_hz))
        self._begin()

    @property
    def frequencies_hz(self) -> Floats:
        """Frequencies at which bearings are to be known."""
        return self._transform.frequencies_hz

    @property
    def block(self) -> int:
        """Samples between frames."""
        return self._transform.hop

    @property
    def latency(self) -> int:
        """Samples by which what comes out is late."""
        return self._transform.frame

    @property
    def talkers(self) -> int:
        """Number of talkers."""
        return int(self._rows.shape[1])

    def steer(self, look: Look) -> None:
        """Other bearings from the next frame on; overlapping frames fade one into the other."""
        self.follow(look)

    def follow(self, look: Look) -> None:
        """The same: nothing was learned of the talkers."""
        self._rows = look.rows.astype(np.complex64)

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything that depends on what was pushed."""
        own = {"in": self._in, "out": self._out, "recent": self._recent, "sum": self._sum}
        return {name: value.copy() for name, value in (own | self._predict.state()).items()}

    def restore(self, state: dict[str, NDArray[Any]]) -> None:
        """Go on from a state; raises KeyError or ValueError when it is not one of this stage's."""
        if state["recent"].shape != self._recent.shape or state["sum"].shape != self._sum.shape:
            raise ValueError("the state is of another array, frame or number of talkers")
        self._predict.restore(state)
        self._in, self._out = state["in"].copy(), state["out"].copy()
        self._recent, self._sum = state["recent"].copy(), state["sum"].copy()

    def _begin(self) -> None:
        """The start of a stream."""
        frame, hop = self._transform.frame, self._transform.hop
        self._in = np.zeros((self._channels, 0))
        self._out = np.zeros((self.talkers, hop))
        self._recent = np.zeros((self._channels, frame))
        self._sum = np.zeros((self.talkers, frame))
        self._predict: RecursivePrediction = RecursivePrediction(
            frame // 2 + 1,
            self._channels,
            taps=self._prediction.taps,
            delay=self._prediction.delay,
            forgetting=self._forget,
        )

    def _step(self, block: Floats) -> Floats:
        """One hop in, one hop of talkers out."""
        hop = self._transform.hop
        self._recent = np.concatenate([self._recent[:, hop:], block], axis=1)
        x = np.ascontiguousarray(scipy.fft.rfft(self._recent * self._window, axis=-1).T, np.complex64)
        y = (self._rows @ self._predict.step(x)[:, :, None])[:, :, 0]
        self._sum += scipy.fft.irfft(y.T, self._transform.frame, axis=-1) * self._dual
        ready = self._sum[:, :hop].copy()
        self._sum = np.concatenate([self._sum[:, hop:], np.zeros((self.talkers, hop))], axis=1)
        return ready
