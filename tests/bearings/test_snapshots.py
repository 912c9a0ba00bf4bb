"""Bearings from single snapshots: no spectrum, no order, any rate."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import butter, sosfiltfilt

from tests.bearings.scenes import RATE, line, recorded
from tests.conftest import circle, speech
from unmix.array import Array
from unmix.bearings.snapshots import snapshot_bearing, snapshot_model
from unmix.bearings.space import search_space
from unmix.errors import InputError, UnsolvableError
from unmix.physics import unit_vector


def low_voice(seconds: float) -> np.ndarray:
    """Speech below 1.5 kHz, where an expansion of order 4 holds to -40 dB over 4 cm."""
    return sosfiltfilt(butter(6, 1500, fs=RATE, output="sos"), speech("novel-reader", seconds))[None]


def axis_error_deg(x: np.ndarray, u: np.ndarray) -> float:
    """Angle between an axis and a direction, whichever end of it."""
    return float(np.degrees(np.arccos(min(1.0, abs(float(x @ u)) / np.linalg.norm(x) / np.linalg.norm(u)))))


@pytest.mark.parametrize("azimuth_deg", [-140.0, -35.0, 12.0, 77.0])
def test_one_sample_in_a_thousand_serves(azimuth_deg: float) -> None:
    """Sixteen snapshots per second, in any order, tell the axis of a talker."""
    recording = recorded([azimuth_deg], seconds=8.0, signals=low_voice(8.0), snr_db=50.0)
    chosen = np.random.default_rng(1).permutation(np.arange(37, recording.shape[1], 1000))
    y = recording[:, chosen]
    space = search_space(circle().positions_m)
    found = snapshot_bearing(snapshot_model(circle(), space, RATE), y @ y.T, y.shape[1])
    assert len(chosen) == 128
    assert axis_error_deg(found.x, space.project(unit_vector(np.radians(azimuth_deg)))) < 2.0


def test_short_wakes_far_apart_serve_like_a_whole_recording() -> None:
    """On for 4 ms, off for a second: a duty cycle of 0.4 %."""
    recording = recorded([50.0], seconds=8.0, signals=low_voice(8.0), snr_db=50.0)
    y = np.concatenate([recording[:, at : at + 64] for at in range(4000, recording.shape[1], RATE)], axis=1)
    space = search_space(circle().positions_m)
    model = snapshot_model(circle(), space, RATE)
    found = snapshot_bearing(model, y @ y.T, y.shape[1])
    assert axis_error_deg(found.x, space.project(unit_vector(np.radians(50.0)))) < 2.0
    whole = snapshot_bearing(model, recording @ recording.T, recording.shape[1])
    assert np.trace(whole.covariance) < 0.05 * np.trace(found.covariance)


def test_stated_deviations_are_those_found() -> None:
    """Sixty draws of noise over the same snapshots; deviations known to 9 %, asked for to a third."""
    clean = recorded([50.0], seconds=4.0, signals=low_voice(4.0), snr_db=200.0)[:, ::400]
    space = search_space(circle().positions_m)
    model = snapshot_model(circle(), space, RATE)
    rng = np.random.default_rng(3)
    angle, stated = [], []
    for _ in range(60):
        y = clean + 0.05 * 10 ** (-50 / 20) * rng.standard_normal(clean.shape)
        found = snapshot_bearing(model, y @ y.T, y.shape[1])
        turn = np.array([-found.x[1], found.x[0]])
        angle.append(np.arctan(found.x[1] / found.x[0]) - np.radians(50.0))
        stated.append(turn @ found.covariance @ turn)
    assert np.sqrt(np.mean(stated)) == pytest.approx(float(np.std(angle)), rel=0.34)


def test_a_recording_played_backwards_gives_the_same_axis() -> None:
    """Order in time does not matter, and what the jets span does not change when all delays change sign."""
    space = search_space(circle().positions_m)
    model = snapshot_model(circle(), space, RATE)
    y = recorded([50.0], seconds=1.0, signals=low_voice(1.0), snr_db=50.0)[:, ::50]
    back = y[:, ::-1]
    there, again = (snapshot_bearing(model, some @ some.T, some.shape[1]) for some in (y, back))
    np.testing.assert_allclose(there.x, again.x, atol=1e-9)
    opposite = recorded([-130.0], seconds=1.0, signals=low_voice(1.0), snr_db=50.0)[:, ::50]
    turned = snapshot_bearing(model, opposite @ opposite.T, opposite.shape[1])
    assert axis_error_deg(turned.x, there.x) < 2.0


def test_a_solid_array_finds_elevation_too() -> None:
    """Nine microphones leave enough to judge two angles by; five that are in no plane leave one equation for them."""
    corners = 0.03 * np.array([[x, y, z] for x in (-1, 1) for y in (-1, 1) for z in (-1, 1)] + [[0, 0, 0]])
    array = Array.from_positions(corners + 0.004 * np.random.default_rng(4).standard_normal((9, 3)))
    recording = recorded([50.0], elevations_deg=35.0, seconds=4.0, signals=low_voice(4.0), array=array, snr_db=60.0)
    space = search_space(array.positions_m)
    model = snapshot_model(array, space, RATE)
    y = recording[:, ::50]
    found = snapshot_bearing(model, y @ y.T, y.shape[1])
    assert axis_error_deg(found.x, unit_vector(np.radians(50.0), np.radians(35.0))) < 2.0


def test_what_snapshots_cannot_do_is_refused() -> None:
    with pytest.raises(UnsolvableError, match="straight line of microphones say nothing about the direction"):
        snapshot_model(line(), search_space(line().positions_m), RATE)
    triangle = Array.from_positions(np.array([[0.0, 0, 0], [0.05, 0, 0], [0, 0.05, 0]]))
    space = search_space(triangle.positions_m)
    assert snapshot_model(triangle, space, RATE).order == 1
    with pytest.raises(UnsolvableError, match="expansion orders 1 to 1, not 3"):
        snapshot_model(triangle, space, RATE, order=3)
    space = search_space(circle().positions_m)
    with pytest.raises(InputError, match="no snapshot was given"):
        snapshot_bearing(snapshot_model(circle(), space, RATE), np.zeros((7, 7)), 0)
