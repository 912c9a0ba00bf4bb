"""Directions, distances and spectra; figures from outside stand in tests/outside/test_physics.py."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.physics import (
    air_absorption_db_per_m,
    diffuse_coherence,
    direction_angles,
    pairwise_distances,
    speech_spectrum_db,
    speed_of_sound,
    unit_vector,
)


def test_axes_are_front_left_up() -> None:
    np.testing.assert_allclose(unit_vector(0.0), [1, 0, 0], atol=1e-15)
    np.testing.assert_allclose(unit_vector(np.pi / 2), [0, 1, 0], atol=1e-15)
    np.testing.assert_allclose(unit_vector(0.3, np.pi / 2), [0, 0, 1], atol=1e-15)


def test_angles_come_back(rng: np.random.Generator) -> None:
    azimuth, elevation = rng.uniform(-np.pi, np.pi, (4, 50)), rng.uniform(-1.5, 1.5, (4, 50))
    vectors = unit_vector(azimuth, elevation)
    assert vectors.shape == (4, 50, 3)
    np.testing.assert_allclose(np.linalg.norm(vectors, axis=-1), 1.0, atol=1e-14)
    # Any length will do.
    back = direction_angles(2.7 * vectors)
    np.testing.assert_allclose(back[0], azimuth, atol=1e-13)
    np.testing.assert_allclose(back[1], elevation, atol=1e-13)


def test_distances_of_all_pairs() -> None:
    distances = pairwise_distances([[0, 0, 0], [3, 4, 0], [0, 0, 2]])
    np.testing.assert_allclose(distances, [[0, 5, 2], [5, 0, np.sqrt(29)], [2, np.sqrt(29), 0]])


def test_coherence_has_the_frequencies_first() -> None:
    coherence = diffuse_coherence(np.array([[0.0, 0.1], [0.1, 0.0]]), [0.0, 500.0, 1000.0])
    assert coherence.shape == (3, 2, 2)
    np.testing.assert_array_equal(coherence[:, 0, 0], 1.0)
    np.testing.assert_array_equal(coherence[0], 1.0)


def test_speed_grows_with_the_square_root_of_temperature() -> None:
    assert speed_of_sound(4 * 293.15 - 273.15) == pytest.approx(2 * 343.2)


def test_air_takes_more_of_high_frequencies_and_more_when_dry() -> None:
    absorption = air_absorption_db_per_m(np.geomspace(100.0, 16000.0, 12))
    assert np.all(np.diff(absorption) > 0.0)
    dry, damp = (float(air_absorption_db_per_m(4000.0, humidity_percent=h)) for h in (20.0, 70.0))
    assert dry > 1.5 * damp


def test_speech_spectrum_continues_beyond_its_table() -> None:
    level = speech_spectrum_db([0.0, 20.0, 40.0, 80.0, 160.0, 1000.0, 8000.0, 16000.0])
    assert level[0] == level[1] == level[2]
    assert level[4] == 32.41
    assert level[3] == pytest.approx(32.41 - 12.0)
    assert level[5] == pytest.approx(25.01)
    assert level[7] == pytest.approx(1.13 - 6.0)
