"""A bearing from single snapshots, which may be taken slowly and far apart in time.

A snapshot is one sample of every microphone at the same instant. Expanded about that instant ("own" anchor, `free`
constraint), microphone m's sample is

    y_m = sum_{l=0..L} (-tau_m/T)^l / l! z_l + v_m,

with the jet z of the talker at the reference unknown, snapshot by snapshot. The delays that leave least,

    C(x) = tr( (I - V V^+) R ) / (M - rank V),      R = sum over snapshots of y y^T,

give the direction: no spectrum is needed, no two snapshots need to follow each other, and a recording that is on one
sample in a thousand serves as well as a whole one. V has a row per microphone; its rank is no more than the number
of distinct delays, which differs with direction, hence the division by the degrees of freedom. L + 1 must be below
that number, or nothing is left to judge by.

What V spans does not change when all delays are scaled or shifted: with the jets free, stretching time and delays
alike, or turning both round, is no other model. So snapshots give the axis that sound came along: for a flat array
its azimuth, whatever the elevation, up to half a turn, for a solid one a direction or its opposite; a straight line of
microphones learns nothing. The opposite direction is the second candidate always.

The expansion is good to (omega tau)^(L+1)/(L+1)!: for a circle of 4 cm radius and L = 4 to -55 dB at 1 kHz.
With several talkers the zeroth columns coincide, so one snapshot cannot tell them apart; snapshots of one talker at a
time can. Steps and deviations follow the separable least squares of `fit`, all columns sharing the direction.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.bearings.fit import NormalEquations, estimate_covariance, normal_equations
from unmix.bearings.space import LocalFrame, SearchSpace
from unmix.errors import InputError, UnsolvableError
from unmix.model.delays import wave_delays
from unmix.physics import speed_of_sound

__all__ = ["SnapshotBearing", "SnapshotModel", "snapshot_bearing", "snapshot_model"]

Floats = NDArray[np.float64]

_COINCIDENT = 0.02
"""Delays nearer than this, in samples, count as one."""


@dataclass(frozen=True)
class SnapshotModel:
    """Projectors onto what no talker from a grid direction can produce.

    order       L
    grid        (points, rank) unit-length projections, one of each pair of opposites
    projectors  (points, channels, channels); freedom (points,) their ranks
    """

    array: Array
    space: SearchSpace
    order: int
    sample_rate: int
    grid: Floats
    speed_m_s: float
    distance_m: float | None
    projectors: Floats
    freedom: Floats

    def scores(self, covariance: Floats) -> Floats:
        """C at all points of the grid for R (..., channels, channels): (..., points)."""
        flat = covariance.reshape(*covariance.shape[:-2], -1)
        points = self.projectors.reshape(len(self.projectors), -1)
        return np.asarray(flat @ points.T / self.freedom)


@dataclass(frozen=True)
class SnapshotBearing:
    """Projection x (rank,) of the direction, of unit length, and its covariance (rank, rank); -x is as likely.

    noise      power per microphone that is left outside the model; unexplained, its share of all
    score      (points,) C at the grid's directions
    """

    x: Floats
    covariance: Floats
    noise: float
    unexplained: float
    score: Floats


def snapshot_model(
    array: Array,
    space: SearchSpace,
    sample_rate: int,
    *,
    order: int | None = None,
    temperature_c: float = 20.0,
    distance_m: float | None = None,
) -> SnapshotModel:
    """Prepare the search. ``order`` None takes the largest that all directions but coincident ones allow, at most 4.

    Raises UnsolvableError when no direction leaves a degree of freedom.
    """
    speed = speed_of_sound(temperature_c)
    if space.rank == 1:
        raise UnsolvableError(
            "snapshots of a straight line of microphones say nothing about the direction: any scale of the delays "
            "explains them alike; take another method"
        )
    grid = _axes_grid(space)
    tau = _delays(array, grid, space, speed, distance_m) * sample_rate
    distinct = np.array([1 + np.count_nonzero(np.diff(np.sort(row)) > _COINCIDENT) for row in tau])
    # Half of the directions allow it; the others have fewer columns and more degrees of freedom.
    allowed = int(np.median(distinct)) - 2
    if order is None:
        order = min(4, allowed)
    if order < 1 or order > allowed:
        raise UnsolvableError(
            f"snapshots of {array.channels} microphones allow expansion orders 1 to {allowed}, not {order}: order + 1 "
            "must be below the number of distinct delays; take more microphones or another method"
        )
    projectors, freedom = [], []
    for row, count in zip(tau, distinct, strict=True):
        rank = min(order + 1, int(count))
        u = np.linalg.svd(_vandermonde(row, order), full_matrices=False)[0][:, :rank]
        projectors.append(np.eye(len(row)) - u @ u.T)
        freedom.append(len(row) - rank)
    return SnapshotModel(
        array, space, order, sample_rate, grid, speed, distance_m, np.array(projectors), np.array(freedom, np.float64)
    )


def snapshot_bearing(model: SnapshotModel, covariance: Floats, snapshots: int, *, rounds: int = 20) -> SnapshotBearing:
    """The direction that explains snapshots best: from the best grid point on by Gauss-Newton.

    covariance  (channels, channels), sum of y y^T over ``snapshots`` of them, freed of the channels' gains

    Raises InputError for fewer snapshots than unknowns of one.
    """
    if snapshots < 1:
        raise InputError("no snapshot was given; at least one is needed")
    score = model.scores(covariance)
    x = model.grid[int(np.argmin(score))]
    frame, now = _at(model, covariance, x)
    d = frame.axes.shape[1]
    ties = np.tile(np.eye(d), model.order + 1)
    for _ in range(rounds):
        curvature = ties @ now.curvature @ ties.T
        step = np.linalg.solve(curvature + 1e-9 * np.trace(curvature) * np.eye(d), -ties @ now.gradient)
        step *= min(1.0, 0.1 / max(float(np.linalg.norm(step)), 1e-12))
        for _ in range(8):
            moved, new = _at(model, covariance, frame.move(step))
            if new.cost <= now.cost:
                break
            step = 0.5 * step
        if new.cost > now.cost:
            break
        frame, now = moved, new
        if float(np.abs(step).max()) < np.radians(1e-3):
            break
    freedom = model.array.channels - model.order - 1
    noise = now.cost / (snapshots * freedom)
    # Real samples carry half of what complex ones do.
    local = 2.0 * estimate_covariance(now, noise, snapshots, ties)
    total = float(np.trace(covariance))
    return SnapshotBearing(frame.centre, frame.axes @ local @ frame.axes.T, noise, now.cost / max(total, 1e-300), score)


def _axes_grid(space: SearchSpace) -> Floats:
    """Unit projections, one of each pair of opposites."""
    if space.rank == 2:
        angle = np.arange(0.0, np.pi, 0.5 * space.spacing)
        return np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    front = space.directions[space.directions @ np.array([1.0, 1e-3, 1e-6]) > 0.0]
    return np.asarray(space.project(front))


def _at(model: SnapshotModel, covariance: Floats, x: Floats) -> tuple[LocalFrame, NormalEquations]:
    frame = model.space.local(x, 0.01, unit=True)
    tau = _delays(model.array, frame.centre[None], model.space, model.speed_m_s, model.distance_m)[0]
    tau = tau * model.sample_rate
    moved = -(model.array.positions_m @ model.space.basis @ frame.axes) * (model.sample_rate / model.speed_m_s)
    v = _vandermonde(tau, model.order)
    # d/dtau of (-tau)^l / l! is minus the column before.
    slope = np.concatenate([np.zeros((len(tau), 1)), -v[:, :-1]], axis=1)
    dv = slope[:, :, None] * moved[:, None, :]
    return frame, normal_equations(covariance[None].astype(complex), v[None].astype(complex), dv[None].astype(complex))


def _delays(array: Array, x: Floats, space: SearchSpace, speed: float, distance_m: float | None) -> Floats:
    """Delays in seconds relative to the reference microphone, corrections included: (points, channels)."""
    if distance_m is None:
        tau = wave_delays(array.positions_m, x @ space.basis.T, None, speed)[0]
    else:
        u = space.lift(x)
        tau = wave_delays(array.positions_m, u, np.full(len(u), distance_m), speed)[0]
    tau = tau + array.delay_s
    return np.asarray(tau - tau[:, [array.reference_channel]])


def _vandermonde(tau: Floats, order: int) -> Floats:
    """Columns (-tau)^l / l!, tau in samples: (channels, order + 1)."""
    powers = np.arange(order + 1)
    factorials = np.array([math.factorial(l_) for l_ in powers], dtype=np.float64)
    return np.asarray((-tau[:, None]) ** powers / factorials)
