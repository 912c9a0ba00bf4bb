"""Listeners: who is screened, what their means are, and that a known truth is found."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.metrics.listening import analyse_listening, pair_scores

CONDITIONS = ["full", "microphone", "model", "reference"]


def panel(listeners: int, trials: int = 6, seed: int = 3) -> np.ndarray:
    """Scores of listeners who hear full 10 points above model, each with a bias of their own."""
    rng = np.random.default_rng(seed)
    truth = np.array([70.0, 20.0, 60.0, 100.0])
    bias = rng.normal(0.0, 6.0, (listeners, 1, 1)) * np.array([1.0, 1.0, 1.0, 0.0])
    noise = rng.normal(0.0, 5.0, (listeners, trials, 4)) * np.array([1.0, 1.0, 1.0, 0.0])
    return np.clip(truth + bias + noise, 0.0, 100.0)


def test_the_truth_is_found() -> None:
    found = analyse_listening(panel(16), [f"l{i}" for i in range(16)], CONDITIONS)
    assert [c.name for c in found.conditions] == ["reference", "full", "model", "microphone"]
    assert [c.group for c in found.conditions] == [1, 2, 3, 4]
    full = found.conditions[1]
    assert full.interval.low is not None and full.interval.high is not None
    assert full.interval.low < 70.0 < full.interval.high
    assert full.median == pytest.approx(70.0, abs=4.0)
    assert found.warnings == ()


def test_who_misses_the_hidden_reference_is_left_out() -> None:
    scores = panel(8)
    scores[2, :2, 3] = 60.0  # 2 of 6 trials, over 15 %
    scores[5, 0, 3] = 60.0  # 1 of 6 is over 15 %, too
    scores[6, :2, 1] = 95.0
    found = analyse_listening(scores, list("abcdefgh"), CONDITIONS)
    assert [listener.name for listener in found.listeners if not listener.kept] == ["c", "f", "g"]
    assert found.listeners[2].reason == "scored the hidden reference below 90 in 2 of 6 trials"
    assert "hidden microphone above 90" in found.listeners[6].reason
    everybody = analyse_listening(scores, list("abcdefgh"), CONDITIONS, screen=False)
    assert all(listener.kept for listener in everybody.listeners)


def test_one_miss_in_seven_is_forgiven() -> None:
    scores = panel(6, trials=7)
    scores[0, 3, 3] = 10.0  # 14 %
    assert analyse_listening(scores, list("abcdef"), CONDITIONS).listeners[0].kept


def test_nobody_left_is_said() -> None:
    scores = panel(2)
    scores[:, :, 3] = 0.0
    found = analyse_listening(scores, ["a", "b"], CONDITIONS)
    assert found.warnings == ("no listener passed the screening: nothing can be said",)
    assert all(c.interval.mean is None and c.group == 0 for c in found.conditions)


def test_missing_answers_do_not_count() -> None:
    scores = panel(3)
    scores[0, :, 0] = np.nan
    scores[1, 1:, 0] = np.nan
    found = analyse_listening(scores, list("abc"), CONDITIONS)
    full = next(c for c in found.conditions if c.name == "full")
    assert full.interval.scenes == 2
    assert full.interval.mean == pytest.approx((scores[1, 0, 0] + scores[2, :, 0].mean()) / 2)
    assert "too few" in found.warnings[0]


def test_pairs_become_percentages() -> None:
    won = pair_scores({("full", "model"): 1.0, ("full", "reference"): 0.0, ("model", "reference"): 0.5}, CONDITIONS)
    assert won[[0, 2, 3]] == pytest.approx([50.0, 25.0, 75.0])
    assert np.isnan(won[1])
