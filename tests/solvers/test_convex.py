"""What has no closed form: clicks, clipped samples, a bound on the peak."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import delayed, speech
from unmix.errors import UnsolvableError
from unmix.model.delays import Paths
from unmix.model.differentiators import choose_differentiators
from unmix.model.mixing import mixing_from_paths
from unmix.model.noise import Noise
from unmix.model.prior import make_prior
from unmix.solvers import reduced
from unmix.solvers.convex import ConvexBlock
from unmix.solvers.problem import Problem

RATE = 16000
CHOSEN = choose_differentiators(6, family="least-squares", error_db=-45, band_edge=0.8)


@pytest.fixture
def case(two_talkers: Paths, rng: np.random.Generator) -> tuple[Problem, np.ndarray, np.ndarray]:
    signals = np.stack([speech("novel-reader", 1.0), speech("card-reader", 1.0)])[:, 6000:6512]
    heard = delayed(signals, two_talkers, RATE).sum(axis=0)
    heard = heard + 0.001 * rng.standard_normal(heard.shape)
    mixing = mixing_from_paths(two_talkers, CHOSEN, RATE)
    return Problem.of(mixing, Noise("white"), make_prior("flat", 1e-4, mixing, RATE)), signals, heard


def error_db(estimate: np.ndarray, truth: np.ndarray) -> float:
    inner = slice(64, -64)
    return float(10 * np.log10(np.sum((estimate - truth)[:, inner] ** 2) / np.sum(truth[:, inner] ** 2)))


def test_huber_loss_shrugs_off_clicks(case: tuple[Problem, np.ndarray, np.ndarray], rng: np.random.Generator) -> None:
    problem, truth, heard = case
    clicked = heard.copy()
    where = rng.choice(512, 12, replace=False)
    clicked[rng.integers(0, 7, 12), where] += rng.choice([-0.5, 0.5], 12)
    squares = error_db(reduced.solve_block(problem, clicked), truth)
    robust = error_db(ConvexBlock(problem, 512, huber=0.003).solve(clicked), truth)
    assert robust < squares - 10


def test_clipped_samples_become_inequalities(case: tuple[Problem, np.ndarray, np.ndarray]) -> None:
    problem, truth, heard = case
    # Three channels run into their limit; where all of them do, nothing is left to repair from.
    level = 0.5 * np.abs(heard).max()
    clipped = heard.copy()
    clipped[:3] = np.clip(heard[:3], -level, level)
    plain = error_db(reduced.solve_block(problem, clipped), truth)
    levels = np.where(np.arange(7) < 3, level, np.inf)
    aware = ConvexBlock(problem, 512, clip=levels)
    repaired = aware.solve(clipped)
    assert error_db(repaired, truth) < plain - 6
    # The model's own samples lie beyond the clipping level wherever the recording was clipped.
    heard_again = problem.mixing.apply(repaired)[:3, 64:-64]
    over = np.abs(clipped[:3, 64:-64]) >= level
    assert np.all(np.abs(heard_again[over]) > level * 0.98)


def test_peak_is_bounded(case: tuple[Problem, np.ndarray, np.ndarray]) -> None:
    problem, _, heard = case
    free = reduced.solve_block(problem, heard)
    bound = 0.7 * np.abs(free).max()
    assert np.abs(ConvexBlock(problem, 512, peak=bound).solve(heard)).max() <= bound * (1 + 1e-6)


def test_osqp_agrees_to_its_own_tolerance(case: tuple[Problem, np.ndarray, np.ndarray]) -> None:
    problem, _, heard = case
    expected = reduced.solve_block(problem, heard)
    assert ConvexBlock(problem, 512, solver="OSQP").solve(heard) == pytest.approx(expected, abs=1e-4)


def test_clipping_needs_white_noise(case: tuple[Problem, np.ndarray, np.ndarray]) -> None:
    problem, _, _ = case
    coloured = Noise("diffuse", None, np.zeros((7, 7, 3)))
    with pytest.raises(UnsolvableError, match="white"):
        ConvexBlock(Problem(problem.mixing, coloured, problem.prior, problem.whitened), 512, clip=0.1)
