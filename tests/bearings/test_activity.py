"""Who speaks when."""

from __future__ import annotations

import numpy as np

from unmix.bearings.activity import active_stretches, stretches_to_mask

SLICES = np.arange(0.125, 5.0, 0.25)


def stretches(*on: int, **options: float) -> list[tuple[float, float]]:
    active = np.zeros(len(SLICES), dtype=bool)
    active[list(on)] = True
    return active_stretches(SLICES, active, 0.25, **options)


def test_slices_side_by_side_are_one_stretch() -> None:
    assert stretches(4, 5, 6) == [(1.0, 1.75)]
    assert stretches() == []


def test_a_breath_is_bridged_and_a_pause_is_not() -> None:
    assert stretches(4, 6) == [(1.0, 1.75)]
    assert stretches(4, 7) == [(1.0, 1.25), (1.75, 2.0)]
    assert stretches(4, 7, bridge_s=0.6) == [(1.0, 2.0)]


def test_what_is_too_short_is_dropped() -> None:
    assert stretches(4, 9, 10, shortest_s=0.4) == [(2.25, 2.75)]


def test_masks_and_stretches_agree() -> None:
    mask = stretches_to_mask([(1.0, 1.75), (3.0, 3.25)], SLICES)
    assert np.flatnonzero(mask).tolist() == [4, 5, 6, 12]
    assert active_stretches(SLICES, mask, 0.25) == [(1.0, 1.75), (3.0, 3.25)]
