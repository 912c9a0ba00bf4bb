"""A table of filters over bearings: one talker goes round, the others stay; and what interpolation costs.

Between entries at theta_i, taps are interpolated one by one: `nearest`, `linear`, or `cubic` (Lagrange on the four
entries around). All entries have the same delay and length, so that one convolution serves them all. The cost is the
SIR, by formula, at the bearings halfway between entries, where interpolation is worst, against filters made there.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError, UnsolvableError
from unmix.export.sir import predicted_sir_db
from unmix.live.design import Designer
from unmix.scene import Talker
from unmix.solvers.stationary import FilterBank

__all__ = ["INTERPOLATIONS", "BearingGrid", "Interpolation", "InterpolationCost", "bearing_grid", "interpolation_cost"]

Floats = NDArray[np.float64]
Interpolation = Literal["nearest", "linear", "cubic"]
INTERPOLATIONS: tuple[Interpolation, ...] = get_args(Interpolation)


@dataclass(frozen=True)
class BearingGrid:
    """Filters for one talker all around the array.

    talker       which one goes round
    azimuth_deg  (entries,), evenly spaced from -180 up
    taps         (entries, talkers, channels, length); NaN where there is no answer or the talker is too near another
    delay        samples by which the output is late
    """

    talker: int
    azimuth_deg: Floats
    taps: Floats
    delay: int

    @property
    def valid(self) -> NDArray[np.bool_]:
        """(entries,): whether an entry can be used."""
        return np.asarray(np.isfinite(self.taps[:, 0, 0, 0]))

    def at(self, azimuth_deg: float, how: Interpolation = "linear") -> Floats:
        """Filters (talkers, channels, length) for a bearing; NaN where an entry that is needed has no answer."""
        step = 360.0 / len(self.azimuth_deg)
        place = ((azimuth_deg - self.azimuth_deg[0]) % 360.0) / step
        first = int(np.floor(place))
        along = place - first
        weights = _WEIGHTS[how](along)
        entries = (first + _FIRST[how] + np.arange(len(weights))) % len(self.azimuth_deg)
        return np.asarray(np.einsum("e,ekml->kml", weights, self.taps[entries]))


def _lagrange(x: float) -> Floats:
    """Weights of the entries at -1, 0, 1, 2 for a place 0 <= x < 1."""
    return np.array(
        [
            -x * (x - 1.0) * (x - 2.0) / 6.0,
            (x + 1.0) * (x - 1.0) * (x - 2.0) / 2.0,
            -(x + 1.0) * x * (x - 2.0) / 2.0,
            (x + 1.0) * x * (x - 1.0) / 6.0,
        ]
    )


_WEIGHTS: dict[Interpolation, Callable[[float], Floats]] = {
    "nearest": lambda x: np.array([1.0, 0.0]) if x < 0.5 else np.array([0.0, 1.0]),
    "linear": lambda x: np.array([1.0 - x, x]),
    "cubic": _lagrange,
}
_FIRST: dict[Interpolation, int] = {"nearest": 0, "linear": 0, "cubic": -1}


def bearing_grid(
    design: Designer,
    talkers: Sequence[Talker],
    *,
    talker: int,
    step_deg: float,
    before: int,
    after: int,
    least_apart_deg: float = 15.0,
    progress: Callable[[float], None] | None = None,
) -> BearingGrid:
    """Make the filters of every entry, each with `before` samples of the future and `after` of the past.

    Raises InputError when `step_deg` does not divide the circle or `talker` is none of them.
    """
    count = round(360.0 / step_deg) if step_deg > 0.0 else 0
    if count < 4 or abs(count * step_deg - 360.0) > 1e-6:
        raise InputError(f"a grid of {step_deg:g} degrees does not divide the circle; give 1, 2, 3, 5, 10, ...")
    if not 0 <= talker < len(talkers):
        raise InputError(f"there is no talker {talker}; they count from 0 to {len(talkers) - 1}")
    azimuths = -180.0 + step_deg * np.arange(count)
    entries: list[Floats | None] = []
    for index, azimuth in enumerate(azimuths):
        bank = _bank_at(design, talkers, talker, float(azimuth), least_apart_deg, before, after)
        entries.append(None if bank is None else _padded(bank, after))
        if progress is not None:
            progress((index + 1) / count)
    made = [entry for entry in entries if entry is not None]
    if not made:
        raise UnsolvableError("no bearing of the grid has filters: the other talkers leave no room")
    gap = np.full_like(made[0], np.nan)
    taps = np.stack([gap if entry is None else entry for entry in entries])
    return BearingGrid(talker, np.asarray(azimuths, np.float64), taps, before)


@dataclass(frozen=True)
class InterpolationCost:
    """SIR lost halfway between entries, over those where filters exist.

    median_db, worst_db   lost, over bearings, by the worst talker at each
    worst_at_deg          where most is lost
    left_median_db, left_worst_db   the SIR that is left, likewise
    """

    how: Interpolation
    median_db: float
    worst_db: float
    worst_at_deg: float
    left_median_db: float
    left_worst_db: float


def interpolation_cost(
    grid: BearingGrid,
    design: Designer,
    talkers: Sequence[Talker],
    spectra: Floats,
    *,
    least_apart_deg: float = 15.0,
) -> list[InterpolationCost]:
    """What each interpolation costs in SIR at the bearings halfway between entries."""
    if len(talkers) < 2:
        return []
    after = grid.taps.shape[-1] - grid.delay - 1
    lost: dict[Interpolation, list[float]] = {how: [] for how in INTERPOLATIONS}
    left: dict[Interpolation, list[float]] = {how: [] for how in INTERPOLATIONS}
    places = []
    for azimuth in grid.azimuth_deg + 180.0 / len(grid.azimuth_deg):
        bank = _bank_at(design, talkers, grid.talker, float(azimuth), least_apart_deg, grid.delay, after)
        between = {how: grid.at(float(azimuth), how) for how in INTERPOLATIONS}
        if bank is None or not all(np.isfinite(taps).all() for taps in between.values()):
            continue
        paths = design.paths(_placed(talkers, grid.talker, float(azimuth)))
        made = predicted_sir_db(bank, paths, spectra, design.sample_rate)
        places.append(float(azimuth))
        for how, taps in between.items():
            sir = predicted_sir_db(FilterBank(taps, grid.delay, 0.0), paths, spectra, design.sample_rate)
            lost[how].append(float((made - sir).max()))
            left[how].append(float(sir.min()))
    if not places:
        return []
    return [
        InterpolationCost(
            how,
            float(np.median(values)),
            max(values),
            places[int(np.argmax(values))],
            float(np.median(left[how])),
            min(left[how]),
        )
        for how, values in lost.items()
    ]


def _placed(talkers: Sequence[Talker], talker: int, azimuth_deg: float) -> list[Talker]:
    moved = list(talkers)
    moved[talker] = replace(moved[talker], azimuth=float(np.radians(azimuth_deg)), track=None)
    return moved


def _bank_at(
    design: Designer,
    talkers: Sequence[Talker],
    talker: int,
    azimuth_deg: float,
    least_apart_deg: float,
    before: int,
    after: int,
) -> FilterBank | None:
    others = [np.degrees(t.azimuth or 0.0) for i, t in enumerate(talkers) if i != talker]
    if any(abs((azimuth_deg - other + 180.0) % 360.0 - 180.0) < least_apart_deg for other in others):
        return None
    try:
        return design.within(_placed(talkers, talker, azimuth_deg), before=before, after=after)
    except UnsolvableError:
        return None


def _padded(bank: FilterBank, after: int) -> Floats:
    return np.pad(bank.taps, ((0, 0), (0, 0), (0, after - bank.after)))
