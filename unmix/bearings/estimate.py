"""From refined projections to bearings with standard deviations.

Sound that does not come from the talker pulls the projection of a flat array's estimate towards its centre: the
estimate is close to a mean over all that arrives, and what the room sends has a smaller projection on average. With m
the mean of 1 - q over the talker's bins (what is left outside the direction, of whitened sound) times M/(M - 1), so
that it is one for noise whatever the number M of microphones, rooms simulated with talkers from 0 to 25 degrees high,
T20 from 0.2 to 0.6 s, circles of 3 to 6 microphones, gave

    |x| estimated / |x| true = 1 - (PULL + PULL_FEW / M) max(0, m - CLEAN),

with a scatter of a third of the correction. It is undone here. Of the azimuth, rooms leave an error that no
curvature shows; it, too, grew with m - CLEAN and is added to the standard deviation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.bearings.space import SearchSpace
from unmix.physics import direction_angles, wrapped

__all__ = ["BearingEstimate", "bearing_estimate"]

Floats = NDArray[np.float64]

PULL = 0.13
PULL_FEW = 0.36
CLEAN = 0.13
_PULL_SCATTER = 0.07
_ROOM_ERROR = 0.06
_HORIZON_STD = 1.5
_DRAWS = 400


@dataclass(frozen=True)
class BearingEstimate:
    """A bearing in radians with standard deviations, and other directions the array cannot tell from it.

    direction   (3,) unit vector
    candidates  (azimuth, elevation) of the mirror directions
    """

    azimuth: float
    elevation: float
    azimuth_std: float
    elevation_std: float
    direction: Floats
    candidates: tuple[tuple[float, float], ...]


def bearing_estimate(
    x: Floats, covariance: Floats, outside: float, space: SearchSpace, channels: int
) -> BearingEstimate:
    """Bearing of a projection ``x`` (rank,) with covariance (rank, rank); ``outside`` is the mean of 1 - q.

    A flat array's elevation is taken as horizontal unless |x| says otherwise by `_HORIZON_STD` standard deviations.
    """
    excess = max(0.0, outside * channels / (channels - 1) - CLEAN)
    spread = covariance + (_ROOM_ERROR * excess) ** 2 * np.eye(len(x))
    if space.rank < 3:
        length = max(float(np.linalg.norm(x)), 1e-9)
        along = x / length
        x = x / (1.0 - (PULL + PULL_FEW / channels) * excess)
        spread = spread + (_PULL_SCATTER * excess * min(length, 1.0)) ** 2 * np.outer(along, along)
        radial = float(np.sqrt(max(0.0, float(along @ spread @ along))))
        if np.linalg.norm(x) > 1.0 - _HORIZON_STD * radial or space.region == "ring":
            x = along
    u = space.lift(x)
    azimuth, elevation = direction_angles(u)
    azimuth_std, elevation_std = _deviations(x, spread, u, space)
    mirrors = direction_angles(space.mirrors(u))
    candidates = tuple((float(a), float(e)) for a, e in zip(*mirrors, strict=True))
    return BearingEstimate(float(azimuth), float(elevation), azimuth_std, elevation_std, u, candidates)


def _deviations(x: Floats, spread: Floats, u: Floats, space: SearchSpace) -> tuple[float, float]:
    """Root mean square deviations of azimuth and elevation over normal draws: the horizon of a flat array bends too
    sharply for a linear rule."""
    values, vectors = np.linalg.eigh(spread)
    normal = np.random.default_rng(0).standard_normal((_DRAWS, len(x)))
    normal /= np.sqrt(np.mean(normal**2, axis=0))
    draws = x + (normal * np.sqrt(np.maximum(values, 0.0))) @ vectors.T
    azimuth, elevation = direction_angles(space.lift(draws))
    azimuth0, elevation0 = direction_angles(u)
    turned = wrapped(azimuth - azimuth0)
    azimuth_std, elevation_std = (float(np.sqrt(np.mean(e**2))) for e in (turned, elevation - elevation0))
    if space.rank == 1 and space.region != "ring":
        # Anywhere on the cone: root mean square height of a circle of radius sqrt(1 - x^2).
        elevation_std = float(np.sqrt(max(0.0, 1.0 - float(x @ x)) / 2.0))
    return azimuth_std, elevation_std
