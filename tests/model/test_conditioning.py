"""What the model can resolve at which frequency."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle
from unmix.model.conditioning import condition
from unmix.model.delays import paths_from_bearings
from unmix.model.differentiators import choose_differentiators
from unmix.model.mixing import Mixing, mixing_from_paths
from unmix.model.prior import make_prior

RATE = 16000
CHOSEN = choose_differentiators(6, family="least-squares", error_db=-50, band_edge=0.8)


def model(radius_m: float, azimuths_deg: list[float]) -> Mixing:
    return mixing_from_paths(paths_from_bearings(circle(radius_m=radius_m), np.radians(azimuths_deg)), CHOSEN, RATE)


def test_one_talker_has_the_gain_of_averaging() -> None:
    mixing = model(0.04, [10.0])
    found = condition(mixing, make_prior("flat", 1e-9, mixing, RATE), RATE, top_hz=6000)
    assert found.noise_gain_db == pytest.approx(-10 * np.log10(7), abs=0.05)
    assert found.worst_condition == pytest.approx(1.0)


def test_lowest_usable_frequency_falls_with_aperture_and_spacing() -> None:
    def lowest(radius_m: float, azimuths_deg: list[float]) -> float:
        mixing = model(radius_m, azimuths_deg)
        found = condition(mixing, make_prior("flat", 1e-6, mixing, RATE), RATE, points=2000).lowest_usable_hz
        assert found is not None
        return found

    small, large = lowest(0.02, [0.0, 75.0]), lowest(0.08, [0.0, 75.0])
    # The small singular value grows as omega times the aperture: four times as wide, a quarter of the frequency.
    assert small / large == pytest.approx(4.0, rel=0.15)
    assert lowest(0.04, [0.0, 20.0]) > 2 * lowest(0.04, [0.0, 75.0])


def test_the_second_singular_value_vanishes_at_zero_frequency() -> None:
    found = condition(model(0.04, [0.0, 75.0]), make_prior("flat", 1e-6, model(0.04, [0.0, 75.0]), RATE), RATE)
    s, f = found.singular_values[:, 1], found.frequencies_hz
    low = (f > 10) & (f < 300)
    slope = np.polyfit(np.log(f[low]), np.log(s[low]), 1)[0]
    assert slope == pytest.approx(1.0, abs=0.02)


def test_the_prior_bounds_the_noise_gain() -> None:
    mixing = model(0.04, [0.0, 75.0])
    weak = condition(mixing, make_prior("flat", 1e-8, mixing, RATE), RATE)
    strong = condition(mixing, make_prior("flat", 1e-2, mixing, RATE), RATE)
    assert strong.noise_gain_db.max() < weak.noise_gain_db.max() - 20
    assert weak.noise_gain_db.max() <= weak.unprimed_gain_db.max() + 1e-6
