"""From takes at known bearings to each channel's gain, delay, polarity and, when asked, position.

Take j from direction u_j gives channel m, against the reference, the delay

    tau_mj = delta_m + geometry(p_m + e_m, u_j) + error,        plane waves: -(p_m + e_m) . u_j / c

Unknown are delta_m and, when asked, the displacement e_m against the reference microphone. From one bearing delta and
-e . u / c are one and the same; from several they are told apart when the rows [1, u_j] are independent: three bearings
that do not lie on one line in the plane for x and y, a fourth well above or below it for z. Takes whose scatter exceeds
their deviations widen the result accordingly.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.calibration.transfer import Transfer
from unmix.errors import InputError
from unmix.model.delays import wave_delays
from unmix.physics import speed_of_sound, unit_vector

__all__ = ["ArrayFit", "Seat", "fit_array"]

Floats = NDArray[np.float64]

LEAST_SPREAD = 0.1
"""Smallest singular value of the rows [1, u] per take from which a component counts as told apart."""
PLAIN_SCATTER = 2.5
"""Takes may disagree this much (mean square over variance) by chance alone."""
_STEPS = 4
_PROBE_M = 1e-4


@dataclass(frozen=True)
class Seat:
    """Where the source of a take stood; distance None for far away."""

    azimuth: float
    elevation: float = 0.0
    distance_m: float | None = None


@dataclass(frozen=True)
class ArrayFit:
    """The array with its corrections, and what was done.

    axes       which of x, y, z were fitted; empty when positions were not asked for
    scatter    mean square residual of the delays over their variances; None with nothing left over to judge by
    notes      what the user should know, one line each
    """

    array: Array
    axes: str
    scatter: float | None
    notes: tuple[str, ...]


def fit_array(
    array: Array,
    transfers: Sequence[Transfer],
    seats: Sequence[Seat],
    *,
    positions: bool = False,
    temperature_c: float = 20.0,
) -> ArrayFit:
    """Corrections of an array from takes; earlier corrections of the array play no part.

    Raises InputError when positions are asked for and the bearings cannot tell them from delays.
    """
    c = speed_of_sound(temperature_c)
    axes, notes = _axes(seats) if positions else ("", ())
    place, delay, spread, scatter = _delays(array, transfers, seats, axes, c)
    gain, gain_std, sign = _gains(place, array.reference_channel, transfers, seats, c)
    if scatter is not None and scatter > 9.0:
        notes = (
            *notes,
            f"takes disagree {np.sqrt(scatter):.1f} times more than their noise explains: "
            + (
                "reflections, or bearings that are off"
                if positions
                else "positions are off (ask for them), reflections"
            ),
        )
    delay_std, position_std = spread
    return ArrayFit(
        array=replace(
            array,
            positions_m=place,
            gain_db=20.0 / np.log(10.0) * gain,
            delay_s=delay,
            polarity=sign,
            gain_std_db=20.0 / np.log(10.0) * gain_std,
            delay_std_s=delay_std,
            position_std_m=position_std if axes else None,
        ),
        axes=axes,
        scatter=scatter,
        notes=notes,
    )


def _axes(seats: Sequence[Seat]) -> tuple[str, tuple[str, ...]]:
    """Which coordinates the bearings tell from a delay."""
    u = unit_vector([s.azimuth for s in seats], [s.elevation for s in seats])
    rows = np.concatenate([np.ones((len(u), 1)), u], axis=1) / np.sqrt(len(u))

    def least(columns: list[int]) -> float:
        return float(np.linalg.svd(rows[:, columns], compute_uv=False)[-1]) if len(u) >= len(columns) else 0.0

    if least([0, 1, 2, 3]) >= LEAST_SPREAD:
        return "xyz", ()
    if least([0, 1, 2]) >= LEAST_SPREAD:
        return "xy", ("z is kept as it was: no take stands well above or below the others",)
    where = ", ".join(f"{np.degrees(s.azimuth):.0f}/{np.degrees(s.elevation):.0f}" for s in seats)
    raise InputError(
        f"positions cannot be told from delays by the bearings given (azimuth/elevation {where} deg): record takes "
        "from at least three bearings spread around the array, and a fourth well above it for the height; or ask for "
        "delays alone"
    )


def _geometry(place: Floats, reference: int, seat: Seat, c: float) -> tuple[Floats, Floats]:
    """Delays and log gains (channels,) against the reference."""
    direction = unit_vector([seat.azimuth], [seat.elevation])
    distance = None if seat.distance_m is None else np.array([seat.distance_m])
    delay, gain = wave_delays(place, direction, distance, c)
    return delay[0] - delay[0, reference], np.log(gain[0] / gain[0, reference])


def _delays(
    array: Array, transfers: Sequence[Transfer], seats: Sequence[Seat], axes: str, c: float
) -> tuple[Floats, Floats, tuple[Floats, Floats], float | None]:
    """Positions, delays, their deviations, and the scatter; Gauss-Newton over each channel's few unknowns."""
    reference, m = array.reference_channel, array.channels
    place, delay = array.positions_m.copy(), np.zeros(m)
    free = ["xyz".index(a) for a in axes]
    measured = np.stack([t.delay_s for t in transfers])
    weight = 1.0 / np.maximum(np.stack([t.delay_std for t in transfers]), 1e-12)
    delay_std, position_std, squares = np.zeros(m), np.zeros(m), []
    for channel in range(m):
        if channel == reference:
            continue
        for _ in range(_STEPS if axes else 1):
            rows = _rows(place, reference, channel, seats, free, c)
            rest = measured[:, channel] - delay[channel]
            rest = rest - np.array([_geometry(place, reference, s, c)[0][channel] for s in seats])
            w = weight[:, channel]
            step = np.linalg.lstsq(rows * w[:, None], rest * w, rcond=None)[0]
            delay[channel] += step[0]
            place[channel, free] += step[1:]
        left = rest - rows @ step
        covariance = np.linalg.inv((rows * w[:, None] ** 2).T @ rows)
        spare = len(seats) - rows.shape[1]
        squares += [] if spare < 1 else [float(np.sum((w * left) ** 2)) / spare]
        delay_std[channel] = np.sqrt(covariance[0, 0])
        position_std[channel] = np.sqrt(np.mean(np.diag(covariance)[1:])) if free else 0.0
    scatter = float(np.mean(squares)) if squares else None
    widen = np.sqrt(scatter) if scatter is not None and scatter > PLAIN_SCATTER else 1.0
    return place, delay, (delay_std * widen, position_std * widen), scatter


def _rows(place: Floats, reference: int, channel: int, seats: Sequence[Seat], free: list[int], c: float) -> Floats:
    """Change of each take's delay with the channel's delay and free coordinates: (takes, 1 + free)."""
    rows = np.ones((len(seats), 1 + len(free)))
    for j, seat in enumerate(seats):
        for n, axis in enumerate(free):
            moved = place.copy()
            moved[channel, axis] += _PROBE_M
            change = _geometry(moved, reference, seat, c)[0] - _geometry(place, reference, seat, c)[0]
            rows[j, 1 + n] = change[channel] / _PROBE_M
    return rows


def _gains(
    place: Floats, reference: int, transfers: Sequence[Transfer], seats: Sequence[Seat], c: float
) -> tuple[Floats, Floats, NDArray[np.int64]]:
    expected = np.stack([_geometry(place, reference, s, c)[1] for s in seats])
    measured = np.stack([t.gain for t in transfers]) - expected
    weight = 1.0 / np.maximum(np.stack([t.gain_std for t in transfers]), 1e-9) ** 2
    gain = np.sum(weight * measured, axis=0) / weight.sum(axis=0)
    std = 1.0 / np.sqrt(weight.sum(axis=0))
    if len(seats) > 1:
        others = np.arange(len(gain)) != reference
        misfit = np.sum(weight * (measured - gain) ** 2, axis=0)[others] / (len(seats) - 1)
        std = std * (np.sqrt(misfit.mean()) if misfit.mean() > PLAIN_SCATTER else 1.0)
    std[reference] = 0.0
    votes = np.sum(np.stack([t.sign for t in transfers]), axis=0)
    return gain, std, np.where(votes < 0, -1, 1)
