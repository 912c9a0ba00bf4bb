"""Where the talkers are: a scene in, bearings out; the turning array, ambiguous arrays and bad input."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from tests.bearings.scenes import RATE, VOICES, apart_deg, line, recorded, solid
from tests.conftest import circle, delayed, speech
from unmix.array import Array
from unmix.audio import write_audio
from unmix.errors import FileError, InputError, UnmixWarning, UnsolvableError
from unmix.jobs.locate import locate, locate_array
from unmix.jobs.located import Located
from unmix.jobs.solve import solve
from unmix.model.delays import paths_from_bearings
from unmix.physics import unit_vector
from unmix.render.compose import render_scene
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Scene, Talker
from unmix.track import Orientation, Track

PUCK = circle()


def quietly(*arguments: Any, **options: Any) -> Located:
    """`locate_array` with its warnings kept in the result only."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UnmixWarning)
        return locate_array(*arguments, **options)


def said(located: Located) -> str:
    return "\n".join(located.warnings)


def errors_deg(located: Located, azimuths_deg: Sequence[float]) -> np.ndarray:
    """Distance of each true azimuth to the nearest found one."""
    found = np.array([t.azimuth for t in located.talkers])
    return apart_deg(found[None], np.radians(azimuths_deg)[:, None]).min(axis=1)


def in_a_room(azimuths_deg: Sequence[float], *, t20_s: float = 0.4, seconds: float = 6.0, seed: int = 3) -> np.ndarray:
    names = VOICES[: len(azimuths_deg)]
    spec = RenderSpec(
        duration_s=seconds,
        sample_rate=RATE,
        seed=seed,
        room=RoomSpec(size_m=[5.6, 4.7, 2.7], t20_s=t20_s),
        array=ArraySpec(positions_m=PUCK.positions_m.tolist(), reference_channel=0),
        talker=[TalkerSpec(name=n, azimuth_deg=a, distance_m=1.2) for n, a in zip(names, azimuths_deg, strict=True)],
        noise=NoiseSpec(sensor_snr_db=30.0),
    )
    return render_scene(spec, clips={n: speech(n, seconds) for n in names}).mixture


def turned(azimuth_deg: float, heading: np.ndarray, knots_s: np.ndarray, seconds: float) -> np.ndarray:
    """A talker at rest as an array hears it that turns about the vertical (heading in radians at ``knots_s``)."""
    signal = speech("novel-reader", seconds)[None]
    mixture = np.zeros((7, signal.shape[1]))
    t = np.arange(signal.shape[1]) / RATE
    turn = np.interp(t, knots_s, heading)
    # The nearest of many still headings, cross-faded: exact where the array rests.
    stops = np.unique(np.round(turn / np.radians(2.0)))
    for stop in stops:
        weight = np.maximum(0.0, 1.0 - np.abs(turn / np.radians(2.0) - stop))
        paths = paths_from_bearings(PUCK, [np.radians(azimuth_deg) - stop * np.radians(2.0)], 0.0, np.nan)
        mixture += weight * delayed(signal, paths, RATE)[0]
    return mixture + 1e-3 * np.random.default_rng(1).standard_normal(mixture.shape)


def about_z(knots_s: np.ndarray, heading: np.ndarray) -> Orientation:
    """Readings fifty times a second, linear between the knots."""
    time_s = np.arange(knots_s[0], knots_s[-1] + 1e-9, 0.02)
    turn = np.interp(time_s, knots_s, heading)
    return Orientation(time_s, Rotation.from_euler("z", turn[:, None]).as_quat(scalar_first=True))


@pytest.mark.parametrize("azimuths_deg", [(40.0,), (-120.0, 20.0), (-150.0, 10.0, 75.0), (-170.0, -80.0, 5.0, 95.0)])
def test_talkers_without_a_room_are_found_and_counted(azimuths_deg: tuple[float, ...]) -> None:
    located = quietly(recorded(azimuths_deg, seconds=6.0), PUCK, RATE)
    assert located.count.estimated == len(located.talkers) == len(azimuths_deg)
    assert errors_deg(located, azimuths_deg).max() < 0.2
    assert located.names == tuple(f"talker-{k + 1}" for k in range(len(azimuths_deg)))
    assert np.all(np.diff([t.azimuth for t in located.talkers]) > 0)
    assert located.frame == "array"
    for talker in located.talkers:
        assert 0.0 < talker.azimuth_std < np.radians(1.0)
        assert not talker.moving and not talker.doubtful


@pytest.mark.parametrize("azimuths_deg", [(40.0,), (-120.0, 20.0), (-150.0, 10.0, 75.0)])
def test_talkers_in_a_room_are_found_and_counted(azimuths_deg: tuple[float, ...]) -> None:
    located = quietly(in_a_room(azimuths_deg), PUCK, RATE)
    assert located.count.estimated == len(azimuths_deg)
    assert errors_deg(located, azimuths_deg).max() < 4.0


@pytest.mark.parametrize("method", ["srp", "snapshots", "fit"])
def test_other_methods_agree(method: str) -> None:
    signal = speech("novel-reader", 4.0)[None]
    located = quietly(recorded([40.0], signals=signal), PUCK, RATE, talkers=1, method=method)
    assert located.method == method
    # Snapshots hear the voice's high frequencies too, where their expansion breaks off.
    assert errors_deg(located, [40.0]).max() < (5.0 if method == "snapshots" else 1.0)


def test_elevation_of_a_solid_array_and_of_a_flat_one() -> None:
    solid_one = quietly(recorded([40.0], elevations_deg=-35.0, array=solid()), solid(), RATE, talkers=1)
    assert np.degrees(solid_one.talkers[0].elevation) == pytest.approx(-35.0, abs=1.5)
    assert solid_one.ambiguity is None and solid_one.talkers[0].candidates == ()
    flat = quietly(recorded([40.0], elevations_deg=-35.0), PUCK, RATE, talkers=1)
    assert np.degrees(flat.talkers[0].elevation) == pytest.approx(35.0, abs=1.5)
    ((azimuth, elevation),) = flat.talkers[0].candidates
    assert (np.degrees(azimuth), np.degrees(elevation)) == (pytest.approx(40.0, abs=1.0), pytest.approx(-35.0, abs=1.5))
    assert "above and below look alike" in said(flat)


def test_a_line_names_both_candidates() -> None:
    """Front and back of a line look alike: one is given, the other is the candidate, and words say so."""
    located = quietly(recorded([35.0], array=line()), line(), RATE, talkers=1)
    (talker,) = located.talkers
    assert np.degrees(talker.azimuth) == pytest.approx(35.0, abs=1.0)
    ((azimuth, elevation),) = talker.candidates
    assert (np.degrees(azimuth), elevation) == (pytest.approx(145.0, abs=1.0), pytest.approx(0.0, abs=1e-6))
    assert np.degrees(talker.elevation_std) > 20.0
    assert "straight line of microphones" in str(located.ambiguity) and str(located.ambiguity) in said(located)
    behind = quietly(recorded([145.0], array=line()), line(), RATE, talkers=1)
    assert np.degrees(behind.talkers[0].azimuth) == pytest.approx(35.0, abs=1.0)


def test_two_microphones_are_a_line() -> None:
    pair = Array.from_positions(np.array([[0.0, 0.03, 0.0], [0.0, -0.03, 0.0]]))
    located = quietly(recorded([-20.0], array=pair), pair, RATE, talkers=1)
    assert np.degrees(located.talkers[0].azimuth) == pytest.approx(-20.0, abs=3.0)
    assert len(located.talkers[0].candidates) == 1


def test_a_line_that_turns_tells_front_from_back() -> None:
    """What one orientation leaves open another settles."""
    seconds = 6.0
    signal = speech("novel-reader", seconds)[None]
    t = np.arange(signal.shape[1]) / RATE
    mixture = np.zeros((4, signal.shape[1]))
    for heading, mine in ((0.0, t < 3.0), (60.0, t >= 3.0)):
        paths = paths_from_bearings(line(), [np.radians(145.0 - heading)], 0.0, np.nan)
        mixture += mine * delayed(signal, paths, RATE)[0]
    mixture += 1e-3 * np.random.default_rng(1).standard_normal(mixture.shape)
    orientation = about_z(np.array([0.0, 2.99, 3.01, seconds]), np.radians([0.0, 0.0, 60.0, 60.0]))
    located = quietly(mixture, line(), RATE, talkers=1, orientation=orientation)
    assert np.degrees(located.talkers[0].azimuth) == pytest.approx(145.0, abs=2.0)
    assert "above and below" in str(located.ambiguity)


KNOTS_S = np.array([0.0, 2.0, 2.5, 4.5, 5.0, 8.0])
STEPS = np.radians([0.0, 0.0, 45.0, 45.0, 90.0, 90.0])


def test_a_talker_stays_put_while_the_array_turns() -> None:
    """45 degrees at a time: one talker at rest in the world, three without the orientation."""
    mixture = turned(70.0, STEPS, KNOTS_S, 8.0)
    located = quietly(mixture, PUCK, RATE, orientation=about_z(KNOTS_S, STEPS))
    (talker,) = located.talkers
    assert located.frame == "world" and not talker.moving
    assert apart_deg(talker.azimuth, np.radians(70.0)) < 1.0
    # Who jumps is taken for somebody else each time.
    unaware = quietly(mixture, PUCK, RATE)
    assert unaware.frame == "array" and len(unaware.talkers) == 3


def test_the_clock_offset_is_estimated_when_asked_for() -> None:
    late = about_z(KNOTS_S + 0.6, STEPS)
    mixture = turned(70.0, STEPS, KNOTS_S, 8.0)
    located = quietly(mixture, PUCK, RATE, orientation=late, clock_offset_s="estimate")
    assert located.clock_offset_s == pytest.approx(0.6, abs=0.1)
    assert "clock offset of the orientation estimated" in said(located)
    assert apart_deg(located.talkers[0].azimuth, np.radians(70.0)) < 1.5


def test_an_orientation_that_ends_early_is_said() -> None:
    short = about_z(KNOTS_S[:4], STEPS[:4])
    located = quietly(turned(70.0, STEPS, KNOTS_S, 8.0), PUCK, RATE, orientation=short, talkers=1)
    assert "the orientation ends at 4.5 s of the 8.0 s recording: the last is held to the end" in said(located)
    assert len(located.talkers) == 1


def test_a_walking_talker_is_one_moving_track() -> None:
    """45 degrees in five seconds past a resting array is what `turned` renders the other way round."""
    mixture = turned(10.0, np.radians([0.0, -45.0]), np.array([0.0, 6.0]), 6.0)
    (talker,) = quietly(mixture, PUCK, RATE).talkers
    assert talker.moving
    t = np.arange(0.5, 5.5, 0.25)
    azimuth, _, _ = talker.track.at(t)
    assert np.median(apart_deg(azimuth, np.radians(10.0 + 7.5 * t))) < 2.0


def test_who_speaks_when() -> None:
    """Two who take turns: each is active in their own time."""
    signals = np.stack([speech("novel-reader", 8.0), speech("card-reader", 8.0)])
    t = np.arange(signals.shape[1]) / RATE
    signals[0, (t >= 3.0) & (t < 6.0)] = 0.0
    signals[1, (t < 3.0) | (t >= 6.0)] = 0.0
    located = quietly(recorded([-50.0, 60.0], signals=signals, seconds=8.0), PUCK, RATE)
    assert len(located.talkers) == 2
    first, second = (np.array(t.active_s) for t in located.talkers)
    assert np.all((first[:, 1] < 3.3) | (first[:, 0] > 5.7))
    assert second.min() > 2.7 and second.max() < 6.3
    assert np.sum(first[:, 1] - first[:, 0]) > 3.0 and np.sum(second[:, 1] - second[:, 0]) > 1.5
    assert located.activity == {t.name: t.active_s for t in located.talkers}


def test_snapshots_taken_slowly_tell_the_axis() -> None:
    """Forty samples a second, kept as they are without any filter: no spectrum, and both ends of the axis given."""
    signal = np.random.default_rng(8).standard_normal((1, 20 * RATE))
    from scipy.signal import butter, sosfiltfilt

    signal = 0.05 * sosfiltfilt(butter(4, 1000, fs=RATE, output="sos"), signal)
    slow = recorded([140.0], signals=signal, seconds=20.0, snr_db=40.0)[:, ::400]
    located = quietly(slow, PUCK, 40, method="snapshots", talkers=1)
    (talker,) = located.talkers
    ends = np.degrees([talker.azimuth, talker.candidates[-1][0]])
    assert sorted(ends) == [pytest.approx(-40.0, abs=3.0), pytest.approx(140.0, abs=3.0)]
    assert "not from which end" in str(located.ambiguity) and str(located.ambiguity) in said(located)
    assert talker.elevation_std > 0.5
    with pytest.raises(UnsolvableError, match="at 40 Hz there are no spectra of voices to locate by; take the method"):
        locate_array(slow, PUCK, 40)


def test_a_near_talker_taken_as_far_is_owned_up_to() -> None:
    """Without a distance the deviations cover what bent waves do; with it they need not."""
    azimuths = np.radians([-75.0, -15.0])
    paths = paths_from_bearings(PUCK, azimuths, 0.0, 1.0)
    signals = np.stack([speech(VOICES[k], 4.0) for k in range(2)])
    mixture = delayed(signals, paths, RATE).sum(axis=0)
    mixture += 5e-4 * np.random.default_rng(1).standard_normal(mixture.shape)
    far, near = (quietly(mixture, PUCK, RATE, distance_m=d) for d in (None, 1.0))
    for located in (far, near):
        for talker, truth in zip(located.talkers, azimuths, strict=True):
            assert abs(talker.azimuth - truth) < 3.0 * talker.azimuth_std
    assert max(t.azimuth_std for t in near.talkers) < max(t.azimuth_std for t in far.talkers)


def test_distances_of_the_scene_are_kept_apart() -> None:
    talkers = [Talker("a", None, distance_m=0.8), Talker("b", None, distance_m=1.6)]
    scene = Scene.from_arrays(recorded([-50.0, 60.0]), PUCK, talkers, sample_rate=RATE)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UnmixWarning)
        located = locate(scene)
    assert [t.distance_m for t in located.talkers] == [0.8, 1.6]


def test_the_ring_holds_the_horizon() -> None:
    for method in ("mixture", "srp"):
        located = quietly(recorded([40.0], elevations_deg=20.0), PUCK, RATE, talkers=1, region="ring", method=method)
        assert located.talkers[0].elevation == pytest.approx(0.0, abs=1e-6)
        assert apart_deg(located.talkers[0].azimuth, np.radians(40.0)) < 1.5


def test_silence_has_no_talker_and_says_why() -> None:
    for samples in (np.zeros((7, 2 * RATE)), 1e-3 * np.random.default_rng(0).standard_normal((7, 4 * RATE))):
        with pytest.warns(UnmixWarning, match="silence or steady noise|too little speech"):
            located = locate_array(samples, PUCK, RATE)
        assert located.talkers == () and located.count.estimated == 0
        assert located.to_dict()["talkers"] == []


def test_a_quarter_of_a_second_is_enough_for_a_plain_talker() -> None:
    loud = speech("novel-reader", 3.0)[None, 2 * RATE : 2 * RATE + RATE // 4]
    signal = np.concatenate([np.zeros((1, 800)), loud], axis=1)
    located = quietly(recorded([40.0], signals=signal, seconds=0.3), PUCK, RATE)
    assert len(located.talkers) == 1 and errors_deg(located, [40.0]).max() < 2.0


def test_a_dead_channel_is_named_once() -> None:
    mixture = recorded([-50.0, 60.0])
    mixture[2] = 0.0
    located = quietly(mixture, PUCK, RATE)
    assert errors_deg(located, [-50.0, 60.0]).max() < 5.0
    assert "channel 2 is silent" in said(located)
    lines = solved(Scene.from_arrays(mixture, PUCK, sample_rate=RATE)).warnings
    assert sum("channel 2 is silent" in line for line in lines) == 1


def test_one_talker_asked_for_as_three() -> None:
    """What is plain comes first; the others are marked, not hidden, and nothing is lost."""
    located = quietly(in_a_room([40.0]), PUCK, RATE, talkers=3)
    assert located.count.estimated == 1 and located.count.used == 3
    sure = [t for t in located.talkers if not t.doubtful]
    assert len(sure) == 1 and apart_deg(sure[0].azimuth, np.radians(40.0)) < 3.0
    assert "3 talkers were asked for" in said(located)
    assert ("may be a reflection, or nobody" in said(located)) == (len(located.talkers) > 1)
    bare = quietly(recorded([40.0], snr_db=60.0), PUCK, RATE, talkers=3)
    assert apart_deg(min((t for t in bare.talkers if not t.doubtful), key=lambda t: -t.share).azimuth, 0.698) < 1.0
    assert "3 talkers were asked for" in said(bare)


def test_three_talkers_asked_for_as_one() -> None:
    located = quietly(recorded([-150.0, 10.0, 75.0], seconds=6.0), PUCK, RATE, talkers=1)
    assert len(located.talkers) == 1 and located.count.estimated == 3
    assert "1 talkers were asked for, and the recording speaks for 3" in said(located)


def test_wrong_input_is_one_clear_line() -> None:
    good = recorded([40.0], seconds=1.0)
    with pytest.raises(
        InputError, match=r"expected \(7, samples\) for the array's microphones, got shape \(6, 16000\)"
    ):
        locate_array(good[:6], PUCK, RATE)
    bad = good.copy()
    bad[3, 77] = np.nan
    with pytest.raises(InputError, match="channel 3, sample 77 is NaN"):
        locate_array(bad, PUCK, RATE)
    with pytest.raises(InputError, match="lasts 50 ms; at least 100 ms"):
        locate_array(good[:, :800], PUCK, RATE)
    with pytest.raises(InputError, match="5 talkers asked for; 0 to 4"):
        locate_array(good, PUCK, RATE, talkers=5)
    with pytest.raises(InputError, match="one microphone hears no direction"):
        locate_array(good[:1], Array.from_positions(np.zeros((1, 3))), RATE)
    with pytest.raises(InputError, match="method 'music' is not known"):
        locate_array(good, PUCK, RATE, method="music")  # type: ignore[arg-type]
    with pytest.raises(UnsolvableError, match="straight line"):
        locate_array(recorded([40.0], array=line(), seconds=1.0), line(), RATE, method="snapshots")


def test_corrections_of_the_array_are_used() -> None:
    from dataclasses import replace

    polarity = np.array([1, 1, -1, 1, -1, 1, 1])
    located = quietly(recorded([40.0]) * polarity[:, None], replace(PUCK, polarity=polarity), RATE, talkers=1)
    assert errors_deg(located, [40.0]).max() < 0.2


def test_a_long_recording_in_chunks_is_that_in_one() -> None:
    """Names hold through the file; a scene's chunks and an array in memory give the same."""
    mixture = np.tile(recorded([-50.0, 60.0], seconds=3.0), (1, 4))
    scene = Scene.from_arrays(mixture, PUCK, sample_rate=RATE)
    with pytest.warns(UnmixWarning, match="flat array"):
        a = locate(scene)
    b = quietly(mixture, PUCK, RATE)
    assert a.names == b.names == ("talker-1", "talker-2")
    np.testing.assert_allclose([t.azimuth for t in a.talkers], [t.azimuth for t in b.talkers], atol=1e-4)


def folder(tmp_path: Path, mixture: np.ndarray, talkers: str, more: str = "") -> Path:
    write_audio(tmp_path / "mix.wav", 0.5 * mixture / np.abs(mixture).max(), RATE)
    PUCK.save(tmp_path / "array.toml")
    path = tmp_path / "scene.toml"
    path.write_text(f'{more}[recording]\nfile = "mix.wav"\n[array]\nfile = "array.toml"\n{talkers}')
    return path


def find(path: Path) -> Located:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UnmixWarning)
        return locate(Scene.load(path))


def test_the_scene_written_back_holds_bearings_and_everything_else(tmp_path: Path) -> None:
    mixture = recorded([-50.0, 60.0], seconds=4.0)
    write_audio(tmp_path / "pilot.wav", mixture[:1] * 0.1, RATE)
    scene = folder(
        tmp_path,
        mixture,
        '[[talker]]\nname = "mate"\nazimuth_deg = -48.0\n[[talker]]\nname = "pilot"\nreference = "pilot.wav"\n',
        'title = "Bridge"\n',
    )
    located = find(scene)
    (tmp_path / "deeper").mkdir()
    (written,) = located.save(tmp_path / "deeper" / "located.toml")
    back = Scene.load(written)
    assert back.title == "Bridge"
    assert [t.name for t in back.talkers] == ["mate", "pilot"]
    # What was given by hand stays; what was found is filled in.
    assert np.degrees(back.talkers[0].azimuth) == pytest.approx(-48.0)
    assert np.degrees(back.talkers[1].azimuth) == pytest.approx(60.0, abs=0.5)
    assert back.talkers[1].references["plain"].resolve() == (tmp_path / "pilot.wav").resolve()
    with pytest.raises(FileError, match="overwrite"):
        located.save(tmp_path / "deeper" / "located.toml")


def test_a_talker_who_is_not_found_stays_in_the_scene(tmp_path: Path) -> None:
    scene = folder(
        tmp_path,
        np.zeros((7, 2 * RATE)) + 1e-9,
        '[[talker]]\nname = "mate"\nazimuth_deg = 10.0\n[[talker]]\nname = "pilot"\ndistance_m = 1.0\n',
    )
    located = find(scene)
    assert located.talkers == () and "no bearing was found for mate, pilot" in said(located)
    (written,) = located.save(tmp_path / "located.toml")
    back = Scene.load(written)
    assert [t.name for t in back.talkers] == ["mate", "pilot"]
    assert np.degrees(back.talkers[0].azimuth) == pytest.approx(10.0) and back.talkers[1].azimuth is None
    assert back.talkers[1].distance_m == 1.0


def test_a_moving_talker_gets_a_track_file(tmp_path: Path) -> None:
    scene = folder(tmp_path, turned(10.0, np.radians([0.0, -45.0]), np.array([0.0, 6.0]), 6.0), "")
    written = find(scene).save(tmp_path / "located.toml")
    assert [p.name for p in written] == ["located.toml", "located-talker-1.csv"]
    (talker,) = Scene.load(written[0]).talkers
    assert talker.track is not None and talker.track.azimuth[-1] - talker.track.azimuth[0] > np.radians(30.0)


def test_names_follow_activity(tmp_path: Path) -> None:
    """Who is who is known from when they speak."""
    signals = np.stack([speech("novel-reader", 8.0), speech("card-reader", 8.0)])
    signals[0, 4 * RATE :] = 0.0
    signals[1, : 4 * RATE] = 0.0
    (tmp_path / "who.rttm").write_text(
        "SPEAKER mix 1 4.0 4.0 <NA> <NA> pilot <NA> <NA>\nSPEAKER mix 1 0.0 4.0 <NA> <NA> mate <NA> <NA>\n"
    )
    for azimuths in ((-50.0, 60.0), (60.0, -50.0)):
        (tmp_path / "mix.wav").unlink(missing_ok=True)
        mixture = recorded(azimuths, signals=signals, seconds=8.0)
        (tmp_path / "array.toml").unlink(missing_ok=True)
        scene = folder(
            tmp_path, mixture, '[[talker]]\nname = "pilot"\n[[talker]]\nname = "mate"\n', 'activity = "who.rttm"\n'
        )
        located = find(scene)
        assert located.names == ("pilot", "mate")
        found = {t.name: np.degrees(t.azimuth) for t in located.talkers}
        assert found == {"mate": pytest.approx(azimuths[0], abs=1.0), "pilot": pytest.approx(azimuths[1], abs=1.0)}


def solved(scene: Scene) -> Any:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UnmixWarning)
        return solve(scene, "model")


def test_separation_with_located_bearings() -> None:
    """Nobody said where anybody is: the signals are those of given bearings to a tenth of a dB."""
    azimuths = (-50.0, 60.0)
    signals = np.stack([speech(VOICES[k], 4.0) for k in range(2)])
    mixture = recorded(azimuths, signals=signals)
    given = solved(Scene.from_arrays(mixture, PUCK, [Talker.at("a", -50.0), Talker.at("b", 60.0)], sample_rate=RATE))
    located = solved(Scene.from_arrays(mixture, PUCK, sample_rate=RATE))
    assert [t.name for t in located.talkers] == ["talker-1", "talker-2"]
    for k in range(2):
        error = [10 * np.log10(np.mean((s.signals[k] - signals[k]) ** 2)) for s in (given, located)]
        assert abs(error[0] - error[1]) < 0.3
    assert any("flat array" in line for line in located.warnings)


def test_separation_follows_a_turning_array_whose_clock_is_off() -> None:
    """With the offset asked to be estimated, even where all bearings are given."""
    mixture = turned(70.0, STEPS, KNOTS_S, 8.0)
    base = Scene.from_arrays(mixture, PUCK, [Talker.at("mate", 70.0)], sample_rate=RATE)
    from dataclasses import replace

    late = replace(base, orientation=about_z(KNOTS_S + 0.6, STEPS), clock_offset_s="estimate")
    solution = solved(late)
    assert any("clock offset of the orientation estimated" in line for line in solution.warnings)
    known = solved(replace(late, clock_offset_s=0.6))
    apart = 10 * np.log10(np.mean((solution.signals - known.signals) ** 2) / np.mean(known.signals**2))
    assert apart < -25.0


def test_separation_follows_a_talker_who_walks() -> None:
    """Track found, delays over time from it: what comes out is the talker as received, to -20 dB.

    Left where the middle of the walk was, the model would miss by up to 22 degrees at either end.
    """
    mixture = turned(10.0, np.radians([0.0, -45.0]), np.array([0.0, 6.0]), 6.0)
    solution = solved(Scene.from_arrays(mixture, PUCK, sample_rate=RATE))
    (talker,) = solution.talkers
    assert talker.moving
    signal = speech("novel-reader", 6.0)
    inside = slice(RATE // 2, -RATE // 2)
    error = solution.signals[0, inside] - signal[inside]
    assert 10 * np.log10(np.mean(error**2) / np.mean(signal[inside] ** 2)) < -20.0


def test_nobody_to_separate_is_an_error() -> None:
    with pytest.raises(InputError, match="no talker was found in the recording"):
        solved(Scene.from_arrays(np.zeros((7, RATE)), PUCK, sample_rate=RATE))


def test_results_show_themselves() -> None:
    located = quietly(recorded([-50.0, 60.0]), PUCK, RATE)
    tree = located.to_dict()
    assert [set(t) >= {"name", "azimuth_deg", "elevation_deg", "azimuth_std_deg", "elevation_std_deg", "candidates"}
            for t in tree["talkers"]] == [True, True]  # fmt: skip
    assert "<table>" in located._repr_html_() and "talker-2" in located._repr_html_()
    with pytest.raises(InputError, match="not located from a scene"):
        located.scene_with_bearings()
    assert unit_vector(located.talkers[0].azimuth).shape == (3,)
    assert isinstance(located.talkers[0].track, Track)
