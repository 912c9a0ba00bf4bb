"""Cramer-Rao bounds of bearings against published closed forms.

P. Stoica and A. Nehorai, "MUSIC, maximum likelihood, and Cramer-Rao bound", IEEE Trans. Acoust. Speech Signal Process.
37, 1989 (deterministic signals), and "Performance study of conditional and unconditional direction-of-arrival
estimation", ibid. 38, 1990 (random signals). For one source and a line of M microphones spaced by d, broadside,

    var = 6 c^2 / ((2 pi f d)^2 N M (M^2 - 1) snr)   times   1 (deterministic)   or   1 + 1/(M snr) (random).
"""

from __future__ import annotations

from typing import Literal

import numpy as np
import pytest

from unmix.bearings.bound import white_noise_bound


@pytest.mark.parametrize(("signals", "expected_deg"), [("random", 0.3167), ("deterministic", 0.3128)])
def test_four_microphones_at_broadside(signals: Literal["random", "deterministic"], expected_deg: float) -> None:
    """Line of 4, 5 cm spacing, 2 kHz, 10 dB, 100 snapshots, c = 343 m/s."""
    spacing_m, speed_m_s, frequency_hz, snapshots = 0.05, 343.0, 2000.0, 100
    position = np.arange(4) * spacing_m
    tau, slope = np.zeros((1, 4)), (-position / speed_m_s).reshape(1, 4, 1)
    bound = white_noise_bound(
        tau, slope, np.array([frequency_hz]), np.array([[[1.0 + 0j]]]), 0.1, snapshots, signals=signals
    )
    got = float(np.degrees(np.sqrt(bound[0, 0])))
    assert got == pytest.approx(expected_deg, abs=5e-5)
    variance = 6 * speed_m_s**2 / ((2 * np.pi * frequency_hz * spacing_m) ** 2 * snapshots * 4 * 15 * 10.0)
    variance *= 1.0 + 1.0 / 40.0 if signals == "random" else 1.0
    assert got == pytest.approx(np.degrees(np.sqrt(variance)), rel=1e-9)
