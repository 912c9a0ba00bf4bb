"""The live separator against the file job; state, bearings, and what it refuses."""

from __future__ import annotations

import tracemalloc
from collections.abc import Sequence
from dataclasses import replace
from functools import cache

import msgspec
import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from tests.test_sofa import free_field
from unmix.errors import InputError, UnmixWarning, UnsolvableError
from unmix.jobs.solve import solve
from unmix.live.bank import fitted
from unmix.live.separator import LiveSeparator, track_source
from unmix.model.delays import paths_from_bearings
from unmix.scene import Scene, Talker
from unmix.solvers.stationary import FilterBank
from unmix.track import Track
from unmix.variant import PRESETS, Variant

RATE = 16000
ARRAY = circle()
MODEL = PRESETS["model"]
PROPAGATED = msgspec.structs.replace(
    MODEL, name="propagated", solver=msgspec.structs.replace(MODEL.solver, constraint="propagated")
)
DIFFUSE = msgspec.structs.replace(
    MODEL, name="diffuse", solver=msgspec.structs.replace(MODEL.solver, noise="diffuse", prior_weight=1e-4)
)
LIVE = ["reference-mic", "delay-and-sum", "minimum-variance", "linear-constraint", "model", PROPAGATED, DIFFUSE]


def seats(first: float = 20.0, second: float = 95.0) -> list[Talker]:
    return [Talker.at("mate", first, distance_m=1.2), Talker.at("pilot", second, distance_m=1.2)]


@cache
def recording() -> np.ndarray:
    paths = paths_from_bearings(ARRAY, np.radians([20.0, 95.0]), 0.0, 1.2)
    images = delayed(np.stack([speech("novel-reader", 1.0), speech("card-reader", 1.0)]), paths, RATE)
    sound = images.sum(axis=0) + 1e-4 * np.random.default_rng(82).standard_normal(images.shape[1:])
    sound.setflags(write=False)
    return np.asarray(sound)


def live(variant: str | Variant = "model", **options: object) -> LiveSeparator:
    return LiveSeparator(ARRAY, seats(), variant, sample_rate=RATE, **options)  # type: ignore[arg-type]


def carried(separator: LiveSeparator, sound: np.ndarray, sizes: Sequence[int]) -> np.ndarray:
    out, at, turn = [], 0, 0
    while at < sound.shape[1]:
        out.append(separator.push(sound[:, at : at + sizes[turn % len(sizes)]]))
        at, turn = at + sizes[turn % len(sizes)], turn + 1
    return np.concatenate(out, axis=1)


@pytest.mark.parametrize("variant", LIVE, ids=lambda v: v if isinstance(v, str) else v.name)
def test_output_is_the_file_jobs(variant: str | Variant) -> None:
    separator = live(variant)
    out = np.concatenate([carried(separator, recording(), [32, 1, 0, 777]), separator.flush()], axis=1)
    whole = solve(Scene.from_arrays(recording(), ARRAY, seats(), sample_rate=RATE), variant).signals
    assert whole is not None
    late = separator.latency_samples
    assert out.shape == (2, recording().shape[1] + late)
    assert np.abs(out[:, late:] - whole).max() < 1e-6 * np.abs(whole).max()


def test_noise_measured_gives_the_file_jobs_filters() -> None:
    variant = msgspec.structs.replace(
        MODEL, name="measured", solver=msgspec.structs.replace(MODEL.solver, noise="measured", prior_weight=1e-4)
    )
    sound = np.concatenate([np.random.default_rng(83).standard_normal((7, RATE)) * 1e-3, recording()], axis=1)
    scene = replace(Scene.from_arrays(sound, ARRAY, seats(), sample_rate=RATE), noise_only_s=[[0.0, 0.98]])
    separator = LiveSeparator.from_scene(scene, variant)
    out = np.concatenate([separator.push(sound), separator.flush()], axis=1)[:, separator.latency_samples :]
    whole = solve(scene, variant).signals
    assert whole is not None
    assert np.abs(out - whole).max() < 1e-6 * np.abs(whole).max()


def test_measured_responses_run_live_too() -> None:
    plain = circle(3)
    array = replace(plain, responses=free_field(plain))
    sound = recording()[:4, :4000]
    talkers = [Talker.at("mate", 20.0), Talker.at("pilot", 110.0)]
    separator = LiveSeparator(array, talkers, "model", sample_rate=RATE)
    assert separator.measure_latency() == (separator.latency_samples,) * 2
    out = np.concatenate([separator.push(sound), separator.flush()], axis=1)[:, separator.latency_samples :]
    whole = solve(Scene.from_arrays(sound, array, talkers, sample_rate=RATE), "model").signals
    assert whole is not None
    assert np.abs(out - whole).max() < 1e-6 * np.abs(whole).max()
    with pytest.raises(InputError, match="another array"):
        LiveSeparator(plain, talkers, "model", sample_rate=RATE).restore(separator.save_state())


@pytest.mark.parametrize("variant", ["reference-mic", "minimum-variance", "model", PROPAGATED], ids=str)
def test_measured_latency_is_the_stated_one(variant: str | Variant) -> None:
    separator = live(variant)
    assert separator.measure_latency() == (separator.latency_samples,) * 2
    assert separator.latency_s == separator.latency_samples / RATE


def test_less_look_ahead_is_less_latency() -> None:
    separator = live(lookahead_s=0.004)
    assert separator.latency_samples == 64
    assert separator.measure_latency() == (64, 64)
    assert 1e-4 < separator.cut_share < 1e-2  # the model's filters hold little beyond 64 samples of the future


def test_state_goes_on_to_the_last_bit() -> None:
    first, second = live(), live()
    sound = recording()
    first.push(sound[:, :5000])
    first.set_bearings(seats(30.0, 120.0))
    first.push(sound[:, 5000:5100])  # in the middle of the fade
    first.set_bearings(seats(40.0, 130.0))  # waits for it
    second.restore(first.save_state())
    assert second.position == 5100
    assert second.talkers == first.talkers
    assert np.array_equal(first.push(sound[:, 5100:9000]), second.push(sound[:, 5100:9000]))
    assert len(first.save_state()) < 1.1 * len(live().save_state())


@pytest.mark.parametrize("damage", [lambda s: b"", lambda s: s[: len(s) // 2], lambda s: b"PK\x03\x04" + s[4:-9]])
def test_damaged_state_is_refused(damage) -> None:
    separator = live()
    with pytest.raises(InputError, match="no state of a live separator"):
        separator.restore(damage(separator.save_state()))


def test_state_of_another_separator_is_refused() -> None:
    with pytest.raises(InputError, match="another array, variant, rate"):
        live("model").restore(live("linear-constraint").save_state())


def roughness(signal: np.ndarray) -> float:
    """Largest second difference: what a click raises, and a low tone hardly."""
    return float(np.abs(np.diff(signal, 2)).max())


def test_bearings_change_without_a_click() -> None:
    t = np.arange(RATE) / RATE
    paths = paths_from_bearings(ARRAY, np.radians([20.0, 95.0]), 0.0, 1.2)
    tone = delayed(np.stack([0.5 * np.sin(2 * np.pi * 100 * t), 0 * t]), paths, RATE).sum(axis=0)[:, :-1000]
    steady, faded, switched = live(), live(), live(fade_s=1e-9)
    calm = steady.push(tone)[:, 3000:]
    outs = []
    for separator in (faded, switched):
        head = separator.push(tone[:, :7000])
        separator.set_bearings(seats(60.0, 140.0))
        outs.append(np.concatenate([head, separator.push(tone[:, 7000:])], axis=1)[:, 3000:])
    assert roughness(outs[1]) > 10.0 * roughness(calm)  # a switch clicks
    assert roughness(outs[0]) < 1.5 * roughness(calm)
    change = faded.last_change
    assert change is not None and change.done and change.at_sample == 7000
    # A sin^2 fade of n samples steps by at most pi / 2n of the difference.
    assert 0.0 < change.step <= np.pi / 2 / (0.02 * RATE) * change.switch_step * (1 + 1e-9)


def test_after_the_fade_the_filters_are_those_of_the_new_bearings() -> None:
    separator = live()
    sound = recording()
    separator.push(sound[:, :4000])
    separator.set_bearings(seats(30.0, 120.0))
    out = separator.push(sound[:, 4000:])
    straight = LiveSeparator(ARRAY, seats(30.0, 120.0), "model", sample_rate=RATE)
    expected = straight.push(sound)[:, 4000:]
    shift = straight.latency_samples - separator.latency_samples
    a, b = out[:, 2000:8000], expected[:, 2000 + shift : 8000 + shift]
    # What the new filters have beyond the latency fixed at the start is cut.
    assert np.abs(a - b).max() < 1e-4 * np.abs(b).max()


def test_bearings_that_collide_leave_everything_as_it_was() -> None:
    sound = recording()
    separator, calm = live(), live()
    assert np.array_equal(separator.push(sound[:, :999]), calm.push(sound[:, :999]))
    with pytest.raises(UnsolvableError, match="same delays"):
        separator.set_bearings(seats(50.0, 50.0))
    with pytest.raises(InputError, match="1 bearings for 2 talkers"):
        separator.set_bearings(seats()[:1])
    assert separator.talkers == tuple(seats())
    assert np.array_equal(separator.push(sound[:, 999:]), calm.push(sound[:, 999:]))


def test_a_source_steers_the_same_whatever_the_chunks() -> None:
    walk = Track(np.array([0.0, 1.0]), np.radians([20.0, 60.0]), np.zeros(2), np.full(2, 1.2))
    talkers = [Talker("mate", track=walk), Talker.at("pilot", 120.0, distance_m=1.2)]
    scene = Scene.from_arrays(recording(), ARRAY, talkers, sample_rate=RATE)
    one, other = LiveSeparator.from_scene(scene, "model"), LiveSeparator.from_scene(scene, "model")
    a, b = carried(one, recording(), [32]), carried(other, recording(), [4096, 5])
    assert np.allclose(a, b, rtol=0, atol=1e-12)
    azimuth = one.talkers[0].azimuth
    assert azimuth is not None and np.degrees(azimuth) == pytest.approx(56.0, abs=0.5)  # news at 0.9 s


def test_a_source_that_collides_is_told_and_not_followed() -> None:
    meeting = track_source([Talker.at("mate", 20.0), Talker.at("pilot", 20.0)])
    separator, calm = live(source=meeting), live()
    with pytest.warns(UnmixWarning, match="not taken over: talkers 0 and 1"):
        out = separator.push(recording()[:, :3000])
    assert np.allclose(out, calm.push(recording()[:, :3000]), rtol=0, atol=1e-12)


@pytest.mark.parametrize(
    ("chunk", "said"),
    [
        (np.zeros((6, 32)), "7 microphones"),
        (np.zeros(32), "give .channels, n."),
        (np.zeros((7, 32), np.int16), "int16"),
        (np.full((7, 32), np.nan), "channel 0 holds NaN or infinite samples at 0.062 s"),
    ],
)
def test_bad_chunks_change_nothing(chunk: np.ndarray, said: str) -> None:
    separator, calm = live(), live()
    sound = recording()
    separator.push(sound[:, :1000])
    with pytest.raises(InputError, match=said):
        separator.push(chunk)
    assert separator.position == 1000
    calm.push(sound[:, :1000])
    assert np.array_equal(separator.push(sound[:, 1000:2000]), calm.push(sound[:, 1000:2000]))


def with_solver(**changes: object) -> Variant:
    return msgspec.structs.replace(MODEL, name="mine", solver=msgspec.structs.replace(MODEL.solver, **changes))


@pytest.mark.parametrize(
    ("variant", "why"),
    [
        ("full", "room stage refines each segment of 30 s"),
        (with_solver(method="reduced"), "whole blocks"),
        (with_solver(method="convex"), "whole blocks"),
        (with_solver(noise="observed"), "whole recording before the first sample"),
        (with_solver(noise="fitted"), "whole recording before the first sample"),
        (with_solver(noise="measured"), "stretch without talkers"),
        (with_solver(constraint="free"), "each snapshot alone"),
    ],
)
def test_variants_that_cannot_run_live_say_why(variant: str | Variant, why: str) -> None:
    with pytest.raises(UnsolvableError, match=why):
        live(variant)


def test_other_input_that_is_refused() -> None:
    with pytest.raises(InputError, match="sample rate 400"):
        LiveSeparator(ARRAY, seats(), sample_rate=400)
    with pytest.raises(InputError, match="no talkers"):
        LiveSeparator(ARRAY, [], sample_rate=RATE)
    with pytest.raises(InputError, match="'mate' has no bearing"):
        LiveSeparator(ARRAY, [Talker("mate")], sample_rate=RATE)
    with pytest.raises(InputError, match="noise of shape"):
        live(with_solver(noise="measured"), noise=np.zeros((3, 100)))
    with pytest.raises(InputError, match="look-ahead"):
        live(lookahead_s=-1.0)


def test_a_flush_ends_the_stream_and_the_next_starts_anew() -> None:
    separator = live()
    first = np.concatenate([separator.push(recording()), separator.flush()], axis=1)
    again = np.concatenate([separator.push(recording()), separator.flush()], axis=1)
    assert np.allclose(first, again, rtol=0, atol=1e-12)


def test_memory_does_not_grow() -> None:
    separator = live()
    chunk = np.ascontiguousarray(recording()[:, :32])
    for _ in range(200):
        separator.push(chunk)
    tracemalloc.start()
    for _ in range(200):
        separator.push(chunk)
    before, _ = tracemalloc.get_traced_memory()
    for _ in range(2000):
        separator.push(chunk)
    after, _ = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    # One chunk kept would be 1,792 bytes each time.
    assert after - before < 10_000


def test_fitted_pads_and_cuts() -> None:
    bank = FilterBank(np.array([[[1.0, 2.0, 4.0, 1.0]]]), 1, 0.0)
    padded = fitted(bank, before=3)
    assert padded.before == 3 and padded.taps.tolist() == [[[0, 0, 1, 2, 4, 1]]] and padded.cut_share == 0.0
    cut = fitted(bank, before=0, after=1)
    assert cut.before == 0 and cut.taps.tolist() == [[[2, 4]]] and cut.cut_share == pytest.approx(0.25)
