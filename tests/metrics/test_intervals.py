"""Intervals for means over scenes: which method, what they hold, what they say of too few scenes."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.metrics.intervals import coverage_percent, mean_intervals


@pytest.mark.parametrize(
    ("scenes", "method"),
    [(1, "too few scenes"), (5, "Student t"), (6, "studentised"), (79, "studentised"), (80, "BCa")],
)
def test_method_by_number_of_scenes(rng: np.random.Generator, scenes: int, method: str) -> None:
    (interval,) = mean_intervals(rng.standard_normal((scenes, 1)))
    assert interval.method == method
    assert (interval.low is None) == (scenes == 1)


@pytest.mark.parametrize("scenes", [24, 80])
def test_intervals_hold_the_mean_as_often_as_they_say(scenes: int) -> None:
    # 2,000 experiments: a standard error of 0.49 percentage points
    for name, covered in coverage_percent(scenes, trials=2000).items():
        assert 93.0 <= covered <= 97.0, name


def test_few_scenes_of_skewed_values_are_said_to_hold_less() -> None:
    covered = coverage_percent(4, trials=2000)
    assert covered["normal"] == pytest.approx(95.0, abs=1.5)
    assert covered["skewed to the right"] < 91.0


@pytest.mark.parametrize("scenes", [4, 12, 90])
def test_intervals_shift_and_scale_with_the_values(rng: np.random.Generator, scenes: int) -> None:
    x = rng.exponential(1.0, (scenes, 1))
    (plain,), (moved,) = mean_intervals(x), mean_intervals(10.0 + 3.0 * x)
    assert moved.low == pytest.approx(10.0 + 3.0 * plain.low, rel=1e-9)
    assert moved.high == pytest.approx(10.0 + 3.0 * plain.high, rel=1e-9)


def test_an_interval_depends_on_its_own_column_and_the_seed_only(rng: np.random.Generator) -> None:
    x = rng.standard_normal((24, 300))
    together, alone = mean_intervals(x, seed=3)[299], mean_intervals(x[:, 299:], seed=3)[0]
    assert together.low == pytest.approx(alone.low, rel=1e-12)
    assert mean_intervals(x[:, 299:], seed=3)[0] == alone
    assert mean_intervals(x[:, 299:], seed=4)[0].low != alone.low


def test_scenes_without_a_value_are_left_out_and_counted(rng: np.random.Generator) -> None:
    x = rng.standard_normal((30, 2))
    x[::3, 1] = np.nan
    kept = x[np.isfinite(x[:, 1]), 1:]
    assert mean_intervals(x)[1] == mean_intervals(kept)[0]
    assert mean_intervals(x)[1].scenes == 20
    assert mean_intervals(np.full((4, 1), np.nan))[0].mean is None


def test_what_is_the_same_everywhere_has_an_interval_of_no_width() -> None:
    (interval,) = mean_intervals(np.full((24, 1), 1.7))
    assert (interval.low, interval.high, interval.method) == (interval.mean, interval.mean, "constant")


def test_skewed_values_get_a_lopsided_interval(rng: np.random.Generator) -> None:
    (interval,) = mean_intervals(np.exp(rng.standard_normal((24, 1))))
    assert interval.high - interval.mean > 1.3 * (interval.mean - interval.low)
