import numpy as np
import pytest

from unmix.render.pulses import BAND_EDGE, LEAD, pulse_train


def spectrum_error_db(response: np.ndarray, delays: np.ndarray, amplitudes: np.ndarray) -> float:
    """Largest error within the band, relative to the sum of amplitudes, against the exponentials themselves."""
    length = 4 * len(response)
    omega = 2.0 * np.pi * np.arange(length // 2 + 1) / length
    band = omega < BAND_EDGE * np.pi
    truth = np.exp(-1j * np.outer(omega[band], delays + LEAD)) @ amplitudes
    error = np.abs(np.fft.rfft(response, length)[band] - truth).max()
    return float(20.0 * np.log10(error / np.abs(amplitudes).sum()))


@pytest.mark.parametrize("delay", [0.0, 0.5, 1.0 / 16.0, 17.3, 39.9999])
def test_a_delay_of_any_fraction_is_exact_within_the_band(delay: float) -> None:
    delays, amplitudes = np.array([delay]), np.array([1.0])
    assert spectrum_error_db(pulse_train(delays, amplitudes, 40), delays, amplitudes) < -105.0


def test_many_pulses_sum_up() -> None:
    rng = np.random.default_rng(3)
    delays, amplitudes = rng.uniform(0.0, 200.0, 500), rng.standard_normal(500)
    assert spectrum_error_db(pulse_train(delays, amplitudes, 200), delays, amplitudes) < -105.0


def test_what_two_delays_share_cancels_beyond_the_band_too() -> None:
    # Up to the Nyquist frequency two responses differ by their delay alone, which is all that separation relies on.
    late, early = (pulse_train(np.array([d]), np.ones(1), 40) for d in (20.37, 20.0))
    omega = np.fft.rfftfreq(4096) * 2.0 * np.pi
    late_f, early_f = np.fft.rfft(late, 4096), np.fft.rfft(early, 4096)
    assert 20.0 * np.log10(np.abs(late_f - early_f * np.exp(-0.37j * omega)).max()) < -100.0


def test_pulses_outside_are_left_out() -> None:
    inside = pulse_train(np.array([3.0]), np.ones(1), 10)
    both = pulse_train(np.array([3.0, 12.0, -1.0]), np.ones(3), 10)
    assert np.array_equal(inside, both)


def test_nothing_comes_of_no_pulses() -> None:
    assert not pulse_train(np.zeros(0), np.zeros(0), 10).any()
