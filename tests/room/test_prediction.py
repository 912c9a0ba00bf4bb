"""Late reverberation predicted and subtracted: whole stretches and frame by frame."""

from __future__ import annotations

import numpy as np

from unmix.room.linalg import power
from unmix.room.prediction import RecursivePrediction, predict, usable_taps
from unmix.settings import PredictionSettings


def reverberant(rng: np.random.Generator, *, frames: int = 600) -> tuple[np.ndarray, np.ndarray]:
    """Two channels of one talker whose frames come back two to four frames later; and without those."""
    f, m = 3, 2
    power_over_time = rng.gamma(0.3, 1.0, frames) + 1e-3
    s = np.sqrt(power_over_time) * (rng.standard_normal((f, frames)) + 1j * rng.standard_normal((f, frames)))
    a = rng.standard_normal((f, m, 1)) + 1j * rng.standard_normal((f, m, 1))
    dry = a * s[:, None]
    wet = dry.copy()
    for lag in (2, 3, 4):
        g = 0.3 * (rng.standard_normal((f, m, m)) + 1j * rng.standard_normal((f, m, m)))
        late = g @ dry
        wet[:, :, lag:] += late[:, :, :-lag]
    wet += 1e-3 * (rng.standard_normal(wet.shape) + 1j * rng.standard_normal(wet.shape))
    return wet, dry


def error_db(z: np.ndarray, dry: np.ndarray) -> float:
    return float(10 * np.log10(power(z - dry).sum() / power(dry).sum()))


def test_what_the_past_brings_back_is_subtracted(rng: np.random.Generator) -> None:
    wet, dry = reverberant(rng)
    z = predict(wet, PredictionSettings(taps=6, delay=2, iterations=3))
    assert error_db(z, dry) < error_db(wet, dry) - 12.0


def test_first_frames_and_direct_sound_are_left_alone(rng: np.random.Generator) -> None:
    wet, _ = reverberant(rng)
    z = predict(wet, PredictionSettings(taps=4, delay=3))
    assert np.array_equal(z[:, :, :3], wet[:, :, :3])


def test_recursive_form_comes_close_to_the_whole_one(rng: np.random.Generator) -> None:
    wet, dry = reverberant(rng, frames=1500)
    step = RecursivePrediction(3, 2, taps=4, delay=2, forgetting=0.999)
    z = np.stack([step.step(wet[:, :, t]) for t in range(wet.shape[2])], axis=2)
    late = slice(750, None)
    assert error_db(z[:, :, late], dry[:, :, late]) < error_db(wet[:, :, late], dry[:, :, late]) - 10.0


def test_recursive_form_survives_silence_and_a_burst(rng: np.random.Generator) -> None:
    step = RecursivePrediction(3, 2, taps=4, delay=2, forgetting=0.9)
    quiet = np.zeros((3, 2), complex)
    for _ in range(2000):
        assert np.array_equal(step.step(quiet), quiet)
    loud = 1e3 * (rng.standard_normal((3, 2, 50)) + 1j * rng.standard_normal((3, 2, 50)))
    out = np.stack([step.step(loud[:, :, t]) for t in range(50)], axis=2)
    assert np.isfinite(out).all()
    assert power(out).mean() < 10.0 * power(loud).mean()


def test_taps_are_as_many_as_frames_support() -> None:
    assert usable_taps(5, 7, 1000) == 5
    assert usable_taps(5, 7, 60) == 2
    assert usable_taps(5, 7, 3) == 1
