"""Changes of bearings prepared beside the audio."""

from __future__ import annotations

import threading
import time

import numpy as np
import pytest

from tests.live.test_separator import ARRAY, RATE, live, recording, seats
from unmix.errors import UnmixWarning
from unmix.live.ahead import Ahead
from unmix.live.separator import LiveSeparator


class Slow:
    """Prepares when told to."""

    def __init__(self) -> None:
        self.go = threading.Semaphore(0)
        self.began: list[float | None] = []
        self.made: list[float | None] = []

    def __call__(self, talkers):  # type: ignore[no-untyped-def]
        self.began.append(talkers[0].azimuth)
        assert self.go.acquire(timeout=20.0)
        return lambda: self.made.append(talkers[0].azimuth)


def test_the_audio_never_waits_and_the_last_one_asked_for_is_made() -> None:
    slow = Slow()
    ahead = Ahead(slow)
    assert ahead.ready() is None and ahead.asked is None and ahead.rest() is None
    for azimuth in (10.0, 20.0, 30.0):
        ahead.ask(seats(azimuth), 0.0)
        assert ahead.ready() is None  # not there yet, and not waited for
    assert ahead.asked == tuple(seats(30.0))
    slow.go.release(2)
    done = ahead.rest()
    assert done is not None and done.change is not None
    done.change()
    assert np.degrees(np.array(slow.began, float)) == pytest.approx([10.0, 30.0])  # 20 was overtaken
    assert np.degrees(np.array(slow.made, float)) == pytest.approx([30.0])
    assert ahead.ready() is None and ahead.asked is None


def test_what_goes_wrong_in_the_thread_is_handed_over() -> None:
    def broken(talkers):  # type: ignore[no-untyped-def]
        raise ZeroDivisionError

    ahead = Ahead(broken)
    ahead.ask(seats(), 1.5)
    done = ahead.rest()
    assert done is not None and isinstance(done.error, ZeroDivisionError) and done.at_s == 1.5


def test_a_change_designed_beside_the_audio_is_the_one_that_was_waited_for() -> None:
    """Once its filters are there, the change is the same to the last bit."""
    sound = recording()
    beside, waited = live(wait=False), live()
    for separator in (beside, waited):
        separator.push(sound[:, :4000])
    beside.set_bearings(seats(30.0, 120.0))
    assert beside.talkers == tuple(seats())  # still those that are heard
    assert beside._ahead is not None
    while beside._ahead._busy():
        time.sleep(0.002)
    waited.set_bearings(seats(30.0, 120.0))
    assert np.array_equal(beside.push(sound[:, 4000:]), waited.push(sound[:, 4000:]))
    assert beside.talkers == tuple(seats(30.0, 120.0))
    assert beside.last_change is not None and beside.last_change.at_sample == 4000


@pytest.mark.parametrize("variant", ["model", "low-latency"])
def test_asking_takes_no_time_that_the_audio_has_not(variant: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """While filters are being designed, audio goes on with the old ones."""
    gate = threading.Event()
    separator, calm = live(variant, wait=False), live(variant)
    prepare = separator._stage.prepare
    assert separator._ahead is not None
    monkeypatch.setattr(separator._ahead, "_prepare", lambda talkers: (gate.wait(20.0), prepare(talkers))[1])
    separator.set_bearings(seats(30.0, 120.0))
    sound = recording()
    assert np.array_equal(separator.push(sound[:, :5000]), calm.push(sound[:, :5000]))
    gate.set()
    separator.flush()
    assert separator.talkers == tuple(seats(30.0, 120.0))


def test_bearings_that_collide_are_told_by_the_push_after() -> None:
    separator, calm = live(wait=False), live()
    sound = recording()
    separator.push(sound[:, :1600]), calm.push(sound[:, :1600])
    separator.set_bearings(seats(50.0, 50.0))
    assert separator._ahead is not None
    while separator._ahead._busy():
        time.sleep(0.002)
    with pytest.warns(UnmixWarning, match=r"bearings at 0\.1 s not taken over: talkers 0 and 1"):
        out = separator.push(sound[:, 1600:])
    assert np.array_equal(out, calm.push(sound[:, 1600:]))
    assert separator.talkers == tuple(seats())


def test_a_state_restored_forgets_what_was_asked_for() -> None:
    separator = LiveSeparator(ARRAY, seats(), "model", sample_rate=RATE, wait=False)
    state = separator.save_state()
    separator.set_bearings(seats(30.0, 120.0))
    separator.restore(state)
    separator.push(recording())
    assert separator.talkers == tuple(seats())
