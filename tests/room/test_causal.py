"""The forms that run block by block: fixed latency, no dependence on chunks, state that can be put back."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
import pytest

from tests.room.scenes import RATE, rendered, scene_of
from unmix.errors import InputError
from unmix.jobs.reverberant import look_of
from unmix.jobs.solve import paths_of, solve
from unmix.room.causal import CausalStage, causal_stage
from unmix.room.low_latency import AdaptiveFilters
from unmix.settings import PredictionSettings, RoomSettings
from unmix.variant import PRESETS, Variant

RECURSIVE = Variant(
    name="recursive", room=RoomSettings(prediction=PredictionSettings(recursive=True), refinement=None, post=None)
)


def stage(variant: Variant) -> CausalStage:
    scene = scene_of(rendered(2, 0.3))
    paths = paths_of(scene, variant)
    known = partial(
        look_of, variant, paths, array=scene.array, sample_rate=RATE, temperature_c=scene.temperature_c, spectra=None
    )
    assert variant.room is not None
    return causal_stage(variant.room, known, sample_rate=RATE, channels=7, reference=0)


FORMS: list[Callable[[], CausalStage]] = [partial(stage, PRESETS["low-latency"]), partial(stage, RECURSIVE)]


@pytest.mark.parametrize("make", FORMS, ids=["low-latency", "recursive"])
def test_chunks_do_not_matter_and_latency_is_as_stated(make: Callable[[], CausalStage]) -> None:
    x = rendered(2, 0.3).mixture[:, : 2 * RATE]
    out = []
    for chunk in (32, 777, x.shape[1]):
        form = make()
        pieces = [form.push(x[:, at : at + chunk]) for at in range(0, x.shape[1], chunk)]
        assert all(p.shape[1] == min(chunk, x.shape[1] - i * chunk) for i, p in enumerate(pieces))
        rest = form.flush()
        assert rest.shape[1] == form.latency
        out.append(np.concatenate([*pieces, rest], axis=1))
    assert np.array_equal(out[0], out[1])
    assert np.array_equal(out[0], out[2])
    # One channel's own sound comes out where it went in, latency later.
    lag = np.argmax(np.correlate(out[0][0, : RATE + 4000], x[0, :RATE], "valid"))
    assert abs(int(lag) - make().latency) <= 8


@pytest.mark.parametrize("make", FORMS, ids=["low-latency", "recursive"])
def test_state_is_all_there_is(make: Callable[[], CausalStage]) -> None:
    x = rendered(2, 0.3).mixture[:, :RATE]
    one, other = make(), make()
    one.push(x[:, :9001])
    other.restore(one.state())
    assert np.array_equal(one.push(x[:, 9001:]), other.push(x[:, 9001:]))
    with pytest.raises((KeyError, ValueError)):
        other.restore({})


def test_the_stream_starts_anew_after_a_flush() -> None:
    x = rendered(2, 0.3).mixture[:, :RATE]
    form = stage(PRESETS["low-latency"])
    first = np.concatenate([form.push(x), form.flush()], axis=1)
    again = np.concatenate([form.push(x), form.flush()], axis=1)
    assert np.array_equal(first, again)


def test_file_job_gives_the_stream_aligned() -> None:
    made = rendered(2, 0.3)
    x = made.mixture
    form = stage(PRESETS["low-latency"])
    stream = np.concatenate([form.push(x), form.flush()], axis=1)[:, form.latency :]
    solved = solve(scene_of(made), "low-latency")
    assert np.array_equal(solved.signals, stream)
    assert solved.latency_ms == pytest.approx(1e3 * form.latency / RATE)


def test_it_learns_while_it_listens() -> None:
    from unmix.jobs.grade import grade

    made = rendered(2, 0.3)
    late = slice(made.mixture.shape[1] // 2, None)
    sir = {}
    for name in ("linear-constraint", "low-latency"):
        signals = solve(scene_of(made), name).signals
        graded = grade(signals[:, late], made.early[:, late], sample_rate=RATE).to_dict()
        sir[name] = np.mean([t["sir_db"] for t in graded["talkers"]])
    assert sir["low-latency"] > sir["linear-constraint"] + 2.0


def test_silence_leaves_it_as_it_is() -> None:
    form = stage(PRESETS["low-latency"])
    assert isinstance(form, AdaptiveFilters)
    x = rendered(2, 0.3).mixture
    form.push(x[:, : 2 * RATE])
    before = form.taps
    out = form.push(np.zeros((7, 4 * RATE)))
    assert np.isfinite(out).all()
    assert np.abs(form.taps - before).max() < 0.2 * np.abs(before).max()


def test_recursive_prediction_with_refinement_is_refused() -> None:
    variant = Variant(name="x", room=RoomSettings(prediction=PredictionSettings(recursive=True)))
    with pytest.raises(InputError, match='start from base = "dereverb"'):
        solve(scene_of(rendered(2, 0.3, seconds=3.0)), variant)
