"""The last step where there is no room: the least-squares fit of all talkers at once.

Without reverberation the fit of `fit` is several times as exact as the mixture and comes close to the Cramer-Rao bound.
In a room it is wrong, as what the room adds is no noise; so it is taken only where the mixture's bins show next to
nothing outside the talkers' directions, and where both agree.

At such exactness it matters how waves bend. Without a distance they are taken as plane, and what a distance of `NEAR_M`
would move the bearings by is added to their deviations.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.find import FoundTalker
from unmix.bearings.fit import FittedBearings, FrameCovariance, fit_bearings
from unmix.bearings.space import SearchSpace

__all__ = ["polished"]

Floats = NDArray[np.float64]

CLEAN_ENOUGH = 0.18
NEAR_M = 1.0
"""Nearer than this few talkers sit."""
_AGREEMENT = 0.05


def polished(
    found: list[FoundTalker],
    outside: Floats,
    block: FrameCovariance,
    array: Array,
    space: SearchSpace,
    *,
    temperature_c: float = 20.0,
    distance_m: float | None = None,
    always: bool = False,
) -> tuple[list[FoundTalker], FittedBearings | None]:
    """Talkers at rest moved to the fit, and the fit; as they were, and None, where it is not to be trusted.

    outside  (talkers,) mean of 1 - q over each talker's bins
    always   take it whatever the room does
    """
    trusted = always or bool(np.all(outside < CLEAN_ENOUGH))
    if not found or any(t.moving for t in found) or not trusted or len(found) >= array.channels or not block.frames:
        return found, None
    start = np.array([t.x[0] for t in found])
    fit = fit_bearings(block, array, start, space, temperature_c=temperature_c, distance_m=distance_m)
    if not always and (not fit.converged or np.linalg.norm(fit.x - start, axis=1).max() > _AGREEMENT):
        return found, None
    bent = np.zeros_like(fit.x)
    if distance_m is None:
        bent = fit_bearings(block, array, fit.x, space, temperature_c=temperature_c, distance_m=NEAR_M).x - fit.x
    return [
        replace(t, x=fit.x[[k]], covariance=fit.of_talker(k) + np.outer(bent[k], bent[k])) for k, t in enumerate(found)
    ], fit
