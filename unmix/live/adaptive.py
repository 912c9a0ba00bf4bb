"""The causal forms of the room stage as live stages: told of talkers, they take of each what the model knows.

Both forms start from and are held to the bearings: filters that are learned on the way (`low-latency`), and late
reverberation predicted recursively (`dereverb` with `room.prediction.recursive`).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import partial

import numpy as np
from numpy.typing import NDArray

from unmix.jobs.reverberant import look_of
from unmix.live.design import Designer
from unmix.live.stage import State, turn
from unmix.room.causal import causal_stage
from unmix.room.chain import Look
from unmix.scene import Talker
from unmix.settings import RoomSettings
from unmix.solvers.pose import check_solvable

__all__ = ["CausalRoomStage"]

Floats = NDArray[np.float64]

FOLLOWED = np.radians(15.0)
"""Talkers who turn by less have moved on, and what was learned of them stays; others are somewhere else."""


class CausalRoomStage:
    """A room stage of fixed latency for talkers."""

    def __init__(self, design: Designer, settings: RoomSettings, talkers: Sequence[Talker]) -> None:
        self._design, self._seats = design, tuple(talkers)
        self._stage = causal_stage(
            settings,
            partial(self._known, talkers),
            sample_rate=design.sample_rate,
            channels=design.array.channels,
            reference=design.array.reference_channel,
        )

    @property
    def latency(self) -> int:
        """Samples by which what comes out is late."""
        return self._stage.latency

    @property
    def talkers(self) -> int:
        """Number of talkers."""
        return self._stage.talkers

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return (talkers, n)."""
        return self._stage.push(chunk)

    def flush(self) -> Floats:
        """The last `latency` samples; what was learned is forgotten."""
        return self._stage.flush()

    def prepare(self, talkers: Sequence[Talker]) -> Callable[[], None]:
        """Go along with talkers who moved a little; start anew from bearings that are others."""
        known = self._known(talkers, self._stage.frequencies_hz)

        def change() -> None:
            if max(map(turn, self._seats, talkers)) < FOLLOWED:
                self._stage.follow(known)
            else:
                self._stage.steer(known)
            self._seats = tuple(talkers)

        return change

    def state(self) -> State:
        """What was heard and learned, and where the talkers are."""
        seats = [[t.azimuth or 0.0, t.elevation, np.nan if t.distance_m is None else t.distance_m] for t in self._seats]
        return {**{f"stage.{name}": value for name, value in self._stage.state().items()}, "seats": np.array(seats)}

    def restore(self, state: State) -> None:
        """Go on from a state."""
        seats = tuple(
            Talker(t.name, float(azimuth), float(elevation), float(distance) if np.isfinite(distance) else None)
            for t, (azimuth, elevation, distance) in zip(self._seats, state["seats"], strict=True)
        )
        inner = {name.removeprefix("stage."): v for name, v in state.items() if name.startswith("stage.")}
        self._stage.restore(inner)
        if seats != self._seats:
            self._stage.follow(self._known(seats, self._stage.frequencies_hz))
        self._seats = seats

    def _known(self, talkers: Sequence[Talker], frequencies_hz: Floats) -> Look:
        """What the model knows of talkers. Raises UnsolvableError where their bearings coincide."""
        design = self._design
        paths = design.paths(talkers)
        check_solvable(paths)
        return look_of(
            design.variant,
            paths,
            frequencies_hz,
            array=design.array,
            sample_rate=design.sample_rate,
            temperature_c=design.temperature_c,
            spectra=design.spectra,
        )
