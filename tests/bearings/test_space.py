"""What an array can tell apart, and what it cannot."""

from __future__ import annotations

import numpy as np
import pytest

from tests.bearings.scenes import directions, line, solid
from tests.conftest import circle
from unmix.bearings.space import search_space
from unmix.errors import InputError
from unmix.physics import unit_vector


def test_the_rank_is_that_of_the_microphones() -> None:
    assert search_space(line().positions_m).rank == 1
    assert search_space(circle().positions_m).rank == 2
    assert search_space(solid().positions_m).rank == 3
    with pytest.raises(InputError, match="seat: one microphone hears no direction; give at least two"):
        search_space(np.zeros((1, 3)), where="seat")


@pytest.mark.parametrize("array", [circle(), solid()], ids=["flat", "solid"])
def test_projections_come_back_as_directions(array) -> None:  # type: ignore[no-untyped-def]
    space = search_space(array.positions_m)
    u = unit_vector(np.linspace(-3.0, 3.0, 13), np.linspace(0.0, 1.4, 13))
    np.testing.assert_allclose(space.lift(space.project(u)), u, atol=1e-6)


def test_a_grid_leaves_no_hole() -> None:
    """No direction is further from the grid than two thirds of its spacing (the circumradius of even triangles is 0.58
    of their side; a disc of rings is a little less even)."""
    rng = np.random.default_rng(0)
    u = rng.standard_normal((500, 3))
    u /= np.linalg.norm(u, axis=1, keepdims=True)
    for array in (line(), circle(), solid()):
        space = search_space(array.positions_m)
        nearest = np.linalg.norm(space.project(u)[:, None] - space.grid[None], axis=-1).min(axis=1)
        assert nearest.max() < 0.75 * space.spacing
        np.testing.assert_allclose(space.project(space.directions), space.grid, atol=1e-9)


def test_a_ring_holds_horizontal_directions_only() -> None:
    space = search_space(circle().positions_m, region="ring")
    np.testing.assert_allclose(space.directions[:, 2], 0.0, atol=1e-12)
    frame = space.local(space.project(directions(40.0)[0]), 0.05)
    np.testing.assert_allclose(np.linalg.norm(frame.stencil, axis=1), 1.0, atol=1e-12)
    assert frame.axes.shape == (2, 1)


def test_mirror_directions_have_the_same_delays() -> None:
    for array in (line(), circle()):
        space = search_space(array.positions_m)
        u = unit_vector(0.4, 0.3)
        (mirror,) = space.mirrors(u)
        assert np.linalg.norm(mirror - u) > 0.1
        np.testing.assert_allclose(array.positions_m @ mirror, array.positions_m @ u, atol=1e-12)
    assert len(search_space(solid().positions_m).mirrors(unit_vector(0.4, 0.3))) == 0
    assert len(search_space(circle().positions_m).mirrors(unit_vector(0.4, 0.0))) == 0


def test_ambiguity_is_said_in_words() -> None:
    assert "the whole cone" in str(search_space(line().positions_m).ambiguity)
    assert "above and below look alike" in str(search_space(circle().positions_m).ambiguity)
    upright = circle().positions_m[:, [2, 0, 1]]
    assert "both sides of its plane" in str(search_space(upright).ambiguity)
    assert search_space(solid().positions_m).ambiguity is None


def test_a_line_that_turns_sees_more() -> None:
    """Turned about the vertical, a line has the span of a flat array."""
    half = np.pi / 4
    turned = np.array([[np.cos(half), -np.sin(half), 0.0], [np.sin(half), np.cos(half), 0.0], [0.0, 0.0, 1.0]])
    space = search_space(line().positions_m, np.stack([np.eye(3), turned]))
    assert space.rank == 2
    np.testing.assert_allclose(space.lift(space.project(directions(170.0, -30.0))), directions(170.0, -30.0), atol=1e-6)
