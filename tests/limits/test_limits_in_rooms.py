"""Rooms, bounds and tolerances against Monte Carlo and against matrices written out."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle
from unmix.limits.bounds import azimuth_delays, bearing_bounds, signal_bound
from unmix.limits.ladder import group_azimuths, responses
from unmix.limits.rooms import RoomCase, best_filters, best_in_room, critical_distance_m, reverberation_ratio
from unmix.limits.tolerances import Tolerances, first_order_leakage, monte_carlo_leakage
from unmix.physics import diffuse_coherence, pairwise_distances, speed_of_sound


def test_the_critical_distance() -> None:
    """r = 0.057 sqrt(V / T) (Kuttruff)."""
    case = RoomCase(0.5, 60.0, 1.2)
    assert critical_distance_m(case) == pytest.approx(0.057 * np.sqrt(60.0 / 0.5), rel=0.01)
    assert reverberation_ratio(RoomCase(0.5, 60.0, critical_distance_m(case))) == pytest.approx(1.0)


def test_no_filter_is_better_in_the_room() -> None:
    array, f = circle(6), np.array([800.0])
    h = responses(array, np.radians([[0.0, 60.0]]), f)
    gamma = diffuse_coherence(pairwise_distances(array.positions_m), f, speed_of_sound()).astype(complex)
    w, others = best_filters(h, gamma, np.ones(1), 2.0, 1e-3)
    rest = others[0, 0, 0] + 2.0 * gamma[0] + 1e-3 * np.eye(7)

    def ratio(v: np.ndarray) -> float:
        return float(abs(v @ h[0, 0, :, 0]) ** 2 / (v @ rest @ v.conj()).real)

    best = ratio(w[0, 0, 0])
    rng = np.random.default_rng(3)
    for size in (1e-3, 1e-2, 0.1):
        for _ in range(30):
            step = rng.standard_normal(7) + 1j * rng.standard_normal(7)
            assert ratio(w[0, 0, 0] + size * np.linalg.norm(w[0, 0, 0]) * step) < best


def test_the_room_s_figures_are_what_waves_from_all_sides_leave() -> None:
    """2,000 plane waves per talker and frequency in place of the diffuse field."""
    array, f, rho, noise = circle(6), np.array([300.0, 1000.0, 3000.0]), 1.5, 1e-3
    h = responses(array, np.radians([[0.0, 70.0]]), f)
    found = best_in_room(h, array.positions_m, f, np.ones(3), noise, rho)
    gamma = diffuse_coherence(pairwise_distances(array.positions_m), f, speed_of_sound()).astype(complex)
    w, _ = best_filters(h, gamma, np.ones(3), rho, noise)
    rng = np.random.default_rng(4)
    u = rng.standard_normal((2000, 3))
    u /= np.linalg.norm(u, axis=1, keepdims=True)
    waves = np.exp(2j * np.pi * f[:, None, None] / speed_of_sound() * (array.positions_m @ u.T))
    for k in range(2):
        v = w[0, :, k] / np.einsum("fm,fm->f", w[0, :, k], h[0, :, :, k])[:, None]
        field = rho * np.mean(np.abs(np.einsum("fm,fmw->fw", v, waves)) ** 2, axis=1)
        other = np.abs(np.einsum("fm,fm->f", v, h[0, :, :, 1 - k])) ** 2 + field
        unwanted = other + field + noise * np.sum(np.abs(v) ** 2, axis=1)
        gain = 1.0 / (1.0 + unwanted)
        for value, part in ((found.sir_db, other), (found.sinr_db, unwanted)):
            expected = 10 * np.log10(np.sum(gain**2) / np.sum(gain**2 * part))
            assert value[0, k] == pytest.approx(expected, abs=0.25)  # 2,000 draws


def test_less_reverberation_and_more_microphones_help() -> None:
    f, power = np.linspace(100, 7000, 64), np.ones(64)
    azimuth = group_azimuths(np.radians(60.0))

    def sir(microphones: int, rho: float) -> float:
        array = circle(microphones)
        h = responses(array, azimuth, f)
        return float(np.median(best_in_room(h, array.positions_m, f, power, 1e-3, rho).sir_db))

    assert sir(6, 0.1) > sir(6, 1.0) > sir(6, 10.0)
    assert sir(6, 1.0) > sir(3, 1.0)


def test_the_signal_bound_is_the_joint_information_inverted() -> None:
    """All unknowns at once: 40 complex signal samples per talker and two bearings."""
    array, azimuth, f, n, sigma2 = circle(4), np.radians([10.0, 60.0]), 900.0, 40, 1e-2
    delay, slope = azimuth_delays(array, azimuth)
    h = np.exp(-2j * np.pi * f * delay.T)
    d = -2j * np.pi * f * slope.T * h
    rng = np.random.default_rng(5)
    s = (rng.standard_normal((2, n)) + 1j * rng.standard_normal((2, n))) / np.sqrt(2.0)
    # Unit powers, uncorrelated, as the bound assumes.
    s = np.linalg.solve(np.linalg.cholesky(s @ s.conj().T / n), s)
    columns = []
    for t in range(n):
        for k in range(2):
            for unit in (1.0, 1j):
                y = np.zeros((5, n), complex)
                y[:, t] = unit * h[:, k]
                columns.append(y.ravel())
    columns += [(d[:, [k]] * s[k]).ravel() for k in range(2)]
    jacobian = np.stack(columns, axis=1)
    covariance = np.linalg.inv(2.0 / sigma2 * (jacobian.conj().T @ jacobian).real)
    bearings = bearing_bounds(array, azimuth, np.array([f]), np.ones(1), sigma2, n)
    assert bearings is not None
    assert np.diag(covariance)[-2:] == pytest.approx(np.diag(bearings), rel=1e-6)
    signals = np.diag(covariance)[:-2].reshape(n, 2, 2).sum(axis=-1).mean(axis=0)
    bound = signal_bound(array, azimuth, np.array([f]), np.ones(1), sigma2, n)
    assert 10 ** (bound.found_db[0] / 10) == pytest.approx(signals, rel=1e-6)
    assert np.all(bound.found_db > bound.known_db)


def test_tolerances_to_first_order_and_by_drawing_agree() -> None:
    array, f = circle(6), np.array([250.0, 1000.0, 3000.0])
    azimuth = group_azimuths(np.radians(40.0), centres=6)
    h = responses(array, azimuth, f)
    for t in (Tolerances(0.2, 0.0, 0.0), Tolerances(0.0, 0.02, 0.0), Tolerances(0.0, 0.0, 3e-4), Tolerances(0.3, 0.03)):
        first = first_order_leakage(h, f, t)
        drawn = monte_carlo_leakage(h, azimuth, f, t, draws=1500)
        # 1,500 draws of a sum of chi-squares: about 4 %.
        assert 10 * np.log10(drawn / first) == pytest.approx(np.zeros_like(first), abs=0.6)


def test_errors_of_the_reference_alone_leak_nothing_when_they_are_common() -> None:
    array, f = circle(6), np.array([1000.0])
    h = responses(array, np.radians([[0.0, 50.0]]), f)[0]
    scaled = np.linalg.pinv(h) @ (1.2 * np.exp(0.3j) * h)
    assert abs(scaled[0, 0, 1]) < 1e-12
