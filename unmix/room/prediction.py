"""Late reverberation predicted from the past of all channels and subtracted: weighted prediction error.

Per frequency, z[t] = x[t] - G^H s[t] with s[t] the frames t - delay, ..., t - delay - taps + 1 of all channels. Under a
Gaussian talker of variance lambda[t] the maximum-likelihood G solves

    (sum_t s[t] s[t]^H / lambda[t]) G = sum_t s[t] x[t]^H / lambda[t],

alternating with lambda [1]_ [2]_. The recursive form is the same with exponential forgetting (recursive least squares).

.. [1] T. Nakatani, T. Yoshioka, K. Kinoshita, M. Miyoshi, B.-H. Juang, "Speech dereverberation based on
   variance-normalized delayed linear prediction", IEEE Trans. ASLP 18(7), 2010.
.. [2] T. Yoshioka and T. Nakatani, "Generalization of multi-channel linear prediction methods for blind MIMO impulse
   response shortening", IEEE Trans. ASLP 20(10), 2012.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.room.linalg import adjoint, lagged, loaded, power, safe_solve, weighted_conjugate
from unmix.room.stft import Complexes, Reals
from unmix.settings import PredictionSettings

__all__ = ["RecursivePrediction", "predict", "usable_taps"]

_LOADING = 1e-6
_STATE = ("inverse", "filter", "past", "level")


def usable_taps(taps: int, channels: int, frames: int) -> int:
    """As many of ``taps`` as so many frames can support: four frames per coefficient, at least one tap."""
    return max(1, min(taps, frames // (4 * channels)))


def predict(
    x: Complexes,
    settings: PredictionSettings,
    *,
    variance: Reals | None = None,
    iterations: int | None = None,
    taps: int | None = None,
) -> Complexes:
    """Spectra (frequencies, channels, frames) without what the past predicts.

    variance    (frequencies, frames) of the talkers, to start from; the channels' mean power when None
    iterations  reweightings, instead of the settings'; the first uses ``variance``
    taps        instead of the settings'
    """
    channels, frames = x.shape[1:]
    taps = usable_taps(taps or settings.taps, channels, frames)
    s = lagged(x, range(settings.delay, settings.delay + taps))
    z = x
    floor = 10.0 ** (settings.floor_db / 10.0)
    for i in range(settings.iterations if iterations is None else iterations):
        lam = variance if i == 0 and variance is not None else power(z).mean(axis=1)
        lam = np.maximum(lam, floor * lam.max(axis=1, keepdims=True) + np.finfo(lam.dtype).tiny)
        sh = np.swapaxes(weighted_conjugate(s, (lam.mean(axis=1, keepdims=True) / lam)[:, None]), 1, 2)
        g = safe_solve(loaded(s @ sh, _LOADING), adjoint(x @ sh))
        z = x - adjoint(g) @ s
    return z


class RecursivePrediction:
    """The recursive form: one frame in, one frame out, memory of (frequencies, taps * channels) squared.

    forgetting  weight of the past per frame, below 1
    """

    def __init__(self, frequencies: int, channels: int, *, taps: int, delay: int, forgetting: float) -> None:
        self._taps, self._delay, self._forgetting = taps, delay, forgetting
        n = taps * channels
        self._inverse = np.broadcast_to(np.eye(n, dtype=np.complex64), (frequencies, n, n)).copy()
        self._filter = np.zeros((frequencies, n, channels), np.complex64)
        self._past = np.zeros((frequencies, delay + taps, channels), np.complex64)
        self._level = np.full(frequencies, 1e-10, np.float32)

    def step(self, x: Complexes) -> Complexes:
        """Take one frame (frequencies, channels); return it without its predicted part.

        Where the prediction would add power, which it does while it has little to go by, the frame is left as it is.
        """
        f = len(x)
        s = self._past[:, self._delay - 1 : self._delay - 1 + self._taps].reshape(f, -1, 1)
        z = x - (adjoint(self._filter) @ s)[:, :, 0]
        self._level = np.maximum(self._level * self._forgetting, power(x).mean(axis=1))
        lam = np.maximum(power(z).mean(axis=1), 1e-4 * self._level + 1e-12)
        ps = self._inverse @ s
        gain = ps / (self._forgetting * lam[:, None, None] + (adjoint(s) @ ps).real)
        inverse = (self._inverse - gain @ adjoint(ps)) / self._forgetting
        inverse = 0.5 * (inverse + adjoint(inverse))
        # Contiguous, so that a state put back computes in the same order.
        self._inverse = np.ascontiguousarray(self._bounded(inverse))
        self._filter = np.ascontiguousarray(self._filter + gain @ np.conjugate(z[:, None, :]))
        self._past = np.concatenate([x[:, None].astype(np.complex64), self._past[:, :-1]], axis=1)
        adds = power(z).sum(axis=1) > power(x).sum(axis=1)
        return np.where(adds[:, None], x, z)

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything that depends on the frames so far."""
        return {name: getattr(self, f"_{name}").copy() for name in _STATE}

    def restore(self, state: Mapping[str, NDArray[Any]]) -> None:
        """Go on from a state; raises KeyError or ValueError when it is not one of this form's."""
        for name in _STATE:
            if state[name].shape != getattr(self, f"_{name}").shape:
                raise ValueError(f"{name}: shape {state[name].shape} is not {getattr(self, f'_{name}').shape}")
        for name in _STATE:
            setattr(self, f"_{name}", state[name].copy())

    def _bounded(self, inverse: Complexes) -> Complexes:
        """Forgetting without excitation lets the inverse grow without end: hold its largest diagonal."""
        n = inverse.shape[-1]
        peak = np.trace(inverse, axis1=1, axis2=2).real / n
        limit = 1e4
        scale = np.where(np.isfinite(peak) & (peak > limit), limit / np.maximum(peak, limit), 1.0).astype(np.float32)
        inverse = inverse * scale[:, None, None]
        lost = ~np.isfinite(peak)
        if lost.any():
            inverse[lost] = np.eye(n, dtype=np.complex64)
            self._filter[lost] = 0.0
        return inverse
