"""From array, talkers and variant to what can run live; and which variants cannot, with the reason."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.audio import Recording
from unmix.errors import InputError, UnsolvableError
from unmix.live.bank import fitted
from unmix.live.refit import refit
from unmix.model.delays import Paths, paths_from_bearings
from unmix.model.noise import Spectra
from unmix.room.causal import asks_for_causal
from unmix.scene import Scene, Talker
from unmix.settings import RoomSettings
from unmix.solvers.assemble import assemble
from unmix.solvers.stationary import FilterBank
from unmix.variant import Variant

__all__ = ["Designer", "check_is_filters", "check_runs_live", "is_causal", "noise_spectra"]

Floats = NDArray[np.float64]

CUT_SHARE = 1e-4
"""Share of the filters' magnitude up to which tails are simply cut."""
LONGEST_REFIT = 1023
"""Samples of the past up to which filters are made anew; more would take longer and bring little."""


@dataclass(frozen=True)
class Designer:
    """Makes filters for talkers; array, variant and rate stay the same.

    spectra  covariance of talker-free stretches, for noise `measured`
    """

    array: Array
    variant: Variant
    sample_rate: int
    temperature_c: float = 20.0
    spectra: Spectra | None = None

    def __call__(self, talkers: Sequence[Talker]) -> FilterBank:
        """The variant's filters. Raises InputError without bearings, UnsolvableError where there is no answer."""
        assembly = assemble(
            self.variant,
            self.paths(talkers),
            self.array,
            sample_rate=self.sample_rate,
            temperature_c=self.temperature_c,
            spectra=self.spectra,
        )
        if assembly.bank is None:
            raise UnsolvableError(f"variant {self.variant.name!r} is no filter bank; {_USE}")
        return assembly.bank

    def within(self, talkers: Sequence[Talker], *, before: int, after: int) -> FilterBank:
        """The variant's filters with `before` samples of the future and at most `after` of the past.

        Little outside is cut; where it is more, the taps that remain make up for it.
        """
        bank = self(talkers)
        cut = fitted(bank, before=before, after=after)
        if cut.cut_share <= bank.cut_share + CUT_SHARE:
            return cut
        past = min(after, bank.after, LONGEST_REFIT)
        return refit(bank, self.paths(talkers), self.sample_rate, before=before, after=past)

    def paths(self, talkers: Sequence[Talker]) -> Paths:
        """Delays and gains of talkers at rest."""
        if not talkers:
            raise InputError("no talkers: give the bearing of each")
        for talker in talkers:
            if talker.azimuth is None:
                raise InputError(f"talker {talker.name!r} has no bearing; give one, or locate the talkers first")
        azimuth = np.array([t.azimuth or 0.0 for t in talkers])
        elevation = np.array([t.elevation for t in talkers])
        if self.array.responses is not None:
            from unmix.model.measured import paths_from_responses

            return paths_from_responses(self.array, azimuth, elevation, sample_rate=self.sample_rate)
        plane = self.variant.model.wave == "plane"
        return paths_from_bearings(
            self.array,
            azimuth,
            elevation,
            [np.nan if plane or t.distance_m is None else t.distance_m for t in talkers],
            temperature_c=self.temperature_c,
        )


_USE = "use a variant that is filters alone, such as model or linear-constraint"


def is_causal(room: RoomSettings) -> bool:
    """Whether a room stage runs chunk by chunk, and asks for nothing that needs whole segments."""
    return room.low_latency is not None or (asks_for_causal(room) and room.refinement is None and room.post is None)


def check_is_filters(variant: Variant, *, spectra: Spectra | None) -> None:
    """Raise UnsolvableError, with the reason and the remedy, for a variant that is more than filters."""
    cannot = _cannot(variant, "be exported as filters")
    if variant.room is not None and is_causal(variant.room):
        raise UnsolvableError(f"{cannot}: what it does is learned while it runs; {_USE}")
    _check(variant, cannot, spectra)


def check_runs_live(variant: Variant, *, spectra: Spectra | None) -> None:
    """Raise UnsolvableError, with the reason and the remedy, for a variant that cannot run chunk by chunk."""
    _check(variant, _cannot(variant, "run chunk by chunk"), spectra)


def _cannot(variant: Variant, what: str) -> str:
    return f"variant {variant.name or 'as given'!r} cannot {what}"


def _check(variant: Variant, cannot: str, spectra: Spectra | None) -> None:
    room = variant.room
    if room is not None and not is_causal(room):
        raise UnsolvableError(
            f"{cannot}: its room stage refines each segment of {room.segments.length_s:g} s from all of it, so that a "
            f"sample would wait that long; {_USE}, or low-latency"
        )
    if variant.separator != "model":
        return
    solver = variant.solver
    if solver.constraint == "free":
        raise UnsolvableError(f'{cannot}: constraint "free" takes each snapshot alone and separates nobody; {_USE}')
    if solver.method != "stationary":
        raise UnsolvableError(
            f"{cannot}: method {solver.method!r} solves whole blocks and some of the future with them; set "
            'method = "stationary", the same solution as filters'
        )
    if solver.noise in ("observed", "fitted"):
        raise UnsolvableError(
            f"{cannot}: noise {solver.noise!r} is computed from the whole recording before the first sample leaves; "
            "use white, diffuse, or measured with a stretch without talkers"
        )
    if solver.noise == "measured" and spectra is None:
        raise UnsolvableError(
            f'{cannot}: noise "measured" needs a stretch without talkers; pass it as `noise`, or give `noise_only_s` '
            "in the scene"
        )


def noise_spectra(scene: Scene) -> Spectra | None:
    """Covariance of a scene's talker-free stretches, as the file job takes it; None where the scene names none."""
    if not scene.noise_only_s:
        return None
    recording = scene.recording
    stretches = []
    for start_s, stop_s in scene.noise_only_s:
        start, stop = round(start_s * scene.sample_rate), min(round(stop_s * scene.sample_rate), recording.samples)
        if isinstance(recording, Recording):
            stretches.append(replace(recording, start=recording.start + start, stop=recording.start + stop).read())
        else:
            stretches.append(recording.signals[:, start:stop])
    return Spectra.of(stretches, scene.array.channels)
