"""Talkers by best score and by name."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from unmix.errors import InputError
from unmix.metrics.assignment import best_assignment, match_names


@pytest.mark.parametrize("count", [1, 2, 3, 5])
def test_no_permutation_scores_higher(rng: np.random.Generator, count: int) -> None:
    scores = 20.0 * rng.standard_normal((count, count))
    found = best_assignment(scores)
    best = max(sum(scores[e, k] for k, e in enumerate(order)) for order in itertools.permutations(range(count)))
    assert sum(scores[e, k] for k, e in enumerate(found) if e is not None) == pytest.approx(best)


def test_undefined_scores_are_the_last_choice() -> None:
    assert best_assignment(np.array([[np.nan, 1.0], [-50.0, 2.0]])) == [1, 0]
    assert best_assignment(np.full((2, 2), np.nan)) in ([0, 1], [1, 0])


def test_too_few_and_too_many_estimates() -> None:
    assert best_assignment(np.array([[1.0, 5.0, 2.0]])) == [None, 0, None]
    assert best_assignment(np.array([[1.0], [3.0], [2.0]])) == [1]


def test_forty_talkers_are_no_matter_of_forty_factorial(rng: np.random.Generator) -> None:
    """Trying every permutation would not end."""
    order = rng.permutation(40)
    assert best_assignment(np.eye(40)[order]) == [int(np.flatnonzero(order == k)[0]) for k in range(40)]


def test_names() -> None:
    assert match_names(["b", "a", "x"], ["a", "b", "c"]) == [1, 0, None]
    with pytest.raises(InputError, match="two estimates are called 'a'"):
        match_names(["a", "a"], ["a"])
