"""Where to look: the part of the sphere of directions that an array can tell apart.

A plane wave from the unit vector u reaches microphone m early by u.p_m / c, so an array only ever sees the projection
of u onto the span of its microphones (differences from their mean). With an orthonormal basis E (3, rank) of that span,

    x = E^T u,    |x| <= 1,

is all there is to find: a point on the sphere for rank 3, in the unit disc for a flat array (rank 2, what lies above
the plane looks like what lies below), on an interval for a straight line (rank 1, a cone). Distances in x are what
the array resolves, so grids are even, Kalman filters linear and clusters round there. An array that turns sees more:
the span is then that of its positions in all orientations.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.errors import InputError
from unmix.physics import direction_angles, unit_vector

__all__ = ["LocalFrame", "Region", "SearchSpace", "search_space"]

Floats = NDArray[np.float64]
Region = Literal["sphere", "ring"]

# Tolerances in position, a tenth of a millimetre times a few: closer than anyone measures a microphone's place, and
# less than what shifts a delay by a hundredth of a sample at 16 kHz.
_FLAT_M = 3e-4
_UP = np.array([0.0, 0.0, 1.0])
_FRONT = np.array([1.0, 0.0, 0.0])


@dataclass(frozen=True)
class LocalFrame:
    """Coordinates around a projection: ``centre`` (rank,), ``axes`` (rank, d), and points of a difference stencil.

    The stencil (points, rank) is the centre, then +-step along each axis, then +step along both when there are two.
    """

    centre: Floats
    axes: Floats
    on_ball: bool
    stencil: Floats

    def move(self, step: Floats) -> Floats:
        """The projection (rank,) that lies ``step`` (d,) away, held on the unit ball where directions fill it."""
        x = self.centre + self.axes @ step
        return np.asarray(x * np.linalg.norm(self.centre) / np.linalg.norm(x)) if self.on_ball else x


@dataclass(frozen=True)
class SearchSpace:
    """The directions an array can tell apart.

    rank      1 straight line, 2 flat, 3 neither; 0 a single microphone is refused
    basis     (3, rank), orthonormal, spans the microphones
    normal    (3,), the side taken when two mirror directions look alike; None for rank 3
    region    "sphere", or "ring": the horizontal circle only
    grid      (points, rank) projections x; directions (points, 3) the unit vectors that stand for them
    spacing   distance between neighbours of the grid
    """

    rank: int
    basis: Floats
    normal: Floats | None
    region: Region
    grid: Floats
    directions: Floats
    spacing: float

    @cached_property
    def apart(self) -> Floats:
        """Distances between the grid's projections: (points, points)."""
        return np.asarray(np.linalg.norm(self.grid[:, None] - self.grid[None], axis=-1))

    def project(self, directions: ArrayLike) -> Floats:
        """Projections x (..., rank) of unit vectors (..., 3)."""
        return np.asarray(np.asarray(directions, np.float64) @ self.basis)

    def lift(self, x: ArrayLike) -> Floats:
        """The unit vectors (..., 3) that stand for projections x (..., rank); outside the ball pulled in."""
        x = np.asarray(x, dtype=np.float64)
        length = np.linalg.norm(x, axis=-1, keepdims=True)
        if self.rank == 3:
            return np.asarray((x / np.maximum(length, 1e-12)) @ self.basis.T)
        inside = x / np.maximum(length, 1.0)
        rest = np.sqrt(np.maximum(0.0, 1.0 - np.sum(inside**2, axis=-1, keepdims=True)))
        u = inside @ self.basis.T + rest * (np.zeros(3) if self.normal is None else self.normal)
        return np.asarray(u / np.linalg.norm(u, axis=-1, keepdims=True))

    def local(self, x: Floats, step: float, *, unit: bool = False) -> LocalFrame:
        """The stencil of differences around the projection x (rank,), along the directions in which it may move.

        ``unit`` holds x at unit length, in the array's plane, where only its direction can be known.
        """
        if self.region == "ring":
            azimuth, _ = direction_angles(self.lift(x))
            x = self.project(unit_vector(azimuth))
            axes = (unit_vector(azimuth + 0.5 * np.pi) @ self.basis)[:, None]
        elif self.rank == 3 or unit:
            x = x / np.linalg.norm(x)
            axes = np.linalg.svd(x[None])[2][1:].T
        else:
            axes = np.eye(self.rank)
        d = axes.shape[1]
        moves = [np.zeros(d)]
        for a in range(d):
            moves += [step * np.eye(d)[a], -step * np.eye(d)[a]]
        if d == 2:
            moves.append(np.full(2, step))
        frame = LocalFrame(x, axes, self.rank == 3 or self.region == "ring" or unit, np.empty(0))
        return replace(frame, stencil=np.stack([frame.move(m) for m in moves]))

    def mirrors(self, direction: ArrayLike) -> Floats:
        """Other directions (n, 3) with the same delays: none for rank 3, one for a flat array.

        For a straight line the whole cone looks alike; what is given is the reflection on the other side of the line.
        """
        u = np.asarray(direction, dtype=np.float64)
        if self.normal is None:
            return np.empty((0, 3))
        other = u - 2.0 * (u @ self.normal) * self.normal
        # Half a degree apart is no second candidate: the direction lies in the plane itself.
        return other[None] if np.linalg.norm(other - u) > np.radians(0.5) else np.empty((0, 3))

    @property
    def ambiguity(self) -> str | None:
        """What cannot be told apart, in words; None when nothing."""
        if self.rank == 3:
            return None
        if self.rank == 2:
            if self.normal is not None and abs(self.normal @ _UP) > 0.99:
                return (
                    "flat array: above and below look alike, so the sign of the elevation is unknown; "
                    "the upper side is taken, and elevations near the horizon are uncertain"
                )
            return (
                "flat array: both sides of its plane look alike; one side is taken, the other is listed as a candidate"
            )
        return (
            "straight line of microphones: only the angle to the line is known, front and back and the whole cone "
            "around it look alike; one horizontal direction is taken, its mirror image is listed as a candidate"
        )

    def bearings(self, x: ArrayLike) -> tuple[Floats, Floats]:
        """Azimuth and elevation (radians) of projections x (..., rank)."""
        return direction_angles(self.lift(x))


def search_space(
    positions_m: Floats,
    rotations: Floats | None = None,
    *,
    region: Region = "sphere",
    spacing: float = 0.11,
    where: str = "array",
) -> SearchSpace:
    """The search space of microphones at ``positions_m`` (channels, 3), with rotations (n, 3, 3) if the array turns.

    spacing  distance between grid points in x; 0.11 is 6 degrees broadside

    Raises InputError for a single microphone.
    """
    if len(positions_m) < 2:
        raise InputError(f"{where}: one microphone hears no direction; give at least two, better three not in a line")
    centred = positions_m - positions_m.mean(axis=0)
    if rotations is not None:
        centred = np.concatenate(np.einsum("nij,mj->nmi", rotations, centred))
        centred = centred * np.sqrt(len(positions_m) / len(centred))
    _, size, axes = np.linalg.svd(centred, full_matrices=True)
    extent = np.zeros(3)
    extent[: len(size)] = size / np.sqrt(len(positions_m))
    rank = max(1, int(np.count_nonzero(extent > _FLAT_M)))
    basis = _canonical(axes[:rank])
    normal = _side(basis)
    if region == "ring":
        azimuth = np.linspace(-np.pi, np.pi, max(8, round(2.0 * np.pi / spacing)), endpoint=False)
        directions = unit_vector(azimuth)
        if normal is not None:
            directions = directions[directions @ normal > -1e-9]
    else:
        directions = _directions(basis, normal, spacing)
    return SearchSpace(rank, basis, normal, region, directions @ basis, directions, spacing)


def _canonical(axes: Floats) -> Floats:
    """Basis (3, rank) of the same span that does not depend on the signs and order an SVD happens to give."""
    if len(axes) == 3:
        return np.eye(3)
    projector = axes.T @ axes
    basis: list[Floats] = []
    for axis in np.eye(3)[np.argsort(-np.diag(projector), kind="stable")]:
        v = projector @ axis - sum((b * (b @ axis) for b in basis), np.zeros(3))
        if len(basis) < len(axes) and np.linalg.norm(v) > 1e-6:
            basis.append(v / np.linalg.norm(v))
    return np.stack(basis, axis=1)


def _side(basis: Floats) -> Floats | None:
    """Unit vector across the span: up for a flat horizontal array; for a line, the horizontal one to the front."""
    rank = basis.shape[1]
    if rank == 3:
        return None
    wishes = (_UP, _FRONT, np.array([0.0, 1.0, 0.0]))
    if rank == 1:
        across = np.cross(_UP, basis[:, 0])
        if np.linalg.norm(across) > 1e-3:
            # The horizontal direction across the line; of its two, the one more to the front, else to the left.
            across = across / np.linalg.norm(across)
            sign = across[0] if abs(across[0]) > 1e-9 else across[1]
            return np.asarray(across * np.sign(sign))
    for wish in wishes:
        rest = wish - basis @ (basis.T @ wish)
        if np.linalg.norm(rest) > 0.1:
            return np.asarray(rest / np.linalg.norm(rest))
    raise InputError("array: no side can be named; check `positions_m`")


def _directions(basis: Floats, normal: Floats | None, spacing: float) -> Floats:
    """Unit vectors evenly spread in the projection."""
    rank = basis.shape[1]
    if rank == 3 or normal is None:
        count = round(4.0 * np.pi / (0.866 * spacing**2))
        z = 1.0 - (2.0 * np.arange(count) + 1.0) / count
        azimuth = np.pi * (1.0 + 5.0**0.5) * np.arange(count)
        r = np.sqrt(1.0 - z**2)
        return np.stack([r * np.cos(azimuth), r * np.sin(azimuth), z], axis=-1)
    if rank == 1:
        x = np.linspace(-1.0, 1.0, max(3, round(2.0 / spacing) + 1))[:, None]
    else:
        rings = [np.zeros((1, 2))]
        steps = max(2, round(1.0 / spacing))
        for radius in np.arange(1, steps + 1) / steps:
            points = max(6, round(2.0 * np.pi * radius / spacing))
            angle = np.linspace(0.0, 2.0 * np.pi, points, endpoint=False)
            rings.append(radius * np.stack([np.cos(angle), np.sin(angle)], axis=-1))
        x = np.concatenate(rings)
    rest = np.sqrt(np.maximum(0.0, 1.0 - np.sum(x**2, axis=-1, keepdims=True)))
    return np.asarray(x @ basis.T + rest * normal)
