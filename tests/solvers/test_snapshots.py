"""`free`: every snapshot alone."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle
from unmix.errors import UnsolvableError
from unmix.model.delays import Paths, paths_from_bearings
from unmix.solvers.snapshots import SnapshotSolver

RATE = 16000


def test_jets_and_variance_of_a_slow_signal(rng: np.random.Generator) -> None:
    paths = paths_from_bearings(circle(), [0.4])
    solver = SnapshotSolver.of(paths, 2, RATE)
    n = np.arange(2000)
    omega = 2 * np.pi * 300 / RATE
    clean = np.stack([np.cos(omega * (n - d * RATE)) for d in paths.delay_s[0]])
    noisy = clean + 0.01 * rng.standard_normal(clean.shape)
    jets, variance = solver.solve(noisy)
    assert solver.freedom == 4
    assert variance.mean() == pytest.approx(1e-4, rel=0.05)
    assert jets[0] == pytest.approx(np.cos(omega * n), abs=0.03)


def test_two_talkers_are_refused(two_talkers: Paths) -> None:
    with pytest.raises(UnsolvableError, match="one talker"):
        SnapshotSolver.of(two_talkers, 2, RATE)


def test_too_few_distinct_delays_are_refused() -> None:
    # Seven microphones, but a wave from above the ring's axis reaches pairs of them together.
    paths = paths_from_bearings(circle(), [0.0])
    with pytest.raises(UnsolvableError, match="distinct delays"):
        SnapshotSolver.of(paths, 6, RATE)
