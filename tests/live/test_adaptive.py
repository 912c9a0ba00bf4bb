"""The low-latency room stage, live: latency, state, bearings, cost in memory."""

from __future__ import annotations

import tracemalloc
from functools import cache

import msgspec
import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from unmix.errors import UnsolvableError
from unmix.export.job import export_bank
from unmix.jobs.solve import solve
from unmix.live.adaptive import CausalRoomStage
from unmix.live.separator import LiveSeparator
from unmix.model.delays import paths_from_bearings
from unmix.room.low_latency import AdaptiveFilters
from unmix.scene import Scene, Talker
from unmix.variant import PRESETS, Variant

RATE = 16000
ARRAY = circle()
LOW = PRESETS["low-latency"]


def recursive() -> Variant:
    room = PRESETS["dereverb"].room
    assert room is not None and room.prediction is not None
    prediction = msgspec.structs.replace(room.prediction, recursive=True)
    return msgspec.structs.replace(
        PRESETS["dereverb"], name="recursive", room=msgspec.structs.replace(room, prediction=prediction)
    )


def seats(first: float = 20.0, second: float = 95.0) -> list[Talker]:
    return [Talker.at("mate", first, distance_m=1.2), Talker.at("pilot", second, distance_m=1.2)]


def live(**options: object) -> LiveSeparator:
    return LiveSeparator(ARRAY, seats(), LOW, sample_rate=RATE, **options)  # type: ignore[arg-type]


@cache
def recording() -> np.ndarray:
    paths = paths_from_bearings(ARRAY, np.radians([20.0, 95.0]), 0.0, 1.2)
    images = delayed(np.stack([speech("novel-reader", 2.0), speech("card-reader", 2.0)]), paths, RATE)
    return np.asarray(images.sum(axis=0) + 1e-4 * np.random.default_rng(96).standard_normal(images.shape[1:]))


def test_latency_is_as_stated_and_below_twenty_milliseconds() -> None:
    separator = live()
    assert separator.measure_latency() == (separator.latency_samples,) * 2
    assert separator.latency_s < 0.02
    shorter = live(lookahead_s=0.004)
    assert shorter.latency_samples == separator.latency_samples - round(0.008 * RATE)
    assert shorter.measure_latency() == (shorter.latency_samples,) * 2


@pytest.mark.parametrize("variant", [LOW, recursive()], ids=lambda v: v.name)
def test_output_is_the_file_jobs(variant: Variant) -> None:
    separator = LiveSeparator(ARRAY, seats(), variant, sample_rate=RATE)
    sound = recording()[:, :16000]
    parts = [separator.push(sound[:, at : at + 700]) for at in range(0, sound.shape[1], 700)]
    out = np.concatenate([*parts, separator.flush()], axis=1)[:, separator.latency_samples :]
    whole = solve(Scene.from_arrays(sound, ARRAY, seats(), sample_rate=RATE), variant).signals
    assert whole is not None and whole.shape == out.shape
    assert np.abs(out - whole).max() < 1e-6 * np.abs(whole).max()
    assert separator.measure_latency() == (separator.latency_samples,) * 2


def test_who_moves_a_little_is_followed() -> None:
    separator = live()
    separator.push(recording()[:, :16000])
    stage = separator._stage
    assert isinstance(stage, CausalRoomStage) and isinstance(stage._stage, AdaptiveFilters)
    separator.set_bearings(seats(25.0, 95.0))
    assert stage._stage._count > 10.0  # frames that still count
    separator.set_bearings(seats(60.0, 120.0))
    assert stage._stage._count < 1.0


def test_chunks_do_not_matter_and_state_goes_on() -> None:
    one, other = live(), live()
    sound = recording()
    whole = one.push(sound)
    parts = [other.push(sound[:, at : at + 333]) for at in range(0, 8000, 333)]
    third = live()
    third.restore(other.save_state())
    at = other.position
    rest = third.push(sound[:, at:])
    joined = np.concatenate([*parts, rest], axis=1)
    # Single precision inside; sums in another order.
    assert np.abs(joined - whole).max() < 1e-5 * np.abs(whole).max()
    assert whole.shape == (2, sound.shape[1])
    assert one.flush().shape == (2, one.latency_samples)


def test_bearings_change_and_collide() -> None:
    separator = live()
    sound = recording()
    head = separator.push(sound[:, :8000])
    with pytest.raises(UnsolvableError, match="same delays"):
        separator.set_bearings(seats(50.0, 50.0))
    separator.set_bearings(seats(95.0, 20.0))
    tail = separator.push(sound[:, 8000:])
    calm = live().push(sound)
    # The talkers have changed places: each output becomes the other's.
    late = slice(12000, None)
    out = np.concatenate([head, tail], axis=1)
    assert np.array_equal(head, calm[:, :8000])
    for k in range(2):
        assert np.corrcoef(out[k, late], calm[1 - k, late])[0, 1] > 0.9
    assert np.abs(np.diff(out, 2)).max() < 2.0 * np.abs(np.diff(calm, 2)).max()  # and no click


def test_memory_does_not_grow() -> None:
    separator = live()
    chunk = np.ascontiguousarray(recording()[:, 4000:4032])
    for _ in range(300):
        separator.push(chunk)
    tracemalloc.start()
    for _ in range(100):
        separator.push(chunk)
    before, _ = tracemalloc.get_traced_memory()
    for _ in range(600):
        separator.push(chunk)
    after, _ = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    # One chunk kept would be 1,792 bytes each time; buffers of one block come and go.
    assert after - before < 50_000


def test_what_is_learned_while_running_cannot_be_exported(tmp_path) -> None:
    with pytest.raises(UnsolvableError, match="is learned while it runs"):
        export_bank(ARRAY, seats(), tmp_path / "no", LOW, sample_rate=RATE)
