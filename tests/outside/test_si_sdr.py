"""SI-SDR against values that follow from its definition (Le Roux, Wisdom, Erdogan, Hershey 2019, equation 3)."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.metrics.distortion import si_sdr_db


@pytest.mark.parametrize(("level", "expected_db"), [(0.1, 20.0), (0.5, 6.020599913279624), (1.0, 0.0)])
@pytest.mark.parametrize("gain", [1.0, -3.0, 1e-4])
def test_orthogonal_noise_of_equal_power(
    rng: np.random.Generator, level: float, expected_db: float, gain: float
) -> None:
    s, noise = rng.standard_normal((2, 16000))
    noise -= s * (noise @ s) / (s @ s)
    noise *= np.linalg.norm(s) / np.linalg.norm(noise)
    measured, reason = si_sdr_db(gain * (s + level * noise), s)
    assert reason is None
    assert measured == pytest.approx(expected_db, abs=1e-9)
