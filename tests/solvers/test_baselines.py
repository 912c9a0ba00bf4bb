"""Baselines: what each promises at every frequency."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle
from unmix.model.delays import Paths
from unmix.solvers.baselines import Baseline, baseline_bank, steering

RATE = 16000
OMEGA = np.linspace(0.05, 0.9, 40) * np.pi


def through(kind: Baseline, paths: Paths) -> np.ndarray:
    """Talkers to outputs: (frequencies, outputs, talkers)."""
    bank = baseline_bank(
        kind, paths, circle().positions_m, reference_channel=0, sample_rate=RATE, speed_m_s=343.2,
        self_noise_db=-20.0, tail=1e-6,
    )  # fmt: skip
    return np.asarray(bank.response(OMEGA) @ steering(paths, OMEGA, RATE))


@pytest.mark.parametrize("kind", ["reference-mic", "delay-and-sum", "minimum-variance", "linear-constraint"])
def test_the_wanted_talker_passes_unchanged(kind: Baseline, two_talkers: Paths) -> None:
    assert np.abs(through(kind, two_talkers)[:, [0, 1], [0, 1]] - 1).max() < 0.01


def test_linear_constraints_cancel_the_others(two_talkers: Paths) -> None:
    response = through("linear-constraint", two_talkers)
    assert 20 * np.log10(np.abs(response[:, [0, 1], [1, 0]]).max()) < -40
    assert np.abs(through("minimum-variance", two_talkers)[:, 0, 1]).max() > 0.1


def test_minimum_variance_lets_less_of_the_diffuse_field_through_than_delay_and_sum(two_talkers: Paths) -> None:
    from unmix.physics import diffuse_coherence, pairwise_distances

    gamma = diffuse_coherence(pairwise_distances(circle().positions_m), OMEGA * RATE / (2 * np.pi), 343.2)
    powers = []
    for kind in ("delay-and-sum", "minimum-variance"):
        bank = baseline_bank(
            kind, two_talkers, circle().positions_m, reference_channel=0, sample_rate=RATE, speed_m_s=343.2,
            self_noise_db=-20.0, tail=1e-6,
        )  # fmt: skip
        w = bank.response(OMEGA)
        powers.append(np.einsum("fkm,fmn,fkn->fk", w, gamma, w.conj()).real)
    assert np.all(powers[1] < powers[0] * 1.001)
