"""Each statement of `unmix.limits`, checked numerically."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest

from tests.conftest import circle
from unmix.array import Array
from unmix.limits.expansion import remainder_bound_db
from unmix.limits.ladder import noise_gain, responses
from unmix.model.delays import paths_from_bearings
from unmix.model.mixing import taylor_terms
from unmix.physics import speed_of_sound

C = speed_of_sound()
LINE = Array.from_positions([[0.0, y, 0.0] for y in (-0.05, -0.02, 0.0, 0.03, 0.05)], reference_channel=2)


def two(separation_deg: float) -> np.ndarray:
    return np.radians([[10.0, 10.0 + separation_deg]])


@pytest.mark.parametrize(("microphones", "order"), [(5, 2), (12, 4), (40, 6)])
def test_one_snapshot_leaves_k_minus_one_combinations_free(microphones: int, order: int) -> None:
    tau = paths_from_bearings(circle(microphones), np.radians([20.0, 80.0, 170.0])).delay_s * 16000
    snapshot = np.concatenate([taylor_terms(row, order) for row in tau], axis=1)
    zeroth = snapshot[:, :: order + 1]
    assert np.linalg.matrix_rank(zeroth) == 1
    free = np.zeros(snapshot.shape[1])
    free[0], free[order + 1] = 1.0, -1.0
    assert np.abs(snapshot @ free).max() == 0.0


def test_the_gram_matrix_of_two_talkers() -> None:
    array, f = circle(6), np.array([700.0])
    h = responses(array, two(50.0), f)[0, 0]
    rho = abs(np.mean(h[:, 0] * h[:, 1].conj()))
    assert np.linalg.eigvalsh(h.conj().T @ h) == pytest.approx(7.0 * np.array([1 - rho, 1 + rho]), rel=1e-9)
    assert noise_gain(h)[0] == pytest.approx(1.0 / (7.0 * (1.0 - rho**2)), rel=1e-9)


@pytest.mark.parametrize("separation_deg", [10.0, 60.0, 180.0])
def test_how_the_smallest_singular_value_and_the_noise_gain_start(separation_deg: float) -> None:
    radius, f = 0.04, 40.0
    array = circle(6, radius, centre=False)
    h = responses(array, two(separation_deg), np.array([f]))[0, 0]
    std = math.sqrt(2.0) * radius * math.sin(math.radians(separation_deg) / 2.0) / C
    delay = paths_from_bearings(array, two(separation_deg)[0]).delay_s
    assert np.std(delay[0] - delay[1]) == pytest.approx(std, rel=1e-9)
    omega = 2.0 * math.pi * f
    # The next term is (omega tau)^2 / 3, half a per mille here.
    assert np.linalg.svd(h, compute_uv=False)[1] == pytest.approx(math.sqrt(3.0) * omega * std, rel=2e-3)
    assert noise_gain(h)[0] == pytest.approx(1.0 / (6.0 * omega**2 * std**2), rel=4e-3)


def lowest(array: Array, separation_deg: float, snr_db: float, required_db: float = 10.0) -> float:
    f = np.arange(5.0, 3000.0, 0.5)
    gain = noise_gain(responses(array, two(separation_deg), f)[0]).max(axis=-1)
    return float(f[np.argmax(10.0 * np.log10(gain) <= snr_db - required_db)])


def test_the_lowest_usable_frequency_falls_with_aperture_microphones_and_snr() -> None:
    base = lowest(circle(6, 0.03, centre=False), 40.0, 30.0)
    ratio = math.sqrt(10.0 ** (-20.0 / 10.0) / 6.0)
    std = math.sqrt(2.0) * 0.03 * math.sin(math.radians(20.0)) / C
    assert base == pytest.approx(ratio / (2.0 * math.pi * std), rel=0.01)
    assert lowest(circle(6, 0.06, centre=False), 40.0, 30.0) == pytest.approx(base / 2.0, rel=0.01)
    assert lowest(circle(24, 0.03, centre=False), 40.0, 30.0) == pytest.approx(base / 2.0, rel=0.01)
    assert lowest(circle(6, 0.03, centre=False), 40.0, 30.0 + 20 * math.log10(2)) == pytest.approx(base / 2, rel=0.01)


@pytest.mark.parametrize(("array", "talkers", "power"), [(LINE, 2, 1), (LINE, 3, 2), (LINE, 4, 3), (circle(6), 3, 1)])
def test_how_resolution_starts_with_several_talkers(array: Array, talkers: int, power: int) -> None:
    azimuth = np.radians([[5.0, 50.0, 100.0, 150.0][:talkers]])
    f = np.array([200.0, 400.0])
    s = np.linalg.svd(responses(array, azimuth, f)[0], compute_uv=False)[:, -1]
    assert math.log2(s[1] / s[0]) == pytest.approx(power, abs=0.05)


def expanded(array: Array, azimuth: np.ndarray, f: float, order: int) -> np.ndarray:
    """H with every delay expanded about the sample itself."""
    tau = paths_from_bearings(array, azimuth).delay_s
    powers = (2j * np.pi * f) ** np.arange(order + 1)
    return np.asarray((taylor_terms(tau, order) * powers).sum(axis=-1).T)


@pytest.mark.parametrize("order", [0, 1, 2, 3])
def test_order_bounds_how_many_talkers_on_a_line_can_be_told_apart(order: int) -> None:
    for talkers in (1, 2, 3, 4):
        h = expanded(LINE, np.radians([5.0, 50.0, 100.0, 150.0][:talkers]), 1500.0, order)
        assert np.linalg.matrix_rank(h, tol=1e-9) == min(talkers, order + 1)


def test_order_does_not_move_the_lowest_usable_frequency_but_the_highest() -> None:
    array, azimuth = circle(6), two(60.0)[0]

    def leakage_db(f: float, order: int) -> float:
        exact = responses(array, azimuth[None], np.array([f]))[0, 0]
        wrong = np.linalg.pinv(expanded(array, azimuth, f, order)) @ exact
        return 20.0 * math.log10(abs(wrong[0, 1]))

    for order in (1, 2, 3, 4, 6):
        # Odd and even remainders of this point-symmetric array come in pairs: 12 dB per octave for every two orders.
        fall = leakage_db(100.0, order) - leakage_db(50.0, order)
        assert fall == pytest.approx(12.04 * math.ceil(order / 2), abs=1.0)
        assert leakage_db(50.0, order) < -80.0
    highest = [next(f for f in np.arange(100.0, 20000.0, 50.0) if leakage_db(f, n) > -40.0) for n in (2, 4, 6, 8)]
    assert all(a < b for a, b in itertools.pairwise(highest))
    assert highest[-1] > 4.0 * highest[0]


@pytest.mark.parametrize("order", [1, 4, 6, 9])
@pytest.mark.parametrize("x", [0.1, 0.7, math.pi / 2.0])
def test_the_remainder(order: int, x: float) -> None:
    left = abs(np.exp(-1j * x) - sum((-1j * x) ** n / math.factorial(n) for n in range(order + 1)))
    if left > 1e-13:
        bound = remainder_bound_db(order, x)
        assert bound - 1.5 < 20.0 * math.log10(left) < bound + 1e-3
