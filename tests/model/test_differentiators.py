"""Derivative filters: exactness, accuracy up to the band edge, choice of width."""

from __future__ import annotations

import math

import numpy as np
import pytest

from unmix.errors import UnsolvableError
from unmix.model.differentiators import choose_differentiators, finite_differences, least_squares_differentiators


@pytest.mark.parametrize("half_width", [1, 3, 6])
def test_finite_differences_are_exact_for_polynomials(half_width: int) -> None:
    order = 2 * half_width
    weights = finite_differences(order, half_width)
    j = np.arange(-half_width, half_width + 1)
    for degree in range(order + 1):
        derivatives = weights @ (j / 1.0) ** degree
        expected = [math.factorial(degree) if degree == level else 0.0 for level in range(order + 1)]
        assert derivatives == pytest.approx(expected, abs=1e-7 * math.factorial(order))


@pytest.mark.parametrize(("half_width", "expected_db"), [(3, (-29, -10, -3)), (6, (-50, -16, -4.5))])
def test_half_sample_error_of_finite_differences(half_width: int, expected_db: tuple[float, ...]) -> None:
    # Half a sample at 0.5, 0.75 and 0.9 of Nyquist; exact finite differences of the highest order they carry.
    weights = finite_differences(2 * half_width, half_width)
    terms = (-0.5) ** np.arange(2 * half_width + 1) / [math.factorial(n) for n in range(2 * half_width + 1)]
    omega = np.pi * np.array([0.5, 0.75, 0.9])
    response = np.exp(1j * np.outer(omega, np.arange(-half_width, half_width + 1))) @ (terms @ weights)
    error_db = 20 * np.log10(np.abs(response - np.exp(-0.5j * omega)))
    assert error_db == pytest.approx(expected_db, abs=1.0)


def test_least_squares_beats_finite_differences_up_to_its_edge() -> None:
    exact = choose_differentiators(6, family="finite-difference", error_db=-200, band_edge=0.8, half_width=8)
    fitted = choose_differentiators(6, family="least-squares", error_db=-200, band_edge=0.8, half_width=8)
    assert fitted.error_db < exact.error_db - 20


def test_parity() -> None:
    weights = least_squares_differentiators(5, 7, 0.8)
    signs = (-1.0) ** np.arange(6)
    assert weights[:, ::-1] == pytest.approx(signs[:, None] * weights)


def test_width_follows_from_the_error_asked_for() -> None:
    widths = [
        choose_differentiators(8, family="least-squares", error_db=e, band_edge=0.8).half_width for e in (-20, -40, -60)
    ]
    assert widths == sorted(widths)
    chosen = choose_differentiators(8, family="least-squares", error_db=-40, band_edge=0.8)
    narrower = choose_differentiators(
        8, family="least-squares", error_db=-40, band_edge=0.8, half_width=chosen.half_width - 1
    )
    assert chosen.error_db <= -40 < narrower.error_db


@pytest.mark.parametrize("order", [1, 2, 4])
def test_low_orders_say_what_their_remainder_allows(order: int) -> None:
    # Taylor remainder of half a sample at 0.8 of Nyquist: below (0.4 pi)^(L+1) / (L+1)!, and near it.
    chosen = choose_differentiators(order, family="least-squares", error_db=-80, band_edge=0.8)
    bound_db = 20 * math.log10((0.4 * math.pi) ** (order + 1) / math.factorial(order + 1))
    assert bound_db - 3.0 < chosen.error_db < bound_db + 0.1


def test_too_narrow_is_refused() -> None:
    with pytest.raises(UnsolvableError, match="half_width 2 is too narrow for order 6"):
        choose_differentiators(6, family="least-squares", error_db=-40, band_edge=0.8, half_width=2)
