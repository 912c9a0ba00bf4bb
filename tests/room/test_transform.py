"""Analysis and synthesis give the signal back."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.room.stft import Transform
from unmix.settings import TransformSettings


@pytest.mark.parametrize("overlap", [2, 3, 4, 8])
@pytest.mark.parametrize("samples", [1, 500, 2048, 9001])
def test_synthesis_after_analysis_is_the_signal(overlap: int, samples: int, rng: np.random.Generator) -> None:
    settings = TransformSettings(overlap=overlap, precision="double")
    transform = Transform.from_settings(settings, 16000)
    x = rng.standard_normal((2, samples))
    spectra = transform.analyse(x)
    assert spectra.shape == (transform.frame // 2 + 1, 2, transform.frames(samples))
    assert np.abs(transform.synthesise(spectra, samples) - x).max() < 1e-12


def test_single_precision_is_good_to_its_rounding(rng: np.random.Generator) -> None:
    transform = Transform.from_settings(TransformSettings(), 16000)
    x = rng.standard_normal((2, 5000))
    assert np.abs(transform.synthesise(transform.analyse(x), 5000) - x).max() < 1e-5


@pytest.mark.parametrize("rate", [8000, 11025, 44100, 192000])
def test_frames_last_as_long_at_any_rate(rate: int) -> None:
    transform = Transform.from_settings(TransformSettings(), rate)
    assert abs(transform.frame / rate - 0.128) < 0.008
    assert transform.frequencies_hz[-1] == pytest.approx(rate / 2)
