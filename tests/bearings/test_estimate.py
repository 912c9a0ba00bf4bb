"""From projections to bearings: horizon, mirrors, deviations."""

from __future__ import annotations

import numpy as np
import pytest

from tests.bearings.scenes import line, solid
from tests.conftest import circle
from unmix.bearings.estimate import CLEAN, bearing_estimate
from unmix.bearings.space import search_space
from unmix.physics import unit_vector

FLAT = search_space(circle().positions_m)


def test_a_high_talker_of_a_flat_array_has_a_mirror() -> None:
    x = FLAT.project(unit_vector(0.4, 0.8))
    found = bearing_estimate(x, 1e-4 * np.eye(2), 0.0, FLAT, 7)
    assert (found.azimuth, found.elevation) == (pytest.approx(0.4), pytest.approx(0.8, abs=1e-6))
    ((azimuth, elevation),) = found.candidates
    assert (azimuth, elevation) == (pytest.approx(0.4), pytest.approx(-0.8, abs=1e-6))


def test_near_the_horizon_a_flat_array_says_horizontal_and_how_unsure_that_is() -> None:
    found = bearing_estimate(0.99 * FLAT.project(unit_vector(0.4)), 1e-3 * np.eye(2), 0.0, FLAT, 7)
    assert found.elevation == pytest.approx(0.0, abs=1e-6)
    assert found.elevation_std > np.radians(5.0)
    assert found.candidates == ()


def test_the_pull_of_the_room_towards_the_centre_is_undone() -> None:
    """What lies outside the direction beyond `CLEAN` lengthens x, and widens the deviations."""
    x = 0.7 * FLAT.project(unit_vector(0.4))
    clean, reverberant = (bearing_estimate(x, 1e-4 * np.eye(2), m * 6 / 7, FLAT, 7) for m in (CLEAN, CLEAN + 0.5))
    assert np.cos(clean.elevation) == pytest.approx(0.7)
    assert np.cos(reverberant.elevation) == pytest.approx(0.7 / (1 - (0.13 + 0.36 / 7) * 0.5))
    assert reverberant.azimuth_std > clean.azimuth_std and reverberant.elevation_std > clean.elevation_std


def test_deviations_follow_the_covariance() -> None:
    """Of a solid array: an angle's deviation is that of the projection, the azimuth's larger by 1/cos(elevation)."""
    space = search_space(solid().positions_m)
    found = bearing_estimate(unit_vector(0.4, 1.0), 1e-4 * np.eye(3), 0.0, space, 5)
    assert found.elevation_std == pytest.approx(0.01, rel=0.1)
    assert found.azimuth_std == pytest.approx(0.01 / np.cos(1.0), rel=0.1)


def test_a_line_knows_nothing_of_the_height() -> None:
    """Elevation is anywhere on the cone: root mean square height of a circle of radius sqrt(1 - x^2)."""
    space = search_space(line().positions_m)
    found = bearing_estimate(np.array([0.5]), 1e-4 * np.eye(1), 0.0, space, 4)
    assert np.degrees(found.azimuth) == pytest.approx(30.0, abs=0.01)
    assert found.elevation_std == pytest.approx(np.sqrt(0.75 / 2))
    ((azimuth, elevation),) = found.candidates
    assert (np.degrees(azimuth), elevation) == (pytest.approx(150.0, abs=0.01), pytest.approx(0.0, abs=1e-9))
