"""The methods solve the same problem: one block, relative prior 1e-3."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle
from unmix.errors import UnsolvableError
from unmix.model.delays import Paths, paths_from_bearings
from unmix.model.differentiators import choose_differentiators
from unmix.model.mixing import mixing_from_paths
from unmix.model.noise import Noise, diffuse_covariance, noise_from_covariance
from unmix.model.prior import Prior, PriorKind, make_prior
from unmix.solvers import kkt, reduced
from unmix.solvers.convex import ConvexBlock
from unmix.solvers.problem import Problem
from unmix.solvers.stationary import design
from unmix.solvers.streaming import BlockSeparator, FilterBankSeparator, Separator, run

RATE = 16000
CHOSEN = choose_differentiators(6, family="least-squares", error_db=-45, band_edge=0.8)
Floats = np.ndarray


def problem(paths: Paths, noise: Noise, kind: PriorKind = "flat", weight: float = 1e-3) -> Problem:
    mixing = mixing_from_paths(paths, CHOSEN, RATE)
    return Problem.of(mixing, noise, make_prior(kind, weight, noise.whiten_mixing(mixing), RATE))


def difference(a: Floats, b: Floats) -> float:
    return float(np.abs(a - b).max() / np.abs(b).max())


@pytest.mark.parametrize("kind", ["flat", "speech"])
def test_reduced_kkt_and_convex_agree(kind: PriorKind, two_talkers: Paths, rng: np.random.Generator) -> None:
    block = rng.standard_normal((7, 400))
    p = problem(two_talkers, Noise("white"), kind)
    first = reduced.solve_block(p, block)
    second = kkt.solve_block(two_talkers, CHOSEN, p.noise, p.prior, block, sample_rate=RATE)
    third = ConvexBlock(p, 400).solve(block)
    assert difference(second, first) < 1e-8
    assert difference(third, first) < 1e-8


def test_they_agree_with_coloured_noise(rng: np.random.Generator) -> None:
    array = circle(4, 0.03, centre=False)
    paths = paths_from_bearings(array, np.radians([20.0, 95.0]), 0.0, 1.2)
    covariance = diffuse_covariance(array.positions_m, RATE, -10.0, 343.2)
    p = problem(paths, noise_from_covariance("diffuse", covariance, 12))
    block = rng.standard_normal((4, 200))
    first = reduced.solve_block(p, block)
    assert difference(kkt.solve_block(paths, CHOSEN, p.noise, p.prior, block, sample_rate=RATE), first) < 1e-8
    assert difference(ConvexBlock(p, 200).solve(block), first) < 1e-8


def test_they_agree_while_talkers_move(rng: np.random.Generator) -> None:
    azimuth = np.radians([[20.0, 95.0], [50.0, 80.0]])
    paths = paths_from_bearings(circle(), azimuth, 0.0, 1.2, time_s=np.array([0.0, 0.02]))
    mixing = mixing_from_paths(paths, CHOSEN, RATE, samples=200, hold=16)
    p = Problem.of(mixing, Noise("white"), make_prior("flat", 1e-3, mixing, RATE))
    block = rng.standard_normal((7, 200))
    first = reduced.solve_block(p, block)
    second = kkt.solve_block(paths, CHOSEN, p.noise, p.prior, block, sample_rate=RATE, hold=16)
    assert difference(second, first) < 1e-8
    assert difference(ConvexBlock(p, 200).solve(block), first) < 1e-8


def joined(separator: Separator, recording: Floats, chunk: int) -> Floats:
    pieces = [recording[:, at : at + chunk] for at in range(0, recording.shape[1], chunk)]
    return np.concatenate(list(run(separator, pieces)), axis=1)


@pytest.mark.parametrize("weight", [1e-2, 1e-4])
def test_stationary_and_streaming_equal_one_long_solve(
    weight: float, two_talkers: Paths, rng: np.random.Generator
) -> None:
    recording = rng.standard_normal((7, 12000))
    p = problem(two_talkers, Noise("white"), weight=weight)
    long = reduced.solve_block(p, recording)
    bank = design(p, tail=1e-6)
    filtered = joined(FilterBankSeparator(bank), recording, 1777)
    assert filtered.shape == long.shape
    inner = slice(bank.margin, -bank.margin)
    assert difference(filtered[:, inner], long[:, inner]) < 1e-6
    blocks = BlockSeparator(
        lambda y, _: reduced.solve_block(p, y), channels=7, talkers=2, block=2000, margin=bank.margin
    )
    # The first and last blocks have the recording's own ends, so nothing is left out of the comparison.
    assert difference(joined(blocks, recording, 1777), long) < 1e-6


def test_output_does_not_depend_on_how_chunks_are_cut(two_talkers: Paths, rng: np.random.Generator) -> None:
    recording = rng.standard_normal((7, 9000))
    bank = design(problem(two_talkers, Noise("white")), tail=1e-6)
    once = joined(FilterBankSeparator(bank), recording, 9000)
    for chunk in (1, 37, 5000):
        if chunk == 1:
            short = recording[:, :700]
            one = joined(FilterBankSeparator(bank), short, 1)
            assert difference(one, joined(FilterBankSeparator(bank), short, 700)) < 1e-12
        else:
            assert difference(joined(FilterBankSeparator(bank), recording, chunk), once) < 1e-12


def test_memory_of_a_separator_does_not_grow(two_talkers: Paths) -> None:
    bank = design(problem(two_talkers, Noise("white")))
    filters = FilterBankSeparator(bank)
    blocks = BlockSeparator(lambda y, _: y[:2], channels=7, talkers=2, block=1000, margin=300)
    for separator, most in ((filters, max(4 * bank.taps.shape[-1], 8192) + 1600 + 200), (blocks, 1000 + 600 + 1600)):
        for _ in range(60):
            separator.push(np.ones((7, 1600)))
            assert separator._held.shape[1] <= most


def test_no_prior_is_the_minimum_norm_answer_by_name_or_a_refusal(rng: np.random.Generator) -> None:
    paths = paths_from_bearings(circle(), np.radians([20.0, 95.0]))
    mixing = mixing_from_paths(paths, CHOSEN, RATE)
    p = Problem.of(mixing, Noise("white"), Prior("none", 0.0, np.ones(1)))
    bank = design(p, tail=1e-3)
    assert bank.note == "minimum-norm"
    # At zero frequency both talkers share what was heard: the pseudo-inverse of two equal columns.
    assert bank.response(np.array([0.0]))[0].real.sum(axis=1) == pytest.approx([0.5, 0.5], abs=0.02)
    block = rng.standard_normal((7, 300))
    with pytest.raises(UnsolvableError, match="prior"):
        kkt.solve_block(paths, CHOSEN, p.noise, p.prior, block, sample_rate=RATE)
    with pytest.raises(UnsolvableError, match="prior"):
        ConvexBlock(p, 300)
