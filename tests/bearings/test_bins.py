"""Which bins are taken, and what they are freed of."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.bearings.scenes import RATE, recorded
from tests.conftest import circle
from unmix.bearings.bins import DECAY_S, bin_segments, join, make_steering


def test_corrections_of_the_channels_are_undone() -> None:
    """Bins of a changed recording with the array that says so are those of the plain one."""
    plain = circle()
    gain_db, delay_s = np.array([0.0, 2, -1, 0, 1, 0, -2]), np.array([0.0, 3e-5, 0, -2e-5, 0, 1e-5, 0])
    polarity = np.array([1, 1, -1, 1, 1, 1, 1])
    recording = recorded([40.0], seconds=2.0, snr_db=40.0)
    hz = np.fft.rfftfreq(recording.shape[1], 1 / RATE)
    factor = (polarity * 10 ** (gain_db / 20))[:, None] * np.exp(-2j * np.pi * hz * delay_s[:, None])
    changed = np.fft.irfft(np.fft.rfft(recording) * factor, recording.shape[1])
    known = replace(plain, gain_db=gain_db, delay_s=delay_s, polarity=polarity)
    (a,) = bin_segments([recording], make_steering(plain, RATE))
    (b,) = bin_segments([changed], make_steering(known, RATE))
    same = set(zip(a.frequency.tolist(), a.time_s.tolist(), strict=True)) & set(
        zip(b.frequency.tolist(), b.time_s.tolist(), strict=True)
    )
    assert len(same) > 0.9 * len(a)
    pick_a, pick_b = (
        np.array([i for i, key in enumerate(zip(x.frequency.tolist(), x.time_s.tolist(), strict=True)) if key in same])
        for x in (a, b)
    )
    agreement = np.abs(np.sum(a.z[pick_a].conj() * b.z[pick_b], axis=1))
    assert np.quantile(agreement, 0.05) > 0.98


def test_steering_vectors_are_those_of_noise_free_bins() -> None:
    recording = recorded([40.0], seconds=2.0, snr_db=120.0)
    steering = make_steering(circle(), RATE)
    (bins,) = bin_segments([recording], steering)
    u = np.array([[np.cos(np.radians(40.0)), np.sin(np.radians(40.0)), 0.0]])
    waves = steering.waves(u)[:, 0]
    q = np.abs(np.sum(bins.z.conj() * waves[bins.frequency], axis=1)) ** 2
    assert np.median(q) > 0.999


def test_a_room_s_answer_is_not_taken() -> None:
    """After a burst, what decays more slowly than 60 dB in `DECAY_S` is taken, what decays faster is not."""
    rng = np.random.default_rng(0)
    t = np.arange(3 * RATE) / RATE
    quiet = 1e-4 * rng.standard_normal((7, len(t)))
    for decay_s, taken in ((0.6 * DECAY_S, False), (20 * DECAY_S, True)):
        level = np.where(t < 1.0, 0.0, 10 ** (-3 * (t - 1.0) / decay_s))
        (bins,) = bin_segments([quiet + level * rng.standard_normal((7, len(t)))], make_steering(circle(), RATE))
        at_once = np.mean((bins.time_s > 0.98) & (bins.time_s < 1.06))
        assert at_once > (0.1 if taken else 0.8)
        rate = np.count_nonzero((bins.time_s > 1.1) & (bins.time_s < 1.25)) / len(bins.z)
        assert rate < 0.05 or taken


def test_silence_and_steady_noise_give_next_to_nothing() -> None:
    steering = make_steering(circle(), RATE)
    (bins,) = bin_segments([np.zeros((7, RATE))], steering)
    assert len(bins) == 0 and not bins.loud.any()
    (bins,) = bin_segments([1e-3 * np.random.default_rng(0).standard_normal((7, 4 * RATE))], steering)
    assert len(bins) < 0.002 * len(bins.frame_s) * len(steering.frequency_hz)
    assert bins.loud.mean() < 0.05


def test_the_same_bins_whatever_the_chunks() -> None:
    recording = recorded([40.0, 100.0], seconds=3.0)
    steering = make_steering(circle(), RATE)
    whole = join(list(bin_segments([recording], steering)))
    parts = join(list(bin_segments(np.array_split(recording, 13, axis=1), steering)))
    np.testing.assert_array_equal(whole.frequency, parts.frequency)
    np.testing.assert_allclose(whole.z, parts.z, atol=1e-6)


def test_wide_arrays_use_low_frequencies_only() -> None:
    """A beam must not fall between two points of the grid."""
    assert make_steering(circle(), RATE).frequency_hz[-1] == pytest.approx(5000.0, abs=32.0)
    assert make_steering(circle(radius_m=0.25), RATE).frequency_hz[-1] < 2600.0
