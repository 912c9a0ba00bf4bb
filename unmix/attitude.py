"""Attitude of an array from the gyroscope and accelerometer of an inertial sensor fixed to it.

The gradient-descent filter of Madgwick for inertial measurement units [1]_: the quaternion q (array to world) follows
the turning rate and is pulled, by ``GAIN`` rad/s, towards where the measured acceleration points straight up,

    dq/dt = 1/2 q * (0, omega) - GAIN grad f / |grad f|,

f the difference of the measured direction of gravity and the one q says. While the array swings, acceleration is not
gravity; the pull is left out where its magnitude is more than a tenth off.

Gravity says nothing about heading: it starts at zero and drifts with what is left of the gyroscope's bias, which is
measured where the sensor rests (turning less than `REST_RAD_S`) and taken off. The drift to be expected is what the
rest stretches disagree by.

.. [1] S. O. H. Madgwick, A. J. L. Harrison, R. Vaidyanathan, "Estimation of IMU and MARG orientation using a gradient
   descent algorithm", IEEE Int. Conf. Rehabilitation Robotics, 2011.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError

__all__ = ["Attitude", "integrate_attitude"]

Floats = NDArray[np.float64]

GAIN = 0.05
REST_RAD_S = 0.06
_REST_S = 0.5
_MARGIN_S = 0.2
_STRAY = 3.0
_GRAVITY = (8.5, 11.2)


@dataclass(frozen=True)
class Attitude:
    """Result of the integration.

    quaternions           (rows, 4) unit quaternions w, x, y, z, array to world
    bias_rad_s            (3,) taken off the gyroscope's readings
    heading_drift_rad     standard deviation of the heading to be expected at the end; None without any rest
    rest_share            share of the time the sensor rested
    """

    quaternions: Floats
    bias_rad_s: Floats
    heading_drift_rad: float | None
    rest_share: float

    @property
    def note(self) -> str:
        """What the user should know about the heading, in one line."""
        if self.heading_drift_rad is None:
            return (
                "orientation integrated from a gyroscope that never rests: its bias is unknown and the heading drifts; "
                "let the array lie still for a second at the beginning"
            )
        return (
            f"orientation integrated from a gyroscope: heading is relative to the start and drifts by about "
            f"{np.degrees(self.heading_drift_rad):.1f} deg until the end"
        )


def integrate_attitude(time_s: Floats, turning_rad_s: Floats, acceleration_m_s2: Floats, *, where: str) -> Attitude:
    """Quaternions from rates (rows, 3) in rad/s and accelerations (rows, 3) in m/s^2, in array coordinates.

    Raises InputError when the accelerometer does not show gravity at the start, naming ``where``.
    """
    bias, deviation, rest = _bias(time_s, turning_rad_s, acceleration_m_s2)
    magnitude = np.linalg.norm(acceleration_m_s2, axis=1)
    start = acceleration_m_s2[: max(1, int(np.searchsorted(time_s, time_s[0] + 0.2)))].mean(axis=0)
    if not _GRAVITY[0] < np.linalg.norm(start) < _GRAVITY[1]:
        raise InputError(
            f"{where}: acceleration is {np.linalg.norm(start):.2f} m/s^2 at the start, not gravity's 9.81; "
            "give m/s^2, and start at rest"
        )
    q = _upright(start)
    out = np.empty((len(time_s), 4))
    out[0] = q
    for i in range(1, len(time_s)):
        dt = float(time_s[i] - time_s[i - 1])
        omega = 0.5 * (turning_rad_s[i] + turning_rad_s[i - 1]) - bias
        q = _turned(q, omega * dt)
        if _GRAVITY[0] < magnitude[i] < _GRAVITY[1]:
            q = _pulled(q, acceleration_m_s2[i] / magnitude[i], GAIN * dt)
        out[i] = q
    duration = float(time_s[-1] - time_s[0])
    drift = None if deviation is None else float(np.max(deviation)) * duration
    return Attitude(out, bias, drift, float(rest.mean()))


def _bias(time_s: Floats, omega: Floats, acceleration: Floats) -> tuple[Floats, Floats | None, NDArray[np.bool_]]:
    """Mean rate at rest, its standard deviation between stretches of rest (None without rest), and where rest is.

    A motion that begins slowly looks like rest: the ends of each rest are left out, and so are stretches further from
    the median than `_STRAY` times the usual distance.
    """
    calm = (np.linalg.norm(omega, axis=1) < REST_RAD_S) & (
        np.abs(np.linalg.norm(acceleration, axis=1) - 9.81) < 0.05 * 9.81
    )
    edges = np.flatnonzero(np.diff(np.r_[0, calm.astype(int), 0]))
    means, lengths = [], []
    rest = np.zeros(len(calm), dtype=bool)
    for begin, end in zip(edges[::2], edges[1::2], strict=True):
        first, stop = _inside(time_s, int(begin), int(end))
        length = float(time_s[stop - 1] - time_s[first]) if stop > first else 0.0
        if length >= _REST_S:
            rest[first:stop] = True
            for part in np.array_split(np.arange(first, stop), max(1, round(length / _REST_S))):
                means.append(omega[part].mean(axis=0))
                lengths.append(len(part))
    if not means:
        return np.zeros(3), None, rest
    table, weight = np.array(means), np.array(lengths, dtype=np.float64)
    far = np.linalg.norm(table - np.median(table, axis=0), axis=1)
    kept = far <= _STRAY * np.median(far) + 1e-9
    table, weight = table[kept], weight[kept]
    bias = weight @ table / weight.sum()
    if len(table) < 2:
        return bias, np.full(3, REST_RAD_S / 10.0), rest
    return bias, table.std(axis=0, ddof=1) / np.sqrt(len(table)), rest


def _inside(time_s: Floats, begin: int, end: int) -> tuple[int, int]:
    """A calm stretch without its ends, but for those of the recording."""
    first = begin if begin == 0 else int(np.searchsorted(time_s, time_s[begin] + _MARGIN_S))
    stop = end if end == len(time_s) else int(np.searchsorted(time_s, time_s[end - 1] - _MARGIN_S))
    return first, stop


def _upright(acceleration: Floats) -> Floats:
    """The quaternion of zero heading under which the measured acceleration points up."""
    up = acceleration / np.linalg.norm(acceleration)
    q = np.array([1.0 + up[2], up[1], -up[0], 0.0])
    if np.linalg.norm(q) < 1e-6:
        return np.array([0.0, 1.0, 0.0, 0.0])
    return np.asarray(q / np.linalg.norm(q))


def _turned(q: Floats, angle: Floats) -> Floats:
    """q after a turn by the rotation vector ``angle`` in array coordinates."""
    size = float(np.linalg.norm(angle))
    half = 0.5 * size
    v = angle * (0.5 * np.sinc(half / np.pi))
    w, x, y, z = q
    c = np.cos(half)
    a, b, d = v
    out = np.array(
        [
            w * c - x * a - y * b - z * d,
            w * a + x * c + y * d - z * b,
            w * b - x * d + y * c + z * a,
            w * d + x * b - y * a + z * c,
        ]
    )
    return np.asarray(out / np.linalg.norm(out))


def _pulled(q: Floats, up: Floats, step: float) -> Floats:
    """One step of length ``step`` down the gradient of |R(q)^T e_z - up|^2 / 2 (equations 25 and 26 of [1]_)."""
    w, x, y, z = q
    f = np.array([2.0 * (x * z - w * y) - up[0], 2.0 * (w * x + y * z) - up[1], 1.0 - 2.0 * (x * x + y * y) - up[2]])
    jacobian = np.array(
        [
            [-2.0 * y, 2.0 * z, -2.0 * w, 2.0 * x],
            [2.0 * x, 2.0 * w, 2.0 * z, 2.0 * y],
            [0.0, -4.0 * x, -4.0 * y, 0.0],
        ]
    )
    gradient = jacobian.T @ f
    size = float(np.linalg.norm(gradient))
    if size < 1e-12:
        return q
    # Closer than a full step to the goal, a full step would jitter about it.
    moved = q - gradient / size * min(0.5 * step, 0.25 * size)
    return np.asarray(moved / np.linalg.norm(moved))
