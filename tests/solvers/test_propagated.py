"""Jets carried from sample to sample by the Taylor transition."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle
from unmix.model.delays import Paths, paths_from_bearings
from unmix.model.differentiators import choose_differentiators
from unmix.model.jets import transition, transition_covariance
from unmix.model.mixing import mixing_from_paths, taylor_terms
from unmix.model.noise import Noise
from unmix.model.prior import Prior, make_prior
from unmix.solvers.propagated import PropagatedBlock, stationary_response, transition_weight, trusted_band

RATE = 16000


def smoother(paths: Paths, recording: np.ndarray, order: int, w: np.ndarray, first: np.ndarray) -> np.ndarray:
    """Kalman filter and Rauch-Tung-Striebel smoother of the same state space, written from the textbook recursion."""
    k, m = paths.delay_s.shape
    size = k * (order + 1)
    c = (paths.gain[..., None] * taylor_terms(paths.delay_s * RATE, order)).transpose(1, 0, 2).reshape(m, size)
    f = np.kron(np.eye(k), transition(order))
    q = np.kron(np.eye(k), w)
    mean, cov = np.zeros(size), np.kron(np.eye(k), first)
    filtered, predicted = [], []
    for y in recording.T:
        predicted.append((mean, cov))
        gain = cov @ c.T @ np.linalg.inv(c @ cov @ c.T + np.eye(m))
        mean, cov = mean + gain @ (y - c @ mean), cov - gain @ c @ cov
        filtered.append((mean, cov))
        mean, cov = f @ mean, f @ cov @ f.T + q
    states = [filtered[-1][0]]
    for (m0, p0), (m1, p1) in zip(filtered[-2::-1], predicted[:0:-1], strict=True):
        states.append(m0 + p0 @ f.T @ np.linalg.solve(p1, states[-1] - m1))
    return np.array(states[::-1]).reshape(-1, k, order + 1).transpose(1, 0, 2)


def test_block_with_own_anchors_is_the_fixed_interval_smoother(two_talkers: Paths, rng: np.random.Generator) -> None:
    order = 2
    w = transition_covariance(order, 100.0 * np.exp(-np.linspace(0, 8, 256)))
    first = np.diag([10.0, 5.0, 2.0])
    recording = rng.standard_normal((7, 120))
    chosen = choose_differentiators(order, family="finite-difference", error_db=-20, band_edge=0.5)
    block = PropagatedBlock(
        two_talkers, chosen, Noise("white"), Prior("none", 0.0, np.ones(1)), 120,
        sample_rate=RATE, weight=np.linalg.inv(w), anchor="own", first_jet=np.linalg.inv(first),
    )  # fmt: skip
    expected = smoother(two_talkers, recording, order, w, first)
    assert np.abs(block.jets(recording) - expected).max() < 1e-8 * np.abs(expected).max()


def test_filter_bank_form_equals_the_block_far_from_its_ends(two_talkers: Paths, rng: np.random.Generator) -> None:
    chosen = choose_differentiators(4, family="least-squares", error_db=-40, band_edge=0.7)
    mixing = mixing_from_paths(two_talkers, chosen, RATE)
    prior = make_prior("speech", 1e-3, mixing, RATE)
    weight = transition_weight(4, prior, 100.0)
    recording = np.zeros((7, 1600))
    recording[:, 600:1000] = rng.standard_normal((7, 400))
    block = PropagatedBlock(two_talkers, chosen, Noise("white"), prior, 1600, sample_rate=RATE, weight=weight).solve(
        recording
    )
    omega = 2 * np.pi * np.arange(4097) / 8192
    bank = stationary_response(two_talkers, 4, prior, weight, omega, sample_rate=RATE)
    filtered = np.fft.irfft(np.einsum("fkm,mf->kf", bank, np.fft.rfft(recording, 8192)), 8192)[:, :1600]
    assert np.abs(block - filtered)[:, 500:1100].max() < 1e-6 * np.abs(block).max()


def test_trusted_band_matches_the_stated_truncation() -> None:
    # Order 6 leaves out -28 dB at 4 kHz and 16 kHz sampling (half the Nyquist frequency).
    omega = np.pi / 2
    left = np.exp(1j * omega) - ((1j * omega) ** np.arange(7)) @ transition(6)[0]
    assert 20 * np.log10(abs(left)) < -28
    assert trusted_band(6) > trusted_band(4) > trusted_band(2)
    edge = trusted_band(6) * np.pi
    at_edge = np.exp(1j * edge) - ((1j * edge) ** np.arange(7)) @ transition(6)[0]
    assert 20 * np.log10(abs(at_edge)) == pytest.approx(-20, abs=0.2)


def test_transition_covariance_is_the_variance_of_what_is_left_out(rng: np.random.Generator) -> None:
    # A sum of sinusoids has its derivatives in closed form.
    omega = np.pi * (np.arange(64) + 0.5) / 64 * 0.5
    amplitude = np.exp(-np.arange(64) / 20)
    phase = rng.uniform(0, 2 * np.pi, 64)
    n = np.arange(20000)
    order = 3
    z = np.array(
        [
            np.real((amplitude * (1j * omega) ** level)[None] @ np.exp(1j * (np.outer(omega, n) + phase[:, None])))[0]
            for level in range(order + 1)
        ]
    )
    left = z[:, 1:] - transition(order) @ z[:, :-1]
    spectrum = np.zeros(128)
    spectrum[:64] = amplitude**2 / 2 * 128
    expected = transition_covariance(order, spectrum)
    assert left @ left.T / left.shape[1] == pytest.approx(expected, rel=0.05)


def test_moving_talkers(rng: np.random.Generator) -> None:
    azimuth = np.radians([[20.0, 95.0], [20.0, 95.0]])
    moving = paths_from_bearings(circle(), azimuth, 0.0, 1.2, time_s=np.array([0.0, 1.0]))
    chosen = choose_differentiators(3, family="least-squares", error_db=-30, band_edge=0.6)
    mixing = mixing_from_paths(moving.still(), chosen, RATE)
    prior = make_prior("flat", 1e-2, mixing, RATE)
    weight = transition_weight(3, prior, 100.0)
    block = rng.standard_normal((7, 150))
    solved = [
        PropagatedBlock(p, chosen, Noise("white"), prior, 150, sample_rate=RATE, weight=weight).solve(block)
        for p in (moving, moving.still())
    ]
    assert solved[0] == pytest.approx(solved[1])
