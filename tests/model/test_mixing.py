"""Delays and gains as short filters."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from unmix.array import Array
from unmix.model.delays import Paths, paths_from_bearings
from unmix.model.differentiators import choose_differentiators
from unmix.model.mixing import Mixing, mixing_from_paths, mixing_from_responses, model_reach

RATE = 16000


def differentiators(order: int = 6):  # type: ignore[no-untyped-def]
    return choose_differentiators(order, family="least-squares", error_db=-50, band_edge=0.85)


@pytest.mark.parametrize("radius_m", [0.02, 0.04, 0.15])
def test_nearest_anchor_holds_its_error_at_any_aperture(radius_m: float) -> None:
    paths = paths_from_bearings(circle(radius_m=radius_m), np.radians([33.0, 140.0]), 0.1, 1.2)
    mixing = mixing_from_paths(paths, differentiators(), RATE)
    omega = np.linspace(0.01, 0.85, 60) * np.pi
    exact = paths.gain.T * np.exp(-1j * omega[:, None, None] * RATE * paths.delay_s.T)
    error_db = 20 * np.log10(np.abs(mixing.response(omega) - exact).max())
    assert error_db < -48


def test_own_anchor_fails_where_its_expansion_does() -> None:
    # Order 4 about the sample itself, 4 cm radius: off by -8 dB at 3 kHz.
    paths = Paths(np.array([[0.04 / 343.2]]), np.ones((1, 1)))
    omega = np.array([2 * np.pi * 3000 / RATE])
    own = mixing_from_paths(paths, differentiators(4), RATE, anchor="own").response(omega)[0, 0, 0]
    nearest = mixing_from_paths(paths, differentiators(4), RATE).response(omega)[0, 0, 0]
    exact = np.exp(-1j * omega[0] * RATE * paths.delay_s[0, 0])
    assert 20 * np.log10(abs(own - exact)) == pytest.approx(-8, abs=2)
    assert 20 * np.log10(abs(nearest - exact)) < -40


def test_apply_equals_exact_delays_on_speech(two_talkers: Paths) -> None:
    signals = np.stack([speech("novel-reader", 2.0), speech("card-reader", 2.0)])
    heard = mixing_from_paths(two_talkers, differentiators(), RATE).apply(signals)
    exact = delayed(signals, two_talkers, RATE).sum(axis=0)
    inner = slice(200, -200)
    # The expansion's stated error is -50 dB at its band edge; speech is stronger below it.
    assert np.std((heard - exact)[:, inner]) < 10 ** (-50 / 20) * np.std(exact[:, inner])


def test_moving_filters_equal_those_at_rest_when_nothing_moves(two_talkers: Paths) -> None:
    still = mixing_from_paths(two_talkers, differentiators(), RATE)
    frozen = Paths(np.stack([two_talkers.delay_s] * 2), np.stack([two_talkers.gain] * 2), time_s=np.array([0.0, 1.0]))
    reach = model_reach(frozen, differentiators(), RATE, "nearest")
    moving = mixing_from_paths(frozen, differentiators(), RATE, samples=64, hold=16, reach=reach)
    assert moving.taps.shape == (4, *still.taps.shape)
    assert moving.taps == pytest.approx(np.broadcast_to(still.taps, moving.taps.shape))


def test_responses_take_the_same_form(rng: np.random.Generator) -> None:
    responses = rng.standard_normal((2, 3, 9))
    mixing = mixing_from_responses(responses, centre=2)
    signals = rng.standard_normal((2, 100))
    expected = np.zeros((3, 100))
    for k in range(2):
        for m in range(3):
            expected[m] += np.convolve(signals[k], responses[k, m])[2:102]
    assert mixing.apply(signals) == pytest.approx(expected)


def test_corrections_are_put_into_the_model_relative_to_the_reference() -> None:
    plain = circle()
    array = Array(
        plain.positions_m,
        gain_db=np.arange(7.0),
        delay_s=np.arange(7) * 1e-6,
        polarity=np.array([1, -1, 1, 1, 1, 1, 1]),
    )
    clean = paths_from_bearings(plain, [0.3])
    faulty = paths_from_bearings(array, [0.3])
    assert faulty.delay_s - clean.delay_s == pytest.approx(np.arange(7)[None] * 1e-6)
    assert faulty.gain[0] == pytest.approx(10 ** (np.arange(7) / 20) * [1, -1, 1, 1, 1, 1, 1])


def test_far_sphere_is_a_plane_wave() -> None:
    array = circle()
    plane = paths_from_bearings(array, [1.0], 0.2)
    sphere = paths_from_bearings(array, [1.0], 0.2, [1000.0])
    assert sphere.delay_s == pytest.approx(plane.delay_s, abs=1e-8)
    assert sphere.gain == pytest.approx(plane.gain, abs=1e-4)
    # From the left (azimuth 90 degrees) the leftmost microphone hears first.
    left = paths_from_bearings(array, [np.pi / 2])
    assert left.delay_s[0].argmin() == array.positions_m[:, 1].argmax()


def test_a_full_grid_of_frequencies_gives_the_same_response() -> None:
    rng = np.random.default_rng(3)
    mixing = Mixing(rng.standard_normal((2, 3, 41)), 20)
    omega = 2 * np.pi * np.arange(65) / 128
    apart = np.concatenate([mixing.response(omega[:30]), mixing.response(omega[30:])])
    assert np.abs(mixing.response(omega) - apart).max() < 1e-12
