"""Sound in air and the average voice against published figures."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.physics import (
    SPEECH_SPECTRUM_DB,
    SPEECH_SPECTRUM_HZ,
    air_absorption_db_per_m,
    diffuse_coherence,
    speed_of_sound,
)


@pytest.mark.parametrize(("temperature_c", "speed_m_s"), [(0.0, 331.29), (20.0, 343.2), (25.0, 346.11)])
def test_speed_of_sound(temperature_c: float, speed_m_s: float) -> None:
    """ISO 9613-1:1993, annex A: 343.2 * sqrt(T / 293.15); the figures are given to two decimals."""
    assert speed_of_sound(temperature_c) == pytest.approx(speed_m_s, abs=0.005)


@pytest.mark.parametrize(("band", "db_per_km"), [(0, 4.66), (3, 9.86)])
def test_air_absorption(band: int, db_per_km: float) -> None:
    """ISO 9613-1:1993, table 1, 20 C and 50 %: 1 kHz 4.66 dB/km, 2 kHz 9.86 dB/km.

    The table is for exact midbands 1000 * 10^(k/10) Hz and gives three digits.
    """
    midband_hz = 1000.0 * 10.0 ** (band / 10.0)
    absorption = float(air_absorption_db_per_m(midband_hz, temperature_c=20.0, humidity_percent=50.0))
    assert 1000.0 * absorption == pytest.approx(db_per_km, abs=0.005)


def test_coherence_of_a_diffuse_field() -> None:
    """Cook et al. 1955; Kuttruff, Room Acoustics: sin(kd)/(kd); 5 cm at 1 kHz and c = 343 m/s: 0.8659."""
    assert float(diffuse_coherence(0.05, 1000.0, 343.0)) == pytest.approx(0.8659, abs=5e-5)


def test_first_zero_of_the_coherence() -> None:
    """The same: the first zero lies where the distance is half a wavelength, for 5 cm at 3,430 Hz."""
    around = diffuse_coherence(0.05, [3420.0, 3430.0, 3440.0], 343.0)
    assert around[0] > 0.0 > around[2]
    assert abs(float(around[1])) < 1e-12


def test_coherence_is_the_mean_over_all_directions() -> None:
    """Its definition (Cook et al. 1955): cos(k d cos(theta)) averaged over the sphere, here by Gauss-Legendre."""
    nodes, weights = np.polynomial.legendre.leggauss(60)
    for distance_m, frequency_hz in [(0.03, 500.0), (0.08, 2000.0), (0.2, 5000.0)]:
        k = 2.0 * np.pi * frequency_hz / 343.2
        mean = 0.5 * np.sum(weights * np.cos(k * distance_m * nodes))
        assert float(diffuse_coherence(distance_m, frequency_hz)) == pytest.approx(mean, abs=1e-9)


def test_standard_speech_spectrum() -> None:
    """ANSI S3.5-1997, table 3, normal vocal effort, one-third octaves; values from memory.

    Its overall level, the power sum of level plus 10 log10(bandwidth), is 62.35 dB SPL (from memory too); exact and
    nominal bandwidths differ by up to 0.1 dB, and the bands below 160 Hz are left out.
    """
    known = {160: 32.41, 500: 34.27, 1000: 25.01, 2000: 17.32, 4000: 9.33, 8000: 1.13}
    for frequency_hz, level_db in known.items():
        assert SPEECH_SPECTRUM_DB[frequency_hz == SPEECH_SPECTRUM_HZ] == [level_db]
    bandwidth_hz = SPEECH_SPECTRUM_HZ * (2.0 ** (1 / 6) - 2.0 ** (-1 / 6))
    overall_db = 10.0 * np.log10(np.sum(bandwidth_hz * 10.0 ** (SPEECH_SPECTRUM_DB / 10.0)))
    assert overall_db == pytest.approx(62.35, abs=0.3)
