"""From the refined signals to the talkers: posterior masks, a distortionless filter, the early sound restored.

**Filter.** Masks m_k = |y_k|^2 / (sum_j |y_j|^2 + n) split the stacked frames z~[t] of all channels, lags and leads
included, into talker k and the rest; with Phi the covariance of the rest, r the talker's correlation with the reference
channel z_1, mu the trade-off,

    w_k = Phi^-1 r / (mu + lambda),  Phi = sum_t (1 - m_k) z~ z~^H,  r = sum_t m_k z~ z_1^*,  lambda = r^H Phi^-1 r/r_1

is the parametric multichannel Wiener filter [1]_, distortionless at mu = 0, over several frames [2]_. Both sums weight
frames by (power of all channels)^-level_weight: left alone, the loudest syllables would decide what quiet ones need.

**Restoration.** Blind filters drift from the early sound at the reference microphone: reflections within a few frames
are lost or coloured. The unprocessed reference channel is fitted by all talkers' outputs over lags of -keep ... lags
frames, x_1[t] ~ sum_k sum_l h_k[l] y_k[t - l]; what lags -keep ... keep give is the talker's early sound. The longer
lags are fitted only so that late reverberation does not bias the early ones.

**Gain.** |d_k|^2 / (|d_k|^2 + mu (leak sum_j |d_j|^2 + noise)), smoothed over three frames and floored.

.. [1] M. Souden, J. Benesty, S. Affes, "On optimal frequency-domain multichannel linear filtering for noise reduction",
   IEEE Trans. ASLP 18(2), 2010.
.. [2] Y. A. Huang and J. Benesty, "A multi-frame approach to the frequency-domain single-channel noise reduction
   problem", IEEE Trans. ASLP 20(4), 2012.
"""

from __future__ import annotations

from typing import cast

import numpy as np

from unmix.room.linalg import adjoint, lagged, loaded, power, safe_solve, weighted_conjugate
from unmix.room.stft import Complexes, Reals
from unmix.settings import PostSettings

__all__ = ["background_level", "distortionless", "frame_weights", "gains", "posterior_masks", "restore"]

_LOADING = 1e-6
_OWN_IN_REST = np.float32(1e-5)
_RESTORE_LOADING = 1e-4
_QUIET_SHARE = 0.2
_LEAST_LEVEL = 1e-3


def posterior_masks(y: Complexes, noise: Reals | float = 0.0) -> Reals:
    """Each talker's share of the power, (frequencies, K, frames); ``noise`` broadcasts against it."""
    p = power(y)
    masks: Reals = p / (p.sum(axis=1, keepdims=True) + noise + np.finfo(p.dtype).tiny)
    return masks


def distortionless(
    z: Complexes,
    masks: Reals,
    reference: int,
    *,
    past: int = 0,
    future: int = 0,
    trade_off: float = 0.0,
    weight: Reals | None = None,
) -> tuple[Complexes, Complexes]:
    """Talkers (frequencies, K, frames) out of channels (frequencies, M, frames), and the filters used.

    ``weight`` (frequencies, 1, frames) of each frame, alike if None. ``past`` and ``future`` frames join the present
    one in the filter: (frequencies, K, lags * M), future first.
    """
    f, m, frames = z.shape
    lags = range(-future, past + 1)
    s = lagged(z, lags) if len(lags) > 1 else z
    at = future * m + reference
    each = (np.ones((f, 1, frames), z.real.dtype) if weight is None else weight) / z.real.dtype.type(frames)
    filters = np.empty((f, masks.shape[1], s.shape[1]), z.dtype)
    for k in range(masks.shape[1]):
        own = masks[:, k : k + 1] * each
        # A little of the talker counts as the rest: with one talker and no noise there would be none at all.
        rest = each - (1.0 - _OWN_IN_REST) * own
        phi = loaded(s @ np.swapaxes(weighted_conjugate(s, rest), 1, 2), _LOADING)
        r = s @ np.swapaxes(weighted_conjugate(z[:, reference : reference + 1], own), 1, 2)
        u = safe_solve(phi, r)
        at_reference = r[:, at : at + 1].real
        tiny = np.finfo(at_reference.dtype).tiny
        snr = (adjoint(r) @ u).real / np.maximum(at_reference, tiny)
        filters[:, k] = np.conjugate(u / np.maximum(trade_off + snr, tiny**0.5))[:, :, 0]
    return filters @ s, filters


def frame_weights(z: Complexes, exponent: float) -> Reals:
    """Weights (frequencies, 1, frames) of mean one: power over all channels and three frames, to minus ``exponent``."""
    level = _over_three_frames(power(z).sum(axis=1, keepdims=True))
    level += _LEAST_LEVEL * level.mean(axis=2, keepdims=True) + np.finfo(level.dtype).tiny
    weight = level**-exponent
    return cast("Reals", weight / weight.mean(axis=2, keepdims=True))


def restore(y: Complexes, x_reference: Complexes, *, lags: int, keep: int) -> tuple[Complexes, Reals]:
    """The talkers' early sound at the reference channel; also each one's power gain against white noise, (f, K).

    y (frequencies, K, frames); x_reference (frequencies, frames), unprocessed.
    """
    f, k, _ = y.shape
    s = lagged(y, range(-keep, lags + 1))
    sh = adjoint(s)
    h = adjoint(safe_solve(loaded(s @ sh, _RESTORE_LOADING), s @ np.conjugate(x_reference)[:, :, None]))[:, 0]
    kept = (2 * keep + 1) * k
    early = (h[:, :kept, None] * s[:, :kept]).reshape(f, 2 * keep + 1, k, -1).sum(axis=1)
    return early, power(h[:, :kept]).reshape(f, 2 * keep + 1, k).sum(axis=1)


def background_level(z: Complexes) -> Reals:
    """Power per frequency of what no talker explains: the least eigenvalue of the quietest fifth of the frames."""
    frames = z.shape[2]
    quiet = max(2 * z.shape[1], round(frames * _QUIET_SHARE))
    order = np.argsort(power(z).sum(axis=1), axis=1)[:, :quiet]
    chosen = np.take_along_axis(z, order[:, None], axis=2)
    covariance = chosen @ adjoint(chosen) / chosen.shape[2]
    level: Reals = np.maximum(np.linalg.eigvalsh(loaded(covariance, 1e-9))[:, 0], 0.0)
    return level


def gains(d: Complexes, noise: Reals, settings: PostSettings) -> Reals:
    """Real gains (frequencies, K, frames) of the mask; ``noise`` (frequencies, K) is the background in each output."""
    p = power(d)
    smooth = _over_three_frames(p)
    unwanted = settings.leak * (smooth.sum(axis=1, keepdims=True) - smooth) + noise[:, :, None]
    wanted = np.maximum(smooth - unwanted, 0.0)
    gain = wanted / (wanted + settings.trade_off * unwanted + np.finfo(p.dtype).tiny)
    floored: Reals = np.maximum(gain, settings.gain_floor)
    return floored


def _over_three_frames(p: Reals) -> Reals:
    smooth = p.copy()
    smooth[:, :, 1:] += p[:, :, :-1]
    smooth[:, :, :-1] += p[:, :, 1:]
    return smooth / 3.0
