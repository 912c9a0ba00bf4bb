"""Frame by frame inside, sample for sample outside."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pytest

from unmix.live.recursive import RecursiveStage
from unmix.scene import Talker

SEATS = [Talker.at("mate", 20.0), Talker.at("pilot", 95.0)]
SOUND = np.random.default_rng(95).standard_normal((3, 500))


class Frames:
    """Hands out whole frames of the first two channels, each once the next has begun to come."""

    def __init__(self, frame: int = 32, *, says: int | None = None) -> None:
        self.frame, self.says = frame, says
        self.held = np.zeros((3, 0))
        self.gain = np.ones((2, 1))

    @property
    def latency_samples(self) -> int:
        return 2 * self.frame - 1 if self.says is None else self.says

    def push(self, chunk: np.ndarray) -> np.ndarray:
        self.held = np.concatenate([self.held, chunk], axis=1)
        count = max(0, self.held.shape[1] // self.frame - 1) * self.frame
        out, self.held = self.gain * self.held[:2, :count], self.held[:, count:]
        return out

    def flush(self) -> np.ndarray:
        return self.gain * self.held[:2]

    def state(self) -> dict[str, Any]:
        return {"held": self.held.copy(), "gain": self.gain.copy()}

    def restore(self, state: dict[str, Any]) -> None:
        self.held, self.gain = state["held"].copy(), state["gain"].copy()


def steer(inner: Any, talkers: Sequence[Talker]) -> None:
    inner.gain = np.array([[t.azimuth] for t in talkers])


def stage(**options: Any) -> RecursiveStage:
    return RecursiveStage(lambda talkers: Frames(**options), SEATS, channels=3, steer=steer)


@pytest.mark.parametrize("size", [1, 32, 47, 500])
def test_samples_leave_exactly_the_latency_late(size: int) -> None:
    made = stage()
    out = [made.push(SOUND[:, at : at + size]) for at in range(0, 500, size)]
    assert [piece.shape[1] for piece in out] == [min(size, 500 - at) for at in range(0, 500, size)]
    joined = np.concatenate([*out, made.flush()], axis=1)
    assert np.array_equal(joined[:, 63:], SOUND[:2])
    assert not joined[:, :63].any()
    assert np.array_equal(made.push(SOUND[:, :100])[:, 63:], SOUND[:2, :37])  # a new stream


def test_state_and_bearings_go_through() -> None:
    one, other = stage(), stage()
    one.push(SOUND[:, :101])
    one.steer([Talker("mate", 2.0), Talker("pilot", 3.0)])
    other.restore(one.state())
    assert np.array_equal(one.push(SOUND[:, 101:400]), other.push(SOUND[:, 101:400]))
    assert np.array_equal(one.push(SOUND[:, 400:401]), [[2.0 * SOUND[0, 337]], [3.0 * SOUND[1, 337]]])


def test_a_separator_later_than_it_says_is_a_defect() -> None:
    with pytest.raises(RuntimeError, match="later than it says"):
        made = stage(says=10)
        for at in range(100):
            made.push(SOUND[:, at : at + 1])
