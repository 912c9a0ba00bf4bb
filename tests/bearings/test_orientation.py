"""The turning array: interpolation on the sphere, the clock offset, and what the user is told."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from tests.conftest import circle
from unmix.bearings.orientation import estimate_clock_offset, orientation_notes
from unmix.bearings.space import search_space
from unmix.bearings.tracks import Detections
from unmix.physics import unit_vector
from unmix.track import Orientation

SPACE = search_space(circle().positions_m)


def head(offset_s: float = 0.0, *, rate_hz: float = 50.0, seconds: float = 20.0, swing: float = 1.0) -> Orientation:
    """A head that looks left and right; its clock is ``offset_s`` ahead of the recording's."""
    t = np.arange(-5.0, seconds + 5.0, 1.0 / rate_hz)
    heading = swing * (0.7 * np.sin(2 * np.pi * 0.21 * t) + 0.4 * np.sin(2 * np.pi * 0.083 * t + 1.0))
    quaternions = Rotation.from_euler("z", heading[:, None]).as_quat(scalar_first=True)
    return Orientation(t + offset_s, quaternions)


def detections(
    world_azimuths: tuple[float, ...], *, swing: float = 1.0, seconds: float = 20.0, seed: int = 3
) -> list[Detections]:
    """What an array turned by `head(0)` hears of talkers at rest: noisy, some missed, a false one now and then."""
    rng = np.random.default_rng(seed)
    truth = head(swing=swing)
    found = []
    for t in np.arange(0.25, seconds, 0.25):
        turn = truth.matrices(t)
        u = [turn.T @ unit_vector(a) for a in world_azimuths if rng.random() < 0.7]
        if rng.random() < 0.2:
            u.append(unit_vector(rng.uniform(-np.pi, np.pi)))
        x = SPACE.project(np.array(u).reshape(-1, 3)) + 0.05 * rng.standard_normal((len(u), 2))
        found.append(Detections(float(t), x, np.full(len(u), 1.0 / max(len(u), 1))))
    return found


def test_between_two_readings_the_turn_is_even() -> None:
    """Halfway between two orientations 90 degrees apart about a slanted axis: 45 degrees about the same axis."""
    axis = np.array([1.0, 2.0, 2.0]) / 3.0
    ends = Rotation.from_rotvec(np.stack([0.0 * axis, np.pi / 2 * axis])).as_quat(scalar_first=True)
    # The same rotation may be written with either sign.
    for sign in (1.0, -1.0):
        orientation = Orientation(np.array([2.0, 4.0]), ends * np.array([[1.0], [sign]]))
        expected = Rotation.from_rotvec(np.array([np.pi / 4, np.pi / 8])[:, None] * axis).as_matrix()
        np.testing.assert_allclose(orientation.matrices([3.0, 2.5]), expected, atol=1e-12)


@pytest.mark.parametrize("offset_s", [-1.7, -0.23, 0.0, 0.4, 2.3])
@pytest.mark.parametrize("azimuths", [(0.4,), (0.4, 1.9)])
def test_the_clock_offset_is_found(offset_s: float, azimuths: tuple[float, ...]) -> None:
    found = estimate_clock_offset(head(offset_s), detections(azimuths), SPACE, 20.0)
    assert found.offset_s == pytest.approx(offset_s, abs=0.06)
    assert f"{found.offset_s:+.2f} s" in found.note


def test_an_array_that_hardly_turns_gives_no_offset() -> None:
    found = estimate_clock_offset(head(0.5, swing=0.05), detections((0.4,), swing=0.05), SPACE, 20.0)
    assert found.offset_s is None and "hardly turns" in found.note


def test_too_little_speech_gives_no_offset() -> None:
    found = estimate_clock_offset(head(0.5), detections((0.4,))[:4], SPACE, 20.0)
    assert found.offset_s is None and "too little speech" in found.note


def test_an_offset_beyond_reach_is_said() -> None:
    found = estimate_clock_offset(head(0.0), [], SPACE, 20.0)
    assert found.offset_s is None


def test_what_is_not_covered_is_said() -> None:
    quaternions = np.tile([1.0, 0, 0, 0], (101, 1))
    time_s = np.linspace(0.0, 10.0, 101)
    assert orientation_notes(Orientation(time_s, quaternions), 0.0, 10.0) == []
    (early,) = orientation_notes(Orientation(time_s, quaternions), 0.0, 15.0)
    assert early == "the orientation ends at 10.0 s of the 15.0 s recording: the last is held to the end"
    (early,) = orientation_notes(Orientation(time_s, quaternions), 2.0, 10.0)
    assert "ends at 8.0 s" in early
    (late,) = orientation_notes(Orientation(time_s + 3.0, quaternions), 0.0, 10.0)
    assert late == "the orientation starts at 3.0 s of the recording: the first one is held before that"
    gap = np.r_[time_s[:30], time_s[60:]]
    (hole,) = orientation_notes(Orientation(gap, quaternions[: len(gap)]), 0.0, 10.0)
    assert hole == "the orientation has a gap of 3.1 s at 2.9 s: it is interpolated"
