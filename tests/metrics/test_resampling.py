"""Resampling in stretches against the published code's own."""

from __future__ import annotations

import numpy as np
import pytest
from pystoi.utils import resample_oct

from unmix.metrics import resampling
from unmix.metrics.resampling import Resampled


@pytest.mark.parametrize("rate", [8000, 10000, 11025, 16000, 44100, 48000, 192000, 16001])
def test_equal_to_the_published_code(rng: np.random.Generator, rate: int) -> None:
    x = rng.standard_normal(rate + 17)
    theirs = x if rate == 10000 else resample_oct(x, 10000, rate)
    ours = Resampled(x, rate, 10000)
    assert ours.size == theirs.size
    assert ours.stretch(0, ours.size) == pytest.approx(theirs, abs=1e-12)


def test_a_stretch_is_had_without_the_rest(rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch) -> None:
    x = rng.standard_normal(20_000).astype(np.float32)
    whole = Resampled(x, 44100, 10000)
    monkeypatch.setattr(resampling, "KEEP", 0)
    pieces = Resampled(x, 44100, 10000)
    for first, last in ((0, 7), (301, 302), (1000, 2777), (whole.size - 3, whole.size)):
        assert pieces.stretch(first, last) == pytest.approx(whole.stretch(first, last), abs=1e-12)
