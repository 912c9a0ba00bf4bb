"""The anchored expansion against published filters and weights."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.model.delays import Paths
from unmix.model.differentiators import Differentiators, finite_differences
from unmix.model.mixing import mixing_from_paths


def test_derivative_weights() -> None:
    # Fornberg 1988, table 1 (Mathematics of Computation 51, 699-706): centred approximations of first and second
    # derivative at orders of accuracy 2, 4 and 6.
    assert finite_differences(1, 1)[1] == pytest.approx([-1 / 2, 0, 1 / 2])
    assert finite_differences(1, 2)[1] == pytest.approx([1 / 12, -2 / 3, 0, 2 / 3, -1 / 12])
    assert finite_differences(1, 3)[1] == pytest.approx([-1 / 60, 3 / 20, -3 / 4, 0, 3 / 4, -3 / 20, 1 / 60])
    assert finite_differences(2, 2)[2] == pytest.approx([-1 / 12, 4 / 3, -5 / 2, 4 / 3, -1 / 12])
    assert finite_differences(4, 2)[4] == pytest.approx([1, -4, 6, -4, 1])


@pytest.mark.parametrize("half_width", [1, 2, 4, 6])
@pytest.mark.parametrize("delay", [0.5, -0.3, 0.1, 2.2, -7.4])
def test_expansion_of_order_two_p_is_the_lagrange_filter(half_width: int, delay: float) -> None:
    # Laakso, Valimaki, Karjalainen and Laine 1996 (IEEE Signal Processing Magazine 13(1), 30-60), equation 42:
    # h(n) = prod_{k != n} (D - k) / (n - k), the Lagrange fractional-delay filter.
    weights = finite_differences(2 * half_width, half_width)
    made = Differentiators(weights, half_width, "finite-difference", 0.0, 0.5)
    mixing = mixing_from_paths(Paths(np.array([[delay]]), np.ones((1, 1))), made, 1.0)
    whole = round(delay)
    points = np.arange(2 * half_width + 1)
    total = delay - whole + half_width
    lagrange = [np.prod([(total - k) / (n - k) for k in points if k != n]) for n in points]
    # Tap j of the model weighs z[n + j]: a delay by i samples and then the filter, reversed in time.
    taps = mixing.taps[0, 0]
    place = mixing.reach - whole
    assert taps[place - half_width : place + half_width + 1][::-1] == pytest.approx(lagrange, abs=1e-9)
    assert np.count_nonzero(np.abs(taps) > 1e-12) <= 2 * half_width + 1
