"""Reverberation read off impulse responses: decay curve, T20, direct-to-reverberant ratio.

The decay curve is Schroeder's backward integral [1]_ of the squared response from the direct sound on,

    E(t) = integral_t^inf h(u)^2 du,        in dB relative to E(onset),

T20 the line fitted to it between -5 and -25 dB, extended to 60 dB of decay [2]_. Where the direct sound alone
takes more than 5 dB off the curve (a talker close to the microphone), its step would be read as decay; the
integral then starts behind it, which is what the minimum distance of [2]_ is for.

.. [1] M. R. Schroeder, "New method of measuring reverberation time", J. Acoust. Soc. Am. 37, 1965.
.. [2] ISO 3382-2, "Measurement of room acoustic parameters: reverberation time in ordinary rooms" (value from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Decay", "decay_curve_db", "direct_onset", "measure_decay"]

DIRECT_WINDOW_S = 0.0025
"""Half-width of the stretch about the direct sound that counts as direct (common practice, no source)."""
FIT_FROM_DB, FIT_TO_DB = -5.0, -25.0


@dataclass(frozen=True, slots=True)
class Decay:
    """What one response says about its room.

    ``t20_s`` and ``drr_db`` are None where the response does not define them; ``undefined`` says why, by name.
    ``onset_s`` is the direct sound's time from the response's first sample. ``behind_direct`` tells that the decay was
    read from behind the direct sound.
    """

    t20_s: float | None
    drr_db: float | None
    onset_s: float
    behind_direct: bool
    undefined: dict[str, str]


def direct_onset(response: NDArray[np.floating]) -> int:
    """Sample index of the direct sound of ``response`` (samples,): the first peak within 6 dB of the largest.

    The largest peak alone may be a reflection from a nearby wall.
    """
    size = np.abs(response)
    first = int(np.argmax(size >= 0.5 * size.max()))
    while first + 1 < size.size and size[first + 1] > size[first]:
        first += 1
    return first


def decay_curve_db(response: NDArray[np.floating]) -> NDArray[np.float64]:
    """Schroeder's curve of ``response`` (samples,) in dB relative to its first value; -inf where nothing follows."""
    energy = np.cumsum(np.square(response[::-1], dtype=np.float64))[::-1]
    if energy.size == 0 or energy[0] <= 0.0:
        return np.full(energy.shape, -np.inf)
    with np.errstate(divide="ignore"):
        return np.asarray(10.0 * np.log10(energy / energy[0]))


def measure_decay(
    response: NDArray[np.floating],
    sample_rate: float,
    *,
    onset: int | None = None,
    direct_window_s: float = DIRECT_WINDOW_S,
) -> Decay:
    """T20 and direct-to-reverberant ratio of one impulse response.

    Parameters
    ----------
    response : (samples,)
        Impulse response; noise at its end must lie below the -25 dB point by 10 dB or more, else T20 is undefined.
    sample_rate : float
        In hertz.
    onset : int, optional
        Sample of the direct sound where it is known; found by `direct_onset` otherwise.
    direct_window_s : float
        What counts as direct: this long to either side of the onset.
    """
    h = np.asarray(response, dtype=np.float64)
    if not h.any():
        reason = "the response is silent"
        return Decay(None, None, 0.0, False, {"t20_s": reason, "drr_db": reason})
    start = direct_onset(h) if onset is None else onset
    half = max(1, round(direct_window_s * sample_rate))
    first, behind = max(0, start - half), start + half + 1
    direct, reverberant = float(np.sum(h[first:behind] ** 2)), float(np.sum(h[behind:] ** 2))
    undefined: dict[str, str] = {}
    if reverberant <= 1e-12 * direct:
        reason = "nothing follows the direct sound"
        return Decay(None, None, start / sample_rate, False, {"t20_s": reason, "drr_db": reason})
    drr_db = 10.0 * float(np.log10(direct / reverberant))

    skip = 10.0 * np.log10(1.0 + direct / reverberant) > -FIT_FROM_DB
    curve = decay_curve_db(h[behind:] if skip else h[first:])
    t20_s, reason = _fit_t20(curve, sample_rate)
    if t20_s is None:
        undefined["t20_s"] = reason
    return Decay(t20_s, drr_db, start / sample_rate, bool(skip), undefined)


def _fit_t20(curve_db: NDArray[np.float64], sample_rate: float) -> tuple[float | None, str]:
    """Reverberation time from the line through ``curve_db`` between -5 and -25 dB, or the reason there is none."""
    inside = np.flatnonzero((curve_db <= FIT_FROM_DB) & (curve_db >= FIT_TO_DB))
    if inside.size < 2 or curve_db[-1] > FIT_TO_DB:
        return None, "the decay does not reach from -5 to -25 dB"
    slope = float(np.polyfit(inside / sample_rate, curve_db[inside], 1)[0])
    if slope >= 0.0:
        return None, "the level does not decay"
    # A steady noise floor bends the backward integral: the last tenth then still holds energy.
    tail_db = curve_db[int(0.9 * (curve_db.size - 1))]
    if tail_db > FIT_TO_DB - 10.0:
        return None, "the noise floor lies within 10 dB of the -25 dB point"
    return -60.0 / slope, ""
