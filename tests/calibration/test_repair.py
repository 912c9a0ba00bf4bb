"""Samples between samples."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.audio import Samples
from unmix.calibration.clocks import ClockFit, fit_clock
from unmix.calibration.repair import one_clock, warped


@pytest.mark.parametrize("share", [0.05, 0.5, 0.9])
def test_a_tone_between_samples(share: float) -> None:
    omega = share * np.pi
    n = np.arange(2000)
    at = 100.0 + np.arange(1500) * 1.00003 + 0.37
    error = warped(np.sin(omega * n + 0.3), at) - np.sin(omega * at + 0.3)
    assert 20 * np.log10(np.abs(error).max()) < -80.0


def test_beyond_the_ends_there_is_nothing() -> None:
    assert np.all(warped(np.ones(100), np.array([-200.0, 300.0])) == 0.0)


def test_what_agrees_is_copied_bit_by_bit() -> None:
    y = np.random.default_rng(0).standard_normal((3, 100000))
    out = np.concatenate(list(one_clock(Samples(y, 16000), [None, None, None], 0)), axis=1)
    assert np.array_equal(out, y)


def test_a_constant_offset_is_taken_out() -> None:
    y = np.random.default_rng(1).standard_normal((2, 40000))
    y[1] = np.roll(y[0], 160)
    clock = ClockFit(0.01, 0.0, 0.0, 0.1, 1, 1.0, 5, 1.0)
    out = np.concatenate(list(one_clock(Samples(y, 16000), [None, clock], 0)), axis=1)
    assert np.abs(out[1, :39000] - out[0, :39000]).max() < 1e-12


def test_the_line_through_the_delays_ignores_wrong_chunks() -> None:
    rng = np.random.default_rng(2)
    t = np.arange(30) * 2.0
    d = 3e-3 + 20e-6 * (t - 29.0) + 1e-6 * rng.standard_normal(30)
    d[[4, 17]] = 0.5
    peak = np.full(30, 20.0)
    peak[9] = 1.0
    fit = fit_clock(t, d, -peak)
    assert fit is not None
    assert fit.drift_ppm == pytest.approx(20.0, abs=4 * fit.drift_std_ppm)
    assert fit.drift_std_ppm < 0.1 and fit.sign == -1 and fit.chunks == 29
    assert fit_clock(t, d, np.zeros(30)) is None
