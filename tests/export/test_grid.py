"""A table over bearings, and what interpolation costs."""

from __future__ import annotations

import msgspec
import numpy as np
import pytest

from tests.conftest import circle
from unmix.errors import InputError, UnsolvableError
from unmix.export.grid import BearingGrid, bearing_grid, interpolation_cost
from unmix.export.sir import speech_spectra
from unmix.live.design import Designer
from unmix.scene import Talker
from unmix.variant import PRESETS

RATE = 16000
SEATS = [Talker.at("mate", 20.0, distance_m=1.2), Talker.at("pilot", 95.0, distance_m=1.2)]
MODEL = PRESETS["model"]
# A heavier prior than the preset's: filters of some 300 taps.
SHORT = msgspec.structs.replace(MODEL, solver=msgspec.structs.replace(MODEL.solver, prior_weight=1e-4))
DESIGN = Designer(circle(), SHORT, RATE)


@pytest.fixture(scope="module")
def grid() -> BearingGrid:
    return bearing_grid(DESIGN, SEATS, talker=0, step_deg=10.0, before=100, after=250)


def test_entries_are_the_filters_made_there(grid: BearingGrid) -> None:
    assert grid.taps.shape == (36, 2, 7, 351)
    entry = int(np.flatnonzero(grid.azimuth_deg == 40.0)[0])
    made = DESIGN.within([Talker.at("mate", 40.0, distance_m=1.2), SEATS[1]], before=100, after=250).taps
    assert np.array_equal(grid.taps[entry, ..., : made.shape[-1]], made)
    for how in ("nearest", "linear", "cubic"):
        assert np.allclose(grid.at(40.0, how), grid.taps[entry], rtol=0, atol=1e-12)  # type: ignore[arg-type]
    assert np.allclose(grid.at(-180.0), grid.at(180.0), rtol=0, atol=1e-12)


def test_entries_near_the_other_talker_are_gaps(grid: BearingGrid) -> None:
    gaps = grid.azimuth_deg[~grid.valid]
    assert gaps.tolist() == [90.0, 100.0]
    assert np.isnan(grid.at(85.0, "linear")).all()


def test_interpolation_costs_less_the_smoother_it_is(grid: BearingGrid) -> None:
    costs = {cost.how: cost for cost in interpolation_cost(grid, DESIGN, SEATS, speech_spectra(2, RATE))}
    assert costs["nearest"].median_db > costs["linear"].median_db + 6.0
    assert costs["linear"].median_db > costs["cubic"].median_db > -1.0
    for cost in costs.values():
        assert cost.worst_db >= cost.median_db
        assert cost.left_worst_db <= cost.left_median_db


def test_cubic_is_exact_for_cubics() -> None:
    azimuth = np.arange(-180.0, 180.0, 10.0)
    taps = ((azimuth / 100.0) ** 3)[:, None, None, None] * np.ones((1, 1, 1, 2))
    grid = BearingGrid(0, azimuth, taps, 0)
    assert grid.at(23.0, "cubic")[0, 0, 0] == pytest.approx(0.23**3, abs=1e-12)
    assert grid.at(23.0, "linear")[0, 0, 0] == pytest.approx(0.7 * 0.2**3 + 0.3 * 0.3**3, abs=1e-12)
    assert grid.at(23.0, "nearest")[0, 0, 0] == pytest.approx(0.2**3, abs=1e-12)


def test_what_is_no_grid_is_said() -> None:
    for step in (7.0, 0.0, 180.0):
        with pytest.raises(InputError, match="does not divide the circle"):
            bearing_grid(DESIGN, SEATS, talker=0, step_deg=step, before=10, after=10)
    with pytest.raises(InputError, match="there is no talker 2"):
        bearing_grid(DESIGN, SEATS, talker=2, step_deg=10.0, before=10, after=10)
    with pytest.raises(UnsolvableError, match="leave no room"):
        bearing_grid(DESIGN, SEATS, talker=0, step_deg=60.0, before=10, after=10, least_apart_deg=200.0)
