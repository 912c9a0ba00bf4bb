import numpy as np
import pytest
import scipy.signal

from unmix.physics import diffuse_coherence, pairwise_distances, speech_spectrum_db
from unmix.render.noise import diffuse_noise, sensor_noise

RATE = 16000
MICS = np.array([[0.0, 0.0, 0.0], [0.05, 0.0, 0.0], [0.0, 0.15, 0.0]])


def test_sensor_noise_is_white_and_independent() -> None:
    noise = sensor_noise(np.random.default_rng(0), 3, 100_000)
    assert np.cov(noise) == pytest.approx(np.eye(3), abs=0.02)
    assert np.abs(np.fft.irfft(np.abs(np.fft.rfft(noise[0])) ** 2)[1:100] / 100_000).max() < 0.02


def test_diffuse_noise_has_the_coherence_of_a_diffuse_field() -> None:
    noise = diffuse_noise(np.random.default_rng(1), MICS, 60 * RATE, RATE, speed_m_s=343.2)
    distances = pairwise_distances(MICS)
    for one, other in ((0, 1), (0, 2), (1, 2)):
        frequency, cross = scipy.signal.csd(noise[one], noise[other], RATE, nperseg=1024)
        _, first = scipy.signal.welch(noise[one], RATE, nperseg=1024)
        _, second = scipy.signal.welch(noise[other], RATE, nperseg=1024)
        truth = diffuse_coherence(distances[one, other], frequency, 343.2)
        error = (cross / np.sqrt(first * second) - truth)[4:-4]
        # 1,900 segments: the coherence of a field measured that often scatters by 1/sqrt(1,900) = 0.023.
        assert np.sqrt(np.mean(np.abs(error) ** 2)) < 0.03
        assert np.abs(np.mean(error)) < 0.005
    assert np.sqrt(np.mean(noise**2, axis=1)) == pytest.approx(1.0, rel=0.01)


def test_speech_shaped_noise_has_the_speech_spectrum() -> None:
    noise = diffuse_noise(np.random.default_rng(2), MICS, 30 * RATE, RATE, speed_m_s=343.2, spectrum="speech")
    frequency, power = scipy.signal.welch(noise[0], RATE, nperseg=2048)
    band = (frequency > 100.0) & (frequency < 7500.0)
    apart_db = 10.0 * np.log10(power[band]) - speech_spectrum_db(frequency[band])
    assert np.std(apart_db) < 0.5
    assert np.sqrt(np.mean(noise**2)) == pytest.approx(1.0, rel=0.02)
