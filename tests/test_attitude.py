"""Attitude from a gyroscope and an accelerometer: simulated readings of a known motion."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from unmix.attitude import integrate_attitude
from unmix.errors import InputError
from unmix.track import Orientation

RATE_HZ = 100.0
GRAVITY = 9.81


def readings(
    turns: Rotation, time_s: np.ndarray, *, bias: tuple[float, float, float] = (0.0, 0.0, 0.0), seed: int = 2
) -> tuple[np.ndarray, np.ndarray]:
    """Rates (rows, 3) and accelerations (rows, 3) in the sensor's coordinates, with the noise of a cheap sensor."""
    rng = np.random.default_rng(seed)
    step = np.diff(time_s)[:, None]
    between = (turns[:-1].inv() * turns[1:]).as_rotvec() / step
    # Midpoint rates put onto the readings, so that their mean over a step is the step's turn.
    rates = np.vstack([between[:1], 0.5 * (between[:-1] + between[1:]), between[-1:]])
    gravity = turns.inv().apply(np.array([0.0, 0.0, GRAVITY]))
    return (
        rates + np.array(bias) + 0.002 * rng.standard_normal(rates.shape),
        gravity + 0.05 * rng.standard_normal(gravity.shape),
    )


def motion(seconds: float = 30.0) -> tuple[np.ndarray, Rotation]:
    """At rest, a quarter turn to the left, a nod, back; tilted by 10 degrees all the time."""
    t = np.arange(0.0, seconds, 1.0 / RATE_HZ)
    heading = np.radians(90.0) * (np.clip((t - 3.0) / 2.0, 0, 1) - np.clip((t - 20.0) / 2.0, 0, 1))
    nod = np.radians(30.0) * np.sin(np.pi * np.clip((t - 8.0) / 6.0, 0, 1)) ** 2
    return t, Rotation.from_euler("ZYX", np.stack([heading, nod, np.full_like(t, np.radians(10.0))], axis=1))


def errors_deg(found: np.ndarray, turns: Rotation) -> np.ndarray:
    """Angles between found and true attitude, headings counted from the start."""
    got = Rotation.from_quat(found, scalar_first=True)
    start = turns[0] * got[0].inv()
    about_z = Rotation.from_euler("z", start.as_euler("ZYX")[0])
    return np.degrees((turns.inv() * (about_z * got)).magnitude())


def test_a_known_motion_is_followed() -> None:
    t, turns = motion()
    rates, forces = readings(turns, t, bias=(0.01, -0.02, 0.015))
    attitude = integrate_attitude(t, rates, forces, where="head.csv")
    np.testing.assert_allclose(attitude.bias_rad_s, [0.01, -0.02, 0.015], atol=1e-3)
    assert errors_deg(attitude.quaternions, turns).max() < 2.0
    assert 0.4 < attitude.rest_share < 0.9
    np.testing.assert_allclose(np.linalg.norm(attitude.quaternions, axis=1), 1.0, atol=1e-12)


def test_up_is_where_gravity_says() -> None:
    """Gravity holds roll and pitch for good: after ten minutes at rest, tilted, the tilt is still right."""
    t = np.arange(0.0, 600.0, 0.05)
    turns = Rotation.from_euler("ZYX", np.tile(np.radians([0.0, 25.0, -40.0]), (len(t), 1)))
    rates, forces = readings(turns, t, bias=(0.02, 0.01, -0.01))
    attitude = integrate_attitude(t, rates, forces, where="head.csv")
    up = Rotation.from_quat(attitude.quaternions[-1], scalar_first=True).apply(forces[-200:].mean(axis=0))
    assert np.degrees(np.arccos(up[2] / np.linalg.norm(up))) < 0.5


def test_heading_drift_is_stated_and_of_the_size_found() -> None:
    """Over many sensors the stated standard deviation covers the heading's error at the end, by a factor of at most 5:
    it takes the bias as unknown at rest too, where the noise is that by which it was measured."""
    found, stated = [], []
    t, turns = motion()
    for seed in range(12):
        rates, forces = readings(turns, t, bias=(0.01, -0.02, 0.015), seed=seed)
        attitude = integrate_attitude(t, rates, forces, where="head.csv")
        relative = turns[-1].inv() * turns[0]
        got = Rotation.from_quat(attitude.quaternions, scalar_first=True)
        found.append((got[-1] * relative * got[0].inv()).as_euler("ZYX")[0])
        stated.append(attitude.heading_drift_rad)
        assert f"{np.degrees(stated[-1]):.1f} deg until the end" in attitude.note
    ratio = np.sqrt(np.mean(np.square(stated))) / np.sqrt(np.mean(np.square(found)))
    assert 1.0 < ratio < 5.0


def test_a_sensor_that_never_rests_says_so() -> None:
    t = np.arange(0.0, 10.0, 0.01)
    turns = Rotation.from_euler("z", (0.5 * t)[:, None])
    attitude = integrate_attitude(t, *readings(turns, t), where="head.csv")
    assert attitude.heading_drift_rad is None
    assert "never rests" in attitude.note


def test_swings_do_not_pull_the_attitude_over() -> None:
    """Two seconds of sideways acceleration of 6 m/s^2: its magnitude gives it away."""
    t, turns = motion()
    rates, forces = readings(turns, t)
    swing = (t > 15.0) & (t < 17.0)
    forces[swing] += np.array([6.0, 0.0, 0.0])
    attitude = integrate_attitude(t, rates, forces, where="head.csv")
    assert errors_deg(attitude.quaternions, turns).max() < 3.0


@pytest.mark.parametrize("scale", [0.0, 1.0 / 9.81])
def test_acceleration_that_is_not_gravity_is_refused(scale: float) -> None:
    t, turns = motion(5.0)
    rates, forces = readings(turns, t)
    with pytest.raises(InputError, match=r"head\.csv: acceleration is .* m/s\^2 at the start, not gravity's 9.81"):
        integrate_attitude(t, rates, scale * forces, where="head.csv")


def test_the_raw_file_is_read_as_an_orientation(tmp_path: Path) -> None:
    t, turns = motion()
    rates, forces = readings(turns, t)
    rows = "\n".join(",".join(f"{v:.6f}" for v in row) for row in np.column_stack([t, rates, forces]))
    path = tmp_path / "raw.csv"
    path.write_text(f"time_s,gx,gy,gz,ax,ay,az\n{rows}\n")
    orientation = Orientation.load(path)
    assert len(orientation.notes) == 1 and "heading is relative to the start" in orientation.notes[0]
    turned = orientation.matrices([0.0])[0].T @ orientation.matrices([6.0])[0]
    expected = (turns[0].inv() * turns[600]).as_matrix()
    assert np.degrees(np.arccos((np.trace(turned.T @ expected) - 1) / 2)) < 2.0
    path.write_text("time_s,gx,gy,gz,ax,ay\n0,0,0,0,0,9.81\n")
    with pytest.raises(InputError, match="column `az` is missing"):
        Orientation.load(path)
