"""Leakage where one talker is alone, and bleed taken out of close microphones, on signals whose truth is known."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.conftest import speech
from unmix.errors import InputError
from unmix.metrics.alone import alone_stretches, leakage_where_alone
from unmix.metrics.bleed import clean_references

Floats = NDArray[np.float64]
RATE, SECONDS = 16000, 12.0
SPOKEN = {"mate": [(0.0, 4.0), (6.0, 8.0)], "pilot": [(3.0, 7.0), (8.5, 11.0)]}
NAMES = list(SPOKEN)


@pytest.fixture(scope="module")
def turns() -> Floats:
    """Two talkers who take turns and overlap; nobody speaks in the last second."""
    signals = np.array([speech("novel-reader", SECONDS), speech("card-reader", SECONDS)])
    time_s = np.arange(signals.shape[1]) / RATE
    masks = [sum((time_s >= a) & (time_s < b) for a, b in stretches) for stretches in SPOKEN.values()]
    return np.asarray(signals * np.array(masks))


def test_alone_means_that_nobody_else_speaks_or_rings_on() -> None:
    alone = alone_stretches(SPOKEN, SECONDS)
    assert alone["mate"] == [(0.0, 2.95), (7.3, 8.0)]
    assert alone["pilot"] == [(4.3, 5.95), (8.5, 11.0)]
    assert alone_stretches({"a": [(0.0, 2.0)], "b": [(0.0, 2.0)]}, 2.0) == {"a": [], "b": []}


def test_leakage_is_the_level_that_was_mixed_in(turns: Floats) -> None:
    signals = turns + np.array([[0.0, 0.1], [0.03, 0.0]]) @ turns
    found = {
        (i.source, i.target): i for i in leakage_where_alone(signals, NAMES, alone_stretches(SPOKEN, SECONDS), RATE)
    }
    assert found["pilot", "mate"].interval.mean == pytest.approx(-20.0, abs=1e-6)
    assert found["mate", "pilot"].interval.mean == pytest.approx(20.0 * np.log10(0.03), abs=1e-6)
    assert found["mate", "pilot"].seconds == pytest.approx(2.95 + 0.7, abs=0.01)


def test_noise_is_taken_off_where_it_is_known(turns: Floats, rng: np.random.Generator) -> None:
    signals = turns + 0.1 * turns[::-1] + 0.005 * rng.standard_normal(turns.shape)
    alone = alone_stretches(SPOKEN, SECONDS)
    with_noise = leakage_where_alone(signals, NAMES, alone, RATE)
    without = leakage_where_alone(signals, NAMES, alone, RATE, quiet_s=[(11.0, 12.0)])
    for noisy, clean in zip(with_noise, without, strict=True):
        assert abs((clean.interval.mean or 0.0) + 20.0) < 1.0  # a piece's noise is not quite the mean noise
        assert (noisy.interval.mean or 0.0) > -18.0
    hidden = leakage_where_alone(
        turns + 0.005 * rng.standard_normal(turns.shape), NAMES, alone, RATE, quiet_s=[(11, 12)]
    )
    assert all(item.at_floor > 0 for item in hidden)


def test_a_talker_who_is_never_alone_has_no_leakage(turns: Floats) -> None:
    found = leakage_where_alone(turns, NAMES, {"mate": [(0.0, 3.0)], "pilot": []}, RATE)
    assert [(i.source, i.seconds > 0, i.interval.mean is None) for i in found] == [
        ("mate", True, False),
        ("pilot", False, True),
    ]


def bleeding(turns: Floats, rng: np.random.Generator) -> tuple[Floats, Floats]:
    """Close microphones 16 dB of bleed through a decaying response of 40 ms, and what they would hear without it."""
    response = rng.standard_normal((2, 640)) * np.exp(-np.arange(640) / 100.0)
    response *= 10.0 ** (-16.0 / 20.0) / np.linalg.norm(response, axis=1, keepdims=True)
    bleed = [np.convolve(turns[1 - k], response[k])[: turns.shape[1]] for k in range(2)]
    return turns + np.array(bleed), turns


def test_bleed_is_taken_out(turns: Floats, rng: np.random.Generator) -> None:
    close, clean = bleeding(turns, rng)
    found = clean_references(
        close + 1e-5 * rng.standard_normal(close.shape), NAMES, alone_stretches(SPOKEN, SECONDS), RATE
    )
    energy = np.sum(clean**2, axis=1)
    before, after = (np.sum((r - clean) ** 2, axis=1) / energy for r in (close, found.references))
    assert np.all(after < 1e-3 * before)
    for item in found.bleed:
        assert item.before_db == pytest.approx(-16.0, abs=1.0)  # speech is not white, so the response weighs it
        assert item.left_db < item.before_db - 15.0
        # Tried on what it was not fitted on, a half's filter does less well than the whole does.
        assert item.left_db > 10.0 * np.log10(after.max())
    differ = [np.sum((half - found.references) ** 2, axis=1) / energy for half in found.halves]
    assert np.all(np.mean(differ, axis=0) > after)


def test_bleed_cannot_be_known_of_somebody_never_alone(turns: Floats) -> None:
    with pytest.raises(InputError, match=r"talker 'pilot' is alone for 0\.5 s only; 0\.8 s are needed"):
        clean_references(turns, NAMES, {"mate": [(0.0, 3.0)], "pilot": [(9.0, 9.5)]}, RATE)
