"""STOI and ESTOI against pystoi (after Taal et al. 2011, Jensen and Taal 2016)."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from tests.conftest import speech
from unmix.metrics.intelligibility import SpeechReference


@pytest.mark.parametrize("sample_rate", [8000, 10000, 16000, 44100])
@pytest.mark.parametrize("interferer_db", [-20.0, 0.0, 10.0])
def test_another_talker(sample_rate: int, interferer_db: float) -> None:
    from pystoi import stoi

    x = speech("robot-commands", 4.0, sample_rate)
    y = x + 10.0 ** (interferer_db / 20.0) * speech("novel-reader", 4.0, sample_rate)
    heard = SpeechReference(x, sample_rate).compare(y)
    assert heard.stoi == pytest.approx(stoi(x, y, sample_rate), abs=1e-9)
    assert heard.estoi == pytest.approx(stoi(x, y, sample_rate, extended=True), abs=1e-9)


@pytest.mark.parametrize("samples", [160000, 47999, 48000, 48001])
def test_noise_at_lengths_that_end_between_frames(rng: np.random.Generator, samples: int) -> None:
    from pystoi import stoi

    x = speech("card-reader", samples / 16000)
    y = x + 0.02 * rng.standard_normal(samples)
    heard = SpeechReference(x, 16000).compare(y)
    assert heard.stoi == pytest.approx(stoi(x, y, 16000), abs=1e-9)
    assert heard.estoi == pytest.approx(stoi(x, y, 16000, extended=True), abs=1e-9)


def test_where_pystoi_gives_up_the_figure_is_undefined(rng: np.random.Generator) -> None:
    from pystoi import stoi

    x = speech("card-reader", 3.0)[:6000]
    y = x + 0.02 * rng.standard_normal(6000)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        assert stoi(x, y, 16000) == 1e-5
    heard = SpeechReference(x, 16000).compare(y)
    assert heard.stoi is None
    assert str(heard.undefined).startswith("too short")
