"""The expansion order needed for a stated error.

Cutting the expansion of exp(-j x), x = omega d, after order L leaves less than |x|^(L+1) / (L+1)! (Lagrange), nearly
reached for x below L. About the sample itself ("own") d is the largest delay against the reference microphone; about
the nearest sample ("nearest") at most half a sample. Derivatives are taken as exact; what differentiators of a
stated width add is in `unmix.model.differentiators`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.physics import speed_of_sound

__all__ = ["OrdersNeeded", "order_needed", "orders_needed", "remainder_bound_db"]

Floats = NDArray[np.float64]

HIGHEST_ORDER = 2000


@dataclass(frozen=True)
class OrdersNeeded:
    """Smallest orders that hold the error up to the upper edge of each third octave; (bands,) each."""

    band_hz: Floats
    error_db: float
    own: NDArray[np.int64]
    nearest: NDArray[np.int64]


def remainder_bound_db(order: int, x: float) -> float:
    """20 log10(|x|^(order + 1) / (order + 1)!)."""
    if x == 0.0:
        return -math.inf
    return 20.0 / math.log(10.0) * ((order + 1) * math.log(abs(x)) - math.lgamma(order + 2))


def order_needed(x: float, error_db: float) -> int:
    """Smallest order whose remainder at phase x (and below) stays under `error_db`; `HIGHEST_ORDER` when none does."""
    for order in range(HIGHEST_ORDER):
        if remainder_bound_db(order, x) <= error_db:
            return order
    return HIGHEST_ORDER


def orders_needed(
    array: Array, band_hz: Floats, sample_rate: float, error_db: float, temperature_c: float = 20.0
) -> OrdersNeeded:
    """Orders for waves from any direction, both anchors."""
    reference = array.reference_channel
    farthest = np.linalg.norm(array.positions_m - array.positions_m[reference], axis=1) / speed_of_sound(temperature_c)
    longest = float((farthest + np.abs(array.delay_s - array.delay_s[reference])).max())
    omega = 2.0 * np.pi * band_hz * 2.0 ** (1.0 / 6.0)
    own = [order_needed(float(w * longest), error_db) for w in omega]
    nearest = [order_needed(float(0.5 * w / sample_rate), error_db) for w in omega]
    return OrdersNeeded(band_hz, error_db, np.array(own), np.array(nearest))
