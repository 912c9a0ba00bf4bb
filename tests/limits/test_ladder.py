"""Ladder, usable bands, ambiguity, orders, shapes and sweep against what is known of simple arrays."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from tests.conftest import circle
from unmix.array import Array
from unmix.errors import InputError
from unmix.limits.ambiguity import ambiguity_hz, mirror_pairs
from unmix.limits.expansion import order_needed, orders_needed
from unmix.limits.ladder import best_snr_db, climb, noise_gain, responses, third_octaves, usable_band
from unmix.limits.shapes import HEAD_WIDTH_M, make_shape, scaled
from unmix.limits.sweep import sweep

BANDS = third_octaves(50.0, 7200.0)


def test_third_octaves_are_the_exact_midbands() -> None:
    assert BANDS[np.argmin(np.abs(BANDS - 1000))] == 1000.0
    assert BANDS[1:] / BANDS[:-1] == pytest.approx(2.0 ** (1 / 3))
    assert BANDS[0] / 2 ** (1 / 6) >= 50.0 and BANDS[-1] * 2 ** (1 / 6) <= 7200.0


def test_orthogonal_talkers_gain_by_all_microphones() -> None:
    """Two microphones, talkers at either end: at d = lambda / 4 the columns are orthogonal, and noise falls by 3 dB."""
    d = 343.2 / (4.0 * 1000.0)
    pair = Array.from_positions([[d / 2, 0, 0], [-d / 2, 0, 0]])
    h = responses(pair, np.array([[0.0, np.pi]]), np.array([1000.0]))[0, 0]
    assert 10 * np.log10(noise_gain(h)) == pytest.approx([-3.0103, -3.0103], abs=1e-6)
    assert np.linalg.svd(h, compute_uv=False) == pytest.approx([np.sqrt(2), np.sqrt(2)])


def test_closer_talkers_cost_more_and_start_higher() -> None:
    ladder = climb(circle(6), BANDS)
    low = ladder.noise_gain_db[:, BANDS < 1500]
    assert np.all(np.diff(low, axis=0) < 0.0)
    assert np.all(np.diff(ladder.best_snr_db) > 0.0)
    starts = [usable_band(BANDS, row, 30.0).lowest_hz for row in ladder.noise_gain_db]
    assert all(a is not None and b is not None and a >= b for a, b in itertools.pairwise(starts))
    assert np.all(ladder.worst_gain_db >= ladder.noise_gain_db)


def test_what_cannot_be_used_is_said() -> None:
    assert usable_band(BANDS, np.full(len(BANDS), 25.0), 30.0).lowest_hz is None


def test_best_is_never_worse_than_letting_the_talker_through() -> None:
    f = np.linspace(200.0, 6000.0, 50)
    h = responses(circle(6), np.radians([[0.0, 20.0]]), f)[0]
    free = 10 * np.log10(1.0 / (1e-2 * noise_gain(h).mean(axis=0)))
    assert np.all(best_snr_db(h, np.ones(50), 1e-2) >= free)


def test_half_a_wavelength_is_where_a_line_becomes_ambiguous() -> None:
    line = make_shape("line", 5, 0.2)
    assert ambiguity_hz(line, 20000.0) == pytest.approx(343.2 / (2 * 0.05), rel=0.02)
    assert mirror_pairs(line)
    assert not mirror_pairs(circle(6))
    assert ambiguity_hz(circle(6, 0.01), 8000.0) is None


def test_orders() -> None:
    assert order_needed(np.pi / 2, -40.0) == 6  # -46.6 dB; order 5 leaves -33.6 dB
    needed = orders_needed(circle(6), BANDS, 16000.0, -40.0)
    assert np.all(np.diff(needed.own) >= 0) and np.all(needed.own >= needed.nearest)
    wide = orders_needed(circle(6, 0.4), BANDS, 16000.0, -40.0)
    assert np.array_equal(wide.nearest, needed.nearest)
    assert wide.own[-1] > 3 * needed.own[-1]


def test_shapes() -> None:
    assert make_shape("line", 4, 0.1).aperture_m == pytest.approx(0.1)
    assert make_shape("circle", 6, 0.08).aperture_m == pytest.approx(0.08)
    assert make_shape("circle with centre", 7, 0.08).positions_m[0] == pytest.approx([0, 0, 0])
    pairs = make_shape("head pairs", 4, 0.012)
    assert pairs.aperture_m == pytest.approx(np.hypot(HEAD_WIDTH_M, 0.012))
    assert scaled(pairs, 0.5).aperture_m == pytest.approx(0.5)
    with pytest.raises(InputError, match="takes 4"):
        make_shape("head pairs", 5, 0.01)


def test_more_microphones_and_more_room_between_them_never_hurt_at_low_frequencies() -> None:
    rows = sweep(circle(4), BANDS, shapes=("circle", "head pairs"), numbers=(4, 8), sizes_m=(0.02, 0.04, 0.08))
    circles = {(r.microphones, r.size_m): r for r in rows if r.shape == "circle"}
    for size in (0.02, 0.04, 0.08):
        assert circles[8, size].best_snr_db > circles[4, size].best_snr_db
        assert circles[8, size].tolerance_sir_db == pytest.approx(circles[4, size].tolerance_sir_db + 3.0, abs=0.3)
    assert circles[4, 0.02].lowest_hz == pytest.approx(2 * circles[4, 0.04].lowest_hz)
    assert sum(r.shape == "yours" for r in rows) == 3
    assert sum(r.shape == "head pairs" for r in rows) == 3
