"""Cramer-Rao bounds: how they scale, and that they are what differences of the model give."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle
from unmix.bearings.bound import bearing_bound, fisher_information, white_noise_bound
from unmix.errors import UnsolvableError
from unmix.physics import speed_of_sound, unit_vector

C = speed_of_sound()


def delays(azimuths: np.ndarray, elevation: bool = False) -> tuple[np.ndarray, np.ndarray]:
    """tau (K, M) and its derivatives by azimuth, and by elevation if asked: (K, M, d)."""
    p = circle().positions_m
    tau = -unit_vector(azimuths) @ p.T / C
    columns = [-unit_vector(azimuths + np.pi / 2) @ p.T / C]
    if elevation:
        columns.append(np.broadcast_to(-np.array([0.0, 0.0, 1.0]) @ p.T / C, tau.shape))
    return tau, np.stack(columns, axis=-1)


def test_one_talker_in_closed_form() -> None:
    """One talker, one frequency: var = sigma2 / (2 N P) / |Pi d|^2 with d = -i omega tau' a (deterministic)."""
    tau, slope = delays(np.array([0.3]))
    omega = 2 * np.pi * 1500.0
    centred = slope[0, :, 0] - slope[0, :, 0].mean()
    expected = 0.01 / (2 * 50 * 2.0) / (omega**2 * np.sum(centred**2))
    got = white_noise_bound(tau, slope, np.array([1500.0]), np.array([[[2.0 + 0j]]]), 0.01, 50)
    assert got[0, 0] == pytest.approx(expected, rel=1e-9)


def test_more_snapshots_less_noise_more_frequencies() -> None:
    tau, slope = delays(np.radians([20.0, 70.0]))
    power = np.eye(2, dtype=complex)[None]
    one = white_noise_bound(tau, slope, np.array([2000.0]), power, 0.1, 100)
    np.testing.assert_allclose(white_noise_bound(tau, slope, np.array([2000.0]), power, 0.1, 400), one / 4)
    np.testing.assert_allclose(white_noise_bound(tau, slope, np.array([2000.0]), power, 0.025, 100), one / 4)
    twice = white_noise_bound(tau, slope, np.array([2000.0, 2000.0]), np.repeat(power, 2, axis=0), 0.1, 100)
    np.testing.assert_allclose(twice, one / 2)


def test_random_signals_are_never_easier() -> None:
    """The stochastic bound is at least the deterministic one, and they meet where noise is low."""
    tau, slope = delays(np.radians([20.0, 70.0]))
    power = np.array([[[1.0, 0.3 + 0.2j], [0.3 - 0.2j, 0.7]]])
    ratios = []
    for noise in (1.0, 0.1, 1e-3):
        known, random = (
            white_noise_bound(tau, slope, np.array([2000.0]), power, noise, 100, signals=kind)
            for kind in ("deterministic", "random")
        )
        assert np.linalg.eigvalsh(random - known)[0] > -1e-12
        ratios.append(random[0, 0] / known[0, 0])
    assert ratios[0] > ratios[1] > ratios[2] and ratios[2] == pytest.approx(1.0, abs=2e-3)


def test_nearby_talkers_are_harder_than_distant_ones() -> None:
    power = np.eye(2, dtype=complex)[None]
    near, far = (
        white_noise_bound(*delays(np.radians([0.0, apart])), np.array([2000.0]), power, 0.1, 100)[0, 0]
        for apart in (15.0, 90.0)
    )
    assert near > 10 * far


def test_what_cannot_be_known_is_refused() -> None:
    """A flat array does not see a change of elevation at the horizon."""
    tau, slope = delays(np.array([0.3]), elevation=True)
    with pytest.raises(UnsolvableError, match="cannot tell these directions"):
        white_noise_bound(tau, slope, np.array([1500.0]), np.ones((1, 1, 1), complex), 0.01, 50)


def test_the_information_is_that_of_the_likelihood() -> None:
    """Deterministic information against second differences of the cost at the truth, noise free."""
    azimuths = np.radians([20.0, 70.0])
    rng = np.random.default_rng(3)
    s = rng.standard_normal((2, 40)) + 1j * rng.standard_normal((2, 40))
    omega = 2 * np.pi * 2000.0
    y = np.exp(-1j * omega * delays(azimuths)[0].T) @ s

    def cost(x: np.ndarray) -> float:
        a = np.exp(-1j * omega * delays(x)[0].T)
        return float(np.linalg.norm(y - a @ (np.linalg.pinv(a) @ y)) ** 2)

    h = 1e-3
    second = np.empty((2, 2))
    for i in range(2):
        for j in range(2):
            e, f = np.eye(2)[i] * h, np.eye(2)[j] * h
            terms = (cost(azimuths + e + f), cost(azimuths + e - f), cost(azimuths - e + f), cost(azimuths - e - f))
            second[i, j] = (terms[0] - terms[1] - terms[2] + terms[3]) / (4 * h * h)
    tau, slope = delays(azimuths)
    a = np.exp(-1j * omega * tau.T)[None]
    da = (-1j * omega * a[..., None]) * np.swapaxes(slope, 0, 1)
    fisher = fisher_information(a, da, (s @ s.conj().T / 40)[None], 0.5, 40)
    # The negative log-likelihood is cost / sigma2.
    np.testing.assert_allclose(second / 0.5, fisher, rtol=1e-3)
    np.testing.assert_allclose(bearing_bound(fisher) @ fisher, np.eye(2), atol=1e-9)
