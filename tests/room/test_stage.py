"""The room stage in rendered rooms: what it reaches, what it survives, what it says."""

from __future__ import annotations

import numpy as np
import pytest

from tests.room.scenes import RATE, rendered, scene_of
from unmix.jobs.grade import grade
from unmix.jobs.solve import solve
from unmix.render.compose import RenderedScene
from unmix.scene import Scene, Talker
from unmix.settings import RoomSettings, SegmentSettings, TransformSettings
from unmix.track import Track
from unmix.variant import PRESETS, Variant

pytestmark = pytest.mark.filterwarnings("ignore::unmix.errors.UnmixWarning")


def figures(signals: np.ndarray, made: RenderedScene, name: str) -> np.ndarray:
    """One figure of every talker against the early reference."""
    graded = grade(signals, made.early[: len(signals)], sample_rate=RATE, unprocessed=made.mixture).to_dict()
    return np.array([t[name] for t in graded["talkers"]])


def room(**changes: object) -> Variant:
    return Variant(name="own", room=RoomSettings(**changes))  # type: ignore[arg-type]


def test_a_room_costs_the_model_what_the_stage_gives_back() -> None:
    made = rendered(2, 0.4)
    scene = scene_of(made)
    full, model = solve(scene, "full"), solve(scene, "model")
    assert figures(full.signals, made, "sir_db").min() > figures(model.signals, made, "sir_db").max() + 10.0
    gain = figures(full.signals, made, "stoi") - figures(made.mixture[:1].repeat(2, axis=0), made, "stoi")
    assert gain.min() > 0.15
    assert full.fallbacks == ()
    report = full.details["room"]
    assert all(s["fit_gain_db"] > 1.0 for s in report["segments"])
    assert sum(np.array(share) for share in report["shares"].values()) == pytest.approx([1.0, 1.0])


def test_every_part_adds_to_the_one_before() -> None:
    made = rendered(3, 0.4)
    scene = scene_of(made)
    stoi = [figures(solve(scene, v).signals, made, "stoi").mean() for v in ("model", "dereverb", "refined", "full")]
    assert np.all(np.diff(stoi) > 0.0), stoi


def test_single_precision_costs_nothing() -> None:
    made = rendered(2, 0.4)
    single, double = (
        solve(scene_of(made), room(transform=TransformSettings(precision=p))).signals for p in ("single", "double")
    )
    stoi = [figures(s, made, "stoi").mean() for s in (single, double)]
    assert abs(stoi[0] - stoi[1]) < 0.002
    assert abs(figures(single, made, "sir_db").mean() - figures(double, made, "sir_db").mean()) < 0.5


def test_without_reflections_the_model_alone_answers() -> None:
    made = rendered(2, None)
    scene = scene_of(made)
    full, model = solve(scene, "full"), solve(scene, "model")
    assert np.array_equal(full.signals, model.signals)
    assert full.details["room"]["fallback"] == "model"
    assert "the delays alone explain the recording" in full.fallbacks[0]
    unjudged = solve(scene, room(judge=False))
    assert figures(unjudged.signals, made, "sir_db").mean() < figures(full.signals, made, "sir_db").mean() - 5.0


def test_an_unnamed_voice_is_noticed() -> None:
    made = rendered(3, 0.3)
    for named, noticed in ((2, True), (3, False)):
        lines = solve(scene_of(made, talkers=named), "full").warnings
        assert any("somebody else speaks" in line for line in lines) is noticed, lines


def test_segments_carry_over() -> None:
    made = rendered(2, 0.3, seconds=12.0)
    scene = scene_of(made)
    whole = solve(scene, "full")
    parts = solve(scene, room(segments=SegmentSettings(length_s=4.0)))
    assert len(parts.details["room"]["segments"]) == 3
    assert parts.signals.shape == whole.signals.shape
    own = [abs(np.corrcoef(parts.signals[k], whole.signals[k])[0, 1]) for k in range(2)]
    other = [abs(np.corrcoef(parts.signals[k], whole.signals[1 - k])[0, 1]) for k in range(2)]
    assert min(own) > 0.9, "talkers keep their names over segments"
    assert max(other) < 0.1


def test_what_comes_out_does_not_depend_on_chunks() -> None:
    made = rendered(2, 0.3, seconds=12.0)
    from unmix.jobs.reverberant import room_stage
    from unmix.jobs.solve import paths_of
    from unmix.solvers.assemble import assemble

    scene, variant = scene_of(made), room(segments=SegmentSettings(length_s=3.0))
    paths = paths_of(scene, variant)
    out = []
    for chunk in (997, 16000):
        model = assemble(variant, paths, scene.array, sample_rate=RATE).separator
        stage = room_stage(scene, variant, paths, None, model)
        pieces = [stage.push(made.mixture[:, at : at + chunk]) for at in range(0, made.mixture.shape[1], chunk)]
        out.append(np.concatenate([*pieces, stage.flush()], axis=1))
    assert np.array_equal(out[0], out[1])
    assert out[0].shape[1] == made.mixture.shape[1]


def test_a_talker_who_comes_late_does_no_harm() -> None:
    made = rendered(2, 0.3, seconds=12.0)
    recording = made.mixture.copy()
    silent = made.images[1, :, : 6 * RATE] if made.images.ndim == 3 else None
    assert silent is not None
    recording[:, : 6 * RATE] -= silent
    solved = solve(scene_of(made, recording), room(segments=SegmentSettings(length_s=4.0)))
    late = slice(6 * RATE, None)
    own = abs(np.corrcoef(solved.signals[1, late], made.early[1, late])[0, 1])
    other = abs(np.corrcoef(solved.signals[1, late], made.early[0, late])[0, 1])
    assert own > 0.8
    assert other < 0.1
    assert np.abs(solved.signals[1, : 5 * RATE]).max() < 0.5 * np.abs(solved.signals[0, : 5 * RATE]).max()


@pytest.mark.parametrize(
    "damage", ["silence", "silent channel", "copied channel", "offset", "clipped", "one never speaks", "noise only"]
)
def test_damaged_recordings_come_through(damage: str, rng: np.random.Generator) -> None:
    made = rendered(2, 0.3, seconds=3.0)
    x = made.mixture.copy()
    if damage == "silence":
        x[:] = 0.0
    elif damage == "silent channel":
        x[3] = 0.0
    elif damage == "copied channel":
        x[3] = x[4]
    elif damage == "offset":
        x += 0.3
    elif damage == "clipped":
        x = np.clip(x, -0.3 * np.abs(x).max(), 0.3 * np.abs(x).max())
    elif damage == "one never speaks":
        x = made.mixture - made.images[1]
    elif damage == "noise only":
        x = 0.01 * rng.standard_normal(x.shape)
    solved = solve(scene_of(made, x), "full")
    assert np.isfinite(solved.signals).all()
    assert np.abs(solved.signals).max() < 10.0 * max(np.abs(x).max(), 1e-9)
    if damage == "silence":
        assert solved.details["room"]["fallback"] == "silence"
        assert any("silent" in line for line in solved.warnings)


def test_one_talker_alone_is_dereverberated() -> None:
    made = rendered(1, 0.4)
    solved = solve(scene_of(made), "full")
    assert solved.fallbacks == ()
    stoi = [figures(s, made, "stoi")[0] for s in (solved.signals, made.mixture[:1])]
    assert stoi[0] > stoi[1]
    assert figures(solved.signals, made, "sdr_db")[0] > figures(made.mixture[:1], made, "sdr_db")[0] + 3.0


def test_numbers_that_are_lost_fall_back_by_name(monkeypatch: pytest.MonkeyPatch) -> None:
    from unmix.room import chain

    made = rendered(2, 0.3, seconds=3.0)
    monkeypatch.setattr(chain, "gains", lambda early, noise, post: np.full(early.shape, np.nan, np.float32))
    solved = solve(scene_of(made), "full")
    assert np.isfinite(solved.signals).all()
    assert "singular beyond repair" in solved.fallbacks[0]


@pytest.mark.parametrize("seconds", [0.2, 0.9, 1.3])
def test_short_recordings_say_so(seconds: float) -> None:
    made = rendered(2, 0.3, seconds=3.0)
    solved = solve(scene_of(made, made.mixture[:, : round(seconds * RATE)]), "full")
    assert np.isfinite(solved.signals).all()
    assert solved.signals.shape[1] == round(seconds * RATE)
    expected = "give no statistics" if seconds < 1.0 else "few to learn from"
    assert any(expected in line for line in solved.warnings), solved.warnings


def test_a_long_frame_is_safe() -> None:
    made = rendered(2, 0.3, seconds=3.0)
    solved = solve(scene_of(made), room(transform=TransformSettings(frame_s=0.256)))
    assert np.isfinite(solved.signals).all()


def test_moving_talkers_are_refined_window_by_window() -> None:
    made = rendered(2, 0.3)
    still = scene_of(made)
    time_s = np.array([0.0, 8.0])
    track = Track(time_s, np.full(2, still.talkers[0].azimuth), np.zeros(2), np.full(2, 1.2))
    talkers = [Talker(made.names[0], track=track), still.talkers[1]]
    scene = Scene.from_arrays(made.mixture, made.array, talkers, sample_rate=RATE)
    solved = solve(scene, "full")
    assert len(solved.details["room"]["segments"]) > 1
    assert figures(solved.signals, made, "sir_db").min() > 10.0
    time_s = np.linspace(0.0, 8.0, 41)
    spinning = Track(time_s, 1.5 * time_s, np.zeros(41), np.full(41, 1.2))
    scene = Scene.from_arrays(
        made.mixture, made.array, [Talker(made.names[0], track=spinning), still.talkers[1]], sample_rate=RATE
    )
    solved = solve(scene, room(segments=SegmentSettings(most_turn_deg=40.0)))
    assert solved.details["room"]["fallback"] == "model"
    assert "bearings turn by more than 40 degrees" in solved.fallbacks[0]


def test_presets_are_named_after_what_they_do() -> None:
    assert PRESETS["full"].room == RoomSettings()
    latency = {name: solve(scene_of(rendered(2, 0.3, seconds=3.0)), name).latency_ms for name in PRESETS}
    assert latency["low-latency"] < 20.0
    assert latency["reference-mic"] == 0.0
    assert latency["full"] > 1000.0
