"""STOI and ESTOI: undefined figures, shared references, long signals. Values are checked in tests/outside."""

from __future__ import annotations

import numpy as np
import pytest

import unmix.metrics.intelligibility as module
from tests.conftest import speech
from unmix.metrics import resampling
from unmix.metrics.intelligibility import SpeechReference


def test_the_reference_itself_is_fully_intelligible() -> None:
    x = speech("card-reader", 3.0)
    heard = SpeechReference(x, 16000).compare(x)
    assert heard.stoi == pytest.approx(1.0, abs=1e-12)
    assert heard.estoi == pytest.approx(1.0, abs=1e-12)


def test_level_does_not_matter(rng: np.random.Generator) -> None:
    x = speech("card-reader", 3.0)
    y = x + 0.03 * rng.standard_normal(x.size)
    reference = SpeechReference(x, 16000)
    assert reference.compare(1e-3 * y).stoi == pytest.approx(reference.compare(y).stoi, abs=1e-9)


@pytest.mark.parametrize(
    ("reference", "signal", "reason"),
    [
        (0.0, 1.0, "the reference is silent"),
        (1.0, 0.0, "the estimate is silent"),
        (np.nan, 1.0, "the reference holds NaN or infinite samples"),
        (1.0, np.nan, "the estimate holds NaN or infinite samples"),
    ],
)
def test_signals_that_cannot_be_used(reference: float, signal: float, reason: str) -> None:
    x = speech("card-reader", 3.0)
    heard = SpeechReference(reference * x, 16000).compare(signal * x)
    assert (heard.stoi, heard.estoi, heard.undefined) == (None, None, reason)


def test_a_stretch_gated_to_silence_counts_as_unintelligible() -> None:
    x = speech("novel-reader", 6.0)
    gated = np.where(np.arange(x.size) < x.size // 2, x, 0.0)
    heard = SpeechReference(x, 16000).compare(gated)
    assert heard.stoi is not None
    assert 0.4 < heard.stoi < 0.6
    assert SpeechReference(x, 16000).compare(gated) == heard


def test_working_in_pieces_changes_nothing(rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch) -> None:
    x = speech("novel-reader", 6.0)
    y = x + 0.03 * rng.standard_normal(x.size)
    whole = SpeechReference(x, 16000).compare(y)
    monkeypatch.setattr(module, "CHUNK", 50)
    monkeypatch.setattr(module, "SEGMENTS", 37)
    monkeypatch.setattr(resampling, "KEEP", 0)
    pieces = SpeechReference(x, 16000).compare(y)
    assert pieces.stoi == pytest.approx(whole.stoi, abs=1e-12)
    assert pieces.estoi == pytest.approx(whole.estoi, abs=1e-12)


def test_pauses_that_are_jumped_over_change_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    x = np.concatenate([speech("card-reader", 3.0), np.zeros(3 * 16000), speech("novel-reader", 3.0)])
    y = x + 0.2 * np.roll(x, 4000)
    jumped = SpeechReference(x, 16000).compare(y)
    monkeypatch.setattr(module, "PAUSE", x.size)
    assert SpeechReference(x, 16000).compare(y) == jumped


def test_mixtures_are_judged_as_their_sum_is(rng: np.random.Generator) -> None:
    s, n = speech("novel-reader", 6.0), speech("card-reader", 6.0)
    reference = SpeechReference(s, 16000)
    mixtures = reference.mixed(s, n)
    for gain in (0.0, 0.03, -0.4, 1.0, 25.0):
        assert mixtures.stoi(gain) == pytest.approx(reference.compare(s + gain * n).stoi, abs=1e-10)
