"""Words correct from STOI, and the SII's band importances, against their sources."""

from __future__ import annotations

import pytest

from unmix.metrics.bands import BAND_CENTRES_HZ, BAND_IMPORTANCE
from unmix.metrics.words import words_dantale_percent, words_ieee_percent


@pytest.mark.parametrize(
    ("stoi", "ieee", "dantale"),
    [(0.5, 27.95, 54.80), (0.7, 92.77, 95.69)],
)
def test_words_correct(stoi: float, ieee: float, dantale: float) -> None:
    """Taal et al. 2011: 100/(1 + exp(a d + b)) with a = -17.4906, b = 9.6921 and a = -14.5435, b = 7.0792."""
    assert words_ieee_percent(stoi) == pytest.approx(ieee, abs=0.005)
    assert words_dantale_percent(stoi) == pytest.approx(dantale, abs=0.005)


def test_band_importances() -> None:
    """ANSI S3.5-1997, table 3: eighteen third octaves, a sum of 1, most at 2 kHz (values from memory)."""
    assert len(BAND_IMPORTANCE) == len(BAND_CENTRES_HZ) == 18
    assert sum(BAND_IMPORTANCE) == pytest.approx(1.0, abs=1e-9)
    assert BAND_CENTRES_HZ[BAND_IMPORTANCE.index(max(BAND_IMPORTANCE))] == 2000
