"""Offsets and drift that are put in are found, and moves are exact to the interpolation's error."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.conftest import speech
from unmix.audio import resample
from unmix.metrics.alignment import OffsetFinder, advance, guard_samples

Floats = NDArray[np.float64]
RATE = 16000


def _delayed_exactly(x: Floats, samples: float) -> Floats:
    """x later by any number of samples, by the phase of a padded transform: not what the code under test uses."""
    size = 4 * x.size
    omega = 2.0 * np.pi * np.fft.rfftfreq(size)
    return np.asarray(np.fft.irfft(np.fft.rfft(x, size) * np.exp(-1j * omega * samples), size)[: x.size])


def _stretched(x: Floats, ppm: float) -> Floats:
    """x recorded by a clock that makes its offset grow by `ppm`: interpolated from eight times the rate."""
    fine = resample(x[None], RATE, 8 * RATE)[0]
    return np.interp(np.arange(x.size) * (1.0 - ppm * 1e-6), np.arange(fine.size) / 8.0, fine)


@pytest.mark.parametrize("offset", [0.0, 0.1, 0.3, 0.5, -0.1, -0.5, 17.25, -333.8, 4000.3, -8000.6, 15900.4])
@pytest.mark.parametrize("seconds", [3.0, 10.0])
def test_offsets_of_fractions_and_up_to_a_second_are_found(offset: float, seconds: float) -> None:
    x = speech("novel-reader", seconds)
    found = OffsetFinder(x, RATE).find(_delayed_exactly(x, offset))
    assert found.samples == pytest.approx(offset, abs=0.005 if abs(offset) < 8000 else 0.1)
    assert not found.slips


@pytest.mark.parametrize("level", [1.0, 0.3])
def test_an_offset_is_found_in_a_mixture(level: float, rng: np.random.Generator) -> None:
    x = speech("novel-reader", 8.0)
    mixture = level * _delayed_exactly(x, 1234.4) + speech("card-reader", 8.0) + speech("robot-commands", 8.0)
    found = OffsetFinder(x, RATE).find(mixture + 1e-3 * rng.standard_normal(x.size))
    assert found.samples == pytest.approx(1234.4, abs=0.05)


def test_inverted_polarity_is_no_offset() -> None:
    x = speech("novel-reader", 4.0)
    assert OffsetFinder(x, RATE).find(-x).samples == pytest.approx(0.0, abs=1e-3)


def test_a_reflection_louder_than_the_direct_sound_is_not_taken_for_it() -> None:
    x = speech("novel-reader", 6.0)
    heard = 0.8 * _delayed_exactly(x, 5.0) + _delayed_exactly(x, 5.0 + 0.006 * RATE)
    assert OffsetFinder(x, RATE).find(heard).samples == pytest.approx(5.0, abs=0.3)


def test_unrelated_speech_and_noise_have_no_offset(rng: np.random.Generator) -> None:
    finder = OffsetFinder(speech("novel-reader", 8.0), RATE)
    for other in (speech("card-reader", 8.0), speech("robot-commands", 8.0), rng.standard_normal(8 * RATE)):
        found = finder.find(other)
        assert found.samples is None
        assert "does not resemble" in str(found.undefined)


@pytest.mark.parametrize(
    ("signal", "reason"), [(0.0, "the signal is silent"), (np.nan, "the signal holds NaN or infinite samples")]
)
def test_signals_that_cannot_be_used_have_no_offset(signal: float, reason: str) -> None:
    x = speech("novel-reader", 2.0)
    assert OffsetFinder(x, RATE).find(signal * x).undefined == reason
    assert "reference" in str(OffsetFinder(signal * x, RATE).find(x).undefined)


@pytest.mark.parametrize("ppm", [10.0, -20.0, 100.0])
def test_drift_is_noticed_and_the_offset_is_the_middle_one(ppm: float, rng: np.random.Generator) -> None:
    x = speech("novel-reader", 12.0)
    found = OffsetFinder(x, RATE).find(_stretched(x, ppm) + 0.3 * speech("card-reader", 12.0))
    assert found.slips
    assert found.drift_ppm == pytest.approx(ppm, rel=0.05)
    assert found.samples == pytest.approx(ppm * 1e-6 * x.size / 2, rel=0.05)


def test_drift_that_smears_the_peak_of_the_whole_is_found_all_the_same() -> None:
    x = np.resize(speech("novel-reader", 20.0), 150 * RATE)
    found = OffsetFinder(x, RATE).find(_stretched(x, 300.0))
    assert found.slips
    assert found.drift_ppm == pytest.approx(300.0, rel=0.02)
    # 300 ppm over 150 s are 720 samples.
    assert found.samples == pytest.approx(360.0, rel=0.02)


def test_no_drift_is_seen_where_there_is_none(rng: np.random.Generator) -> None:
    x = speech("card-reader", 10.0)
    for noise in (0.0, 0.01, 0.05):
        found = OffsetFinder(x, RATE).find(x + noise * rng.standard_normal(x.size))
        assert not found.slips
        assert abs(found.drift_ppm or 0.0) < 2.0


@pytest.mark.parametrize("samples", [0.0, 3.0, -3.0, 0.5, -0.25, 100.75, -2000.4])
def test_advancing_undoes_a_delay(samples: float) -> None:
    x = speech("novel-reader", 2.0)
    moved = advance(_delayed_exactly(x, samples), samples)
    inside = slice(2200, -2200)
    error = np.linalg.norm(moved[inside] - x[inside]) / np.linalg.norm(x[inside])
    # The interpolation reaches -80 dB up to 0.99 of the Nyquist frequency; speech has little beyond.
    assert error < 1e-4


def test_advancing_fills_with_silence_and_cuts_to_length() -> None:
    np.testing.assert_array_equal(advance(np.arange(1.0, 5.0), 2.0), [3.0, 4.0, 0.0, 0.0])
    np.testing.assert_array_equal(advance(np.arange(1.0, 5.0), -2.0, length=5), [0.0, 0.0, 1.0, 2.0, 3.0])
    np.testing.assert_array_equal(advance(np.arange(1.0, 5.0), 9.0), np.zeros(4))


def test_the_guard_is_two_milliseconds_of_whole_samples() -> None:
    assert (guard_samples(16000), guard_samples(48000), guard_samples(11025)) == (32, 96, 23)
