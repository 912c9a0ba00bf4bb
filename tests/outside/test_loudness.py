"""Loudness against the standard's own figures."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.report.loudness import k_weighting, loudness


def test_filters_are_the_standards() -> None:
    """ITU-R BS.1770-4, tables 1 and 2: coefficients at 48 kHz."""
    shelf, high = k_weighting(48000)
    assert shelf == pytest.approx(
        [1.53512485958697, -2.69169618940638, 1.19839281085285, 1.0, -1.69065929318241, 0.73248077421585], abs=1e-10
    )
    assert high == pytest.approx([1.0, -2.0, 1.0, 1.0, -1.99004745483398, 0.99007225036621], abs=1e-10)


@pytest.mark.parametrize("rate", [16000, 44100, 48000])
def test_a_full_scale_tone_reads_minus_three(rate: int) -> None:
    """ITU-R BS.1770-4: a 0 dB FS sine of 997 Hz in one front channel gives -3.01 LKFS."""
    t = np.arange(5 * rate) / rate
    assert loudness(np.sin(2 * np.pi * 997.0 * t), rate) == pytest.approx(-3.01, abs=0.05)
