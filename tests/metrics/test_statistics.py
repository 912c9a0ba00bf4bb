"""Paired comparisons, their corrections, rankings, and scenes still needed."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats

from unmix.metrics.statistics import holm, paired_differences, rank_variants, scenes_needed


def test_holm_on_a_worked_example() -> None:
    # 0.01 * 4, 0.02 * 3 (0.06), then 0.03 * 2 and 0.04 * 1 held up to it
    assert holm(np.array([0.04, 0.01, np.nan, 0.03, 0.02])) == pytest.approx(
        [0.06, 0.04, np.nan, 0.06, 0.06], nan_ok=True
    )


def test_a_pair_by_hand() -> None:
    values = np.array([[1.0, 0.0], [2.0, 0.5], [3.5, 1.0], [3.0, 3.25], [5.0, 2.0], [4.0, 0.25], [2.0, np.nan]])
    (pair,) = paired_differences(values, ["a", "b"], [(0, 1)])
    d = np.array([1.0, 1.5, 2.5, -0.25, 3.0, 3.75])
    assert pair.interval.scenes == 6
    assert pair.interval.mean == pytest.approx(d.mean())
    assert pair.effect == pytest.approx(d.mean() / d.std(ddof=1))
    assert pair.rank_biserial == pytest.approx((20.0 - 1.0) / 21.0)  # ranks 1..6, the smallest against
    assert pair.p == pytest.approx(2 * 2 / 64)  # sums of ranks up to 1: two of the 64 sign patterns, either side
    assert pair.p_corrected == pair.p


def test_no_difference_at_all() -> None:
    x = np.random.default_rng(1).standard_normal((12, 1))
    (pair,) = paired_differences(np.hstack([x, x + 1e-12]), ["a", "b"], [(0, 1)])
    assert (pair.p, pair.effect, pair.rank_biserial, pair.scenes_needed) == (1.0, None, 0.0, None)
    assert not pair.distinct


def test_pairing_sees_through_the_spread_between_scenes(rng: np.random.Generator) -> None:
    scenes = 10.0 * rng.standard_normal((24, 1))
    values = scenes + np.array([0.0, 1.0]) + 0.5 * rng.standard_normal((24, 2))
    ranking = rank_variants(values, ["worse", "better"])
    assert [v.name for v in ranking.variants] == ["better", "worse"]
    assert [v.group for v in ranking.variants] == [1, 2]
    assert ranking.variants[0].interval.low < ranking.variants[1].interval.high


def test_groups_and_peers(rng: np.random.Generator) -> None:
    offsets = np.array([0.0, 5.0, 5.02, 0.01, 10.0])
    values = rng.standard_normal((24, 1)) + offsets + 0.3 * rng.standard_normal((24, 5))
    ranking = rank_variants(values, ["low", "mid", "mid-too", "low-too", "top"])
    groups = {v.name: v.group for v in ranking.variants}
    assert groups == {"top": 1, "mid": 2, "mid-too": 2, "low": 3, "low-too": 3}
    assert ranking.tests == 10
    assert {v.name: v.peers for v in ranking.variants}["mid"] == ("mid-too",)
    assert rank_variants(-values, ["low", "mid", "mid-too", "low-too", "top"], higher_is_better=False).variants[
        0
    ].name == ("top")


def test_variants_of_equal_merit_are_told_apart_at_most_as_often_as_promised() -> None:
    rng = np.random.default_rng(5)
    wrong = 0
    for _ in range(100):
        values = rng.standard_normal((12, 4))
        wrong += any(p.distinct for p in rank_variants(values, list("abcd")).pairs)
    assert wrong <= 11  # 5 % of 100 plus 2.7 standard deviations


def test_many_variants_are_corrected_as_if_all_pairs_had_been_made(rng: np.random.Generator) -> None:
    values = rng.standard_normal((40, 60)) + np.linspace(0.0, 4.0, 60)
    ranking = rank_variants(values, [f"v{i}" for i in range(60)])
    assert ranking.tests == 60 * 59 // 2
    assert len(ranking.pairs) < 600
    pair = ranking.pairs[-1]
    assert pair.p_corrected == pytest.approx(min(1.0, pair.p * ranking.tests))


@pytest.mark.parametrize(("effect", "alpha"), [(0.5, 0.05), (1.0, 0.05 / 28)])
def test_scenes_needed_give_the_power_they_promise(effect: float, alpha: float) -> None:
    n = scenes_needed(effect, alpha=alpha)
    assert n is not None
    d = np.random.default_rng(2).standard_normal((n, 2000)) + effect
    power = float(np.mean(scipy.stats.wilcoxon(d, axis=0).pvalue < alpha))
    assert power == pytest.approx(0.8, abs=0.05)


def test_scenes_needed_never_fewer_than_the_test_can_use() -> None:
    n = scenes_needed(50.0, alpha=0.05)
    assert n == 6  # 2^(1 - 6) = 0.031 is below 0.05, 2^(1 - 5) = 0.0625 is not
    assert scenes_needed(0.0) is None
    assert scenes_needed(1e-4) is None


def test_variants_without_values_come_last() -> None:
    values = np.array([[1.0, np.nan], [2.0, np.nan]])
    ranking = rank_variants(values, ["good", "failed"])
    assert [(v.name, v.group) for v in ranking.variants] == [("good", 1), ("failed", 0)]
