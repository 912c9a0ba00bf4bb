"""Distances between sets of directions, against values worked out by hand."""

from __future__ import annotations

import numpy as np
import pytest

from tests.bearings.scenes import directions
from unmix.bearings.ospa import gospa, great_circle, ospa

NOBODY = np.zeros((0, 3))
CUTOFF = np.radians(20.0)


def test_angles_are_exact_for_small_ones_too() -> None:
    u = directions(0.0, 1e-6, 90.0, 180.0)
    np.testing.assert_allclose(np.degrees(great_circle(u[:1], u)), [0.0, 1e-6, 90.0, 180.0], rtol=1e-9, atol=1e-12)


def test_one_pair_is_its_angle_up_to_the_cutoff() -> None:
    assert np.degrees(ospa(directions(10.0), directions(13.0))) == pytest.approx(3.0)
    assert np.degrees(ospa(directions(10.0), directions(100.0))) == pytest.approx(20.0)
    assert np.degrees(gospa(directions(10.0), directions(13.0)).distance) == pytest.approx(3.0)


def test_the_better_assignment_counts() -> None:
    """3 and 4 degrees off, listed the other way round: OSPA sqrt((9 + 16) / 2), GOSPA sqrt(9 + 16)."""
    found, truth = directions(104.0, 13.0), directions(10.0, 100.0)
    assert np.degrees(ospa(found, truth)) == pytest.approx(np.sqrt(12.5))
    assert np.degrees(gospa(found, truth).distance) == pytest.approx(5.0)
    assert np.degrees(ospa(found, truth, p=1.0)) == pytest.approx(3.5)


def test_one_missed_and_one_false() -> None:
    """One pair 3 degrees apart and one missed: OSPA sqrt((9 + 400) / 2), GOSPA sqrt(9 + 200)."""
    assert np.degrees(ospa(directions(13.0), directions(10.0, 100.0))) == pytest.approx(np.sqrt(204.5))
    parts = gospa(directions(13.0), directions(10.0, 100.0))
    assert np.degrees(parts.distance) == pytest.approx(np.sqrt(209.0))
    assert (np.degrees(parts.located), parts.missed, parts.false) == (pytest.approx(3.0), 1, 0)
    parts = gospa(directions(13.0, -50.0), directions(10.0, 100.0))
    assert np.degrees(parts.distance) == pytest.approx(np.sqrt(9.0 + 200.0 + 200.0))
    assert (parts.missed, parts.false) == (1, 1)


def test_empty_sets() -> None:
    assert ospa(NOBODY, NOBODY) == 0.0
    assert ospa(NOBODY, directions(1.0)) == ospa(directions(1.0, 2.0), NOBODY) == pytest.approx(CUTOFF)
    assert gospa(NOBODY, NOBODY).distance == 0.0
    assert gospa(NOBODY, directions(1.0, 90.0)).distance == pytest.approx(np.sqrt(2 * CUTOFF**2 / 2))


def test_both_are_symmetric_and_keep_the_triangle_inequality() -> None:
    rng = np.random.default_rng(2)
    for _ in range(50):
        a, b, c = (directions(*rng.uniform(-40.0, 40.0, rng.integers(0, 4))).reshape(-1, 3) for _ in range(3))
        for distance in (ospa, lambda x, y: gospa(x, y).distance):
            assert distance(a, b) == pytest.approx(distance(b, a))
            assert distance(a, c) <= distance(a, b) + distance(b, c) + 1e-9
