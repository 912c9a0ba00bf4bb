"""The mixture over directions: densities, weights, clusters, and the step off the grid."""

from __future__ import annotations

import numpy as np
import pytest

from tests.bearings.scenes import RATE, apart_deg, recorded
from tests.conftest import circle
from unmix.bearings.bins import Bins, bin_segments, make_steering
from unmix.bearings.mixture import clusters, likelihoods, mixture_weights, refine, responses
from unmix.bearings.space import search_space
from unmix.physics import unit_vector

ARRAY = circle()
SPACE = search_space(ARRAY.positions_m)
STEERING = make_steering(ARRAY, RATE)


def bins_of(recording: np.ndarray) -> Bins:
    (bins,) = bin_segments([recording], STEERING)
    return bins


def unit_noise(rows: int, seed: int = 0) -> Bins:
    rng = np.random.default_rng(seed)
    z = rng.standard_normal((rows, 7)) + 1j * rng.standard_normal((rows, 7))
    z = (z / np.linalg.norm(z, axis=1, keepdims=True)).astype(np.complex64)
    frequency = rng.integers(0, len(STEERING.frequency_hz), rows)
    return Bins(z, frequency, np.sort(rng.uniform(0, 5, rows)), np.arange(0, 5, 0.016), np.ones(313, bool))


@pytest.mark.parametrize("kappa", [2.0, 4.0])
def test_densities_have_mean_one_over_uniform_noise(kappa: float) -> None:
    waves = STEERING.waves(SPACE.grid @ SPACE.basis.T)
    table = likelihoods(responses(unit_noise(4000), waves), 7, kappa=kappa)
    assert table.mean() == pytest.approx(1.0, abs=0.03)


def test_responses_are_one_where_the_wave_comes_from() -> None:
    waves = STEERING.waves(SPACE.grid[[5, 200]] @ SPACE.basis.T)
    z = waves[40].astype(np.complex64)
    bins = Bins(z, np.array([40, 40]), np.zeros(2), np.zeros(1), np.ones(1, bool))
    q = responses(bins, waves)
    np.testing.assert_allclose(np.diag(q), 1.0, atol=1e-5)
    assert q[0, 1] < 0.9


def test_weights_find_few_directions_nobody_counted() -> None:
    """Rows from three columns and rows from nobody: the shares come back, the others vanish.

    A column's density is 30 on three hundredths of all rows, where nine tenths of its own lie, and 0.1/0.97 elsewhere.
    """
    rng = np.random.default_rng(1)
    owner = rng.choice([5, 20, 41, -1], 6000, p=[0.4, 0.25, 0.15, 0.2])
    inside = rng.random((6000, 60)) < np.where(owner[:, None] == np.arange(60), 0.9, 0.03)
    weights, nobody = mixture_weights(np.where(inside, 30.0, 0.1 / 0.97).astype(np.float32), rounds=200)
    assert weights.sum() + nobody == pytest.approx(1.0, abs=1e-4)
    np.testing.assert_allclose([*weights[[5, 20, 41]], nobody], [0.4, 0.25, 0.15, 0.2], atol=0.04)
    assert np.delete(weights, [5, 20, 41]).max() < 0.01


def test_clusters_gather_neighbours() -> None:
    weights = np.zeros(len(SPACE.grid))
    for azimuth, weight in ((0.0, 0.3), (0.12, 0.3), (2.0, 0.25)):
        weights[np.argmin(np.linalg.norm(SPACE.grid - SPACE.project(unit_vector(azimuth)), axis=1))] += weight
    first, second = clusters(weights, SPACE)
    assert (first.weight, second.weight) == (pytest.approx(0.6), pytest.approx(0.25))
    assert np.arctan2(first.x[1], first.x[0]) == pytest.approx(0.06, abs=0.06)


def test_two_talkers_off_the_grid() -> None:
    bins = bins_of(recorded([21.0, 96.0], seconds=5.0))
    start = SPACE.project(unit_vector(np.radians([17.0, 101.0])))
    found = refine([(bins, np.eye(3))], start, SPACE, STEERING)
    azimuth = np.arctan2(found.x[:, 1], found.x[:, 0])
    assert apart_deg(azimuth, np.radians([21.0, 96.0])).max() < 0.2
    assert found.weight.min() > 0.2


def test_the_stated_deviation_is_that_of_draws() -> None:
    """The sandwich holds: forty sets of bins of one direction in noise, deviations known to 11 %, asked to a third."""
    rng = np.random.default_rng(2)
    x = SPACE.project(unit_vector(0.5, 0.6))
    waves = STEERING.waves(x[None] @ SPACE.basis.T)[:, 0]
    found, stated = [], []
    for seed in range(40):
        noise = unit_noise(1500, seed)
        z = waves[noise.frequency] * np.exp(2j * np.pi * rng.random((1500, 1))) + 0.5 * noise.z
        z = (z / np.linalg.norm(z, axis=1, keepdims=True)).astype(np.complex64)
        bins = Bins(z, noise.frequency, noise.time_s, noise.frame_s, noise.loud)
        result = refine([(bins, np.eye(3))], x[None] + 0.03, SPACE, STEERING)
        found.append(result.x[0])
        stated.append(np.diag(result.covariance[0]))
    deviation = np.std(found, axis=0)
    np.testing.assert_allclose(np.sqrt(np.mean(stated, axis=0)) / deviation, 1.0, atol=0.34)
    np.testing.assert_allclose(np.mean(found, axis=0), x, atol=4 * deviation.max() / np.sqrt(40) + 1e-3)
