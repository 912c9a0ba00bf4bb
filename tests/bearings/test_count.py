"""How many talkers, and when that is in doubt."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.bearings.count import (
    MOST_TALKERS,
    TALKER_PEAK,
    TALKER_SHARE,
    count_talkers,
    merge_sections,
    talker_margin,
)
from unmix.bearings.mixture import Cluster


def at(azimuth: float, weight: float, peak: float = 1.0) -> Cluster:
    return Cluster(np.array([np.cos(azimuth), np.sin(azimuth)]), weight, peak)


@pytest.mark.parametrize("number", range(MOST_TALKERS + 1))
def test_plain_talkers_are_counted_without_doubt(number: int) -> None:
    count = count_talkers([at(k, 0.2) for k in range(number)] + [at(5.0, 0.2 * TALKER_SHARE)])
    assert (count.estimated, count.used, count.ambiguous, count.reason) == (number, number, False, None)


@pytest.mark.parametrize(
    "weak", [at(1.0, 0.9 * TALKER_SHARE), at(1.0, 0.9, 0.9 * TALKER_PEAK), at(1.0, 1.2 * TALKER_SHARE)]
)
def test_what_misses_or_passes_by_little_is_said(weak: Cluster) -> None:
    count = count_talkers([at(0.0, 0.5), weak])
    assert (count.lowest, count.highest) == (1, 2)
    assert count.estimated == 1 + (talker_margin(weak) >= 1.0)
    assert str(count.reason).startswith("1 to 2 talkers are possible")
    assert f"{100 * weak.weight:.1f} %" in str(count.reason)


def test_the_number_asked_for_is_used_and_the_estimate_kept() -> None:
    count = count_talkers([at(0.0, 0.5)], asked=3)
    assert (count.estimated, count.used) == (1, 3)


def test_more_than_can_be_told_apart() -> None:
    count = count_talkers([at(k, 0.15) for k in range(6)])
    assert count.estimated == count.highest == MOST_TALKERS
    assert "6 directions stand out" in str(count.reason)


def test_sections_are_put_together() -> None:
    """A talker who is plain in one section is one; the same direction in both is one talker with the larger share."""
    merged = merge_sections([[at(0.0, 0.5), at(2.0, 0.01)], [at(0.1, 0.3), at(-2.0, 0.4)]])
    assert [round(c.weight, 2) for c in merged] == [0.5, 0.4]
    assert np.arctan2(merged[0].x[1], merged[0].x[0]) == pytest.approx(0.0375, abs=1e-3)
    assert len(merge_sections([[at(0.0, 0.5), at(2.0, 0.02)]])) == 2
