"""How many microphones, how far apart: the figures that decide, over shapes, numbers and sizes."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import InputError
from unmix.limits.ladder import climb, group_azimuths, responses, usable_band
from unmix.limits.shapes import SHAPES, Shape, make_shape, scaled
from unmix.limits.tolerances import Tolerances, first_order_leakage

__all__ = ["NUMBERS", "SIZES_M", "SweepRow", "sweep"]

Floats = NDArray[np.float64]

NUMBERS = (2, 3, 4, 6, 8, 12)
SIZES_M = (0.02, 0.04, 0.08, 0.16, 0.32)
PAIR_SPACINGS_M = (0.008, 0.012, 0.02)


@dataclass(frozen=True)
class SweepRow:
    """One array of a sweep.

    shape, microphones, size_m  what it is; "yours" is the array given, scaled
    lowest_hz, highest_hz, share  usable band, as of `UsableBand`
    best_snr_db                 output SNR at best
    tolerance_sir_db            SIR that the tolerances leave at 1 kHz, median over bearings
    """

    shape: str
    microphones: int
    size_m: float
    lowest_hz: float | None
    highest_hz: float | None
    share: float
    best_snr_db: float
    tolerance_sir_db: float


def sweep(
    own: Array | None,
    band_hz: Floats,
    *,
    shapes: Sequence[Shape] = SHAPES,
    numbers: Sequence[int] = NUMBERS,
    sizes_m: Sequence[float] = SIZES_M,
    separation_deg: float = 45.0,
    snr_db: float = 30.0,
    required_db: float = 10.0,
    tolerances: Tolerances | None = None,
    temperature_c: float = 20.0,
) -> tuple[SweepRow, ...]:
    """Every shape with every number and size; `own` is scaled through the sizes as well."""
    errors = tolerances or Tolerances()
    rows = []
    for shape, size, array in _arrays(own, shapes, numbers, sizes_m):
        ladder = climb(array, band_hz, separations_deg=[separation_deg], snr_db=snr_db, temperature_c=temperature_c)
        band = usable_band(band_hz, ladder.noise_gain_db[0], snr_db, required_db)
        h = responses(array, group_azimuths(np.radians(separation_deg)), np.array([1000.0]), temperature_c)
        leak = first_order_leakage(h, np.array([1000.0]), errors, temperature_c)
        sir = -10.0 * float(np.log10(np.median(leak.max(axis=-1))))
        best = float(ladder.best_snr_db[0])
        rows.append(SweepRow(shape, array.channels, size, band.lowest_hz, band.highest_hz, band.share, best, sir))
    return tuple(rows)


def _arrays(
    own: Array | None, shapes: Sequence[Shape], numbers: Sequence[int], sizes_m: Sequence[float]
) -> Iterator[tuple[str, float, Array]]:
    if own is not None:
        yield from (("yours", size, scaled(own, size)) for size in sorted({*sizes_m, round(own.aperture_m, 4)}))
    for shape in shapes:
        for number in (4,) if shape == "head pairs" else numbers:
            for size in PAIR_SPACINGS_M if shape == "head pairs" else sizes_m:
                try:
                    yield shape, size, make_shape(shape, number, size)
                except InputError:
                    continue  # a circle with a centre needs three
