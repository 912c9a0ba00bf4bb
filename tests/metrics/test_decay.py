import numpy as np
import pytest

from unmix.metrics.decay import decay_curve_db, direct_onset, measure_decay

RATE = 16000


def decaying(t60_s: float, *, length_s: float = 1.0, seed: int = 0) -> np.ndarray:
    """Random signs under an exact exponential: its energy curve is known, not just its mean."""
    time = np.arange(round(length_s * RATE)) / RATE
    return np.random.default_rng(seed).choice([-1.0, 1.0], time.size) * 10.0 ** (-3.0 * time / t60_s)


@pytest.mark.parametrize("t60_s", [0.2, 0.5])
def test_t20_of_decaying_noise(t60_s: float) -> None:
    decay = measure_decay(decaying(t60_s), RATE, onset=0)
    assert decay.t20_s == pytest.approx(t60_s, rel=1e-3)
    assert not decay.behind_direct


def test_direct_to_reverberant_ratio() -> None:
    response = np.zeros(RATE)
    response[100], response[400] = 1.0, 0.5
    decay = measure_decay(response, RATE)
    assert decay.onset_s == 100 / RATE
    assert decay.drr_db == pytest.approx(6.0206, abs=1e-4)


def test_a_strong_direct_sound_is_not_read_as_decay() -> None:
    tail = decaying(0.4)
    response = np.concatenate([np.zeros(50), [30.0 * np.sqrt(np.sum(tail**2))], np.zeros(80), tail])
    decay = measure_decay(response, RATE)
    assert decay.behind_direct
    assert decay.t20_s == pytest.approx(0.4, rel=1e-3)


def test_the_onset_is_the_first_strong_peak_and_not_the_strongest() -> None:
    response = np.zeros(500)
    response[90:93] = 0.3, 0.7, 0.2
    response[200] = -1.0
    assert direct_onset(response) == 91


def test_undefined_with_a_reason() -> None:
    assert measure_decay(np.zeros(100), RATE).undefined == {
        "t20_s": "the response is silent",
        "drr_db": "the response is silent",
    }
    alone = np.zeros(100)
    alone[10] = 1.0
    assert measure_decay(alone, RATE).undefined["t20_s"] == "nothing follows the direct sound"
    noisy = decaying(0.3) + 0.1 * np.random.default_rng(1).standard_normal(RATE)
    assert "noise floor" in measure_decay(noisy, RATE, onset=0).undefined["t20_s"]


def test_the_curve_of_silence_and_of_a_pulse() -> None:
    assert np.all(np.isneginf(decay_curve_db(np.zeros(3))))
    assert np.array_equal(decay_curve_db(np.array([0.0, 1.0, 0.0])), [0.0, 0.0, -np.inf])
