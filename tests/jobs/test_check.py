"""Each fault is found where it is, and a sound recording gives no alarm."""

from __future__ import annotations

import json
from collections.abc import Callable
from functools import lru_cache

import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from unmix.array import Array
from unmix.calibration.channels import ChannelMeter
from unmix.jobs.check import check
from unmix.jobs.findings import Checked, Finding
from unmix.model.delays import paths_from_bearings
from unmix.render.compose import render_scene
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Scene, Talker

RATE, SECONDS = 16000, 10.0
AZIMUTHS = (20.0, 110.0)
Change = Callable[[np.ndarray], np.ndarray]


@lru_cache(maxsize=4)
def recording(seconds: float = SECONDS) -> np.ndarray:
    """Two talkers at 1.2 m from seven microphones, with pauses, 40 dB over the microphones' noise."""
    talkers = np.stack([speech("novel-reader", seconds), speech("card-reader", seconds)])
    # The clip's own offset is none of the microphones'.
    talkers -= talkers.mean(axis=1, keepdims=True)
    talkers[:, : RATE // 2] = talkers[:, 3 * RATE : 4 * RATE] = 0.0
    images = delayed(talkers, paths_from_bearings(circle(), np.radians(AZIMUTHS), 0.0, 1.2), RATE)
    return np.asarray(images.sum(axis=0) + 5e-4 * np.random.default_rng(8).standard_normal(images.shape[1:]))


def scene_of(samples: np.ndarray, array: Array | None = None) -> Scene:
    talkers = [Talker.at(f"t{k}", a, distance_m=1.2) for k, a in enumerate(AZIMUTHS)]
    return Scene.from_arrays(samples, array or circle(), talkers, sample_rate=RATE)


def checked(change: Change, seconds: float = SECONDS) -> Checked:
    return check(scene_of(change(recording(seconds).copy())))


def only(result: Checked, kind: str) -> Finding:
    found = [f for f in result.findings if f.kind == kind]
    assert len(found) == 1, result.findings
    return found[0]


def alarms(result: Checked) -> set[str]:
    return {f.kind for f in result.findings if f.severity != "note"}


def test_a_sound_recording_gives_no_alarm() -> None:
    result = check(scene_of(recording()))
    assert alarms(result) == set()
    assert result.fit
    assert only(result, "resolution").value == pytest.approx(result.lowest_usable_hz)
    level = np.array([c.level_db for c in result.channels])
    assert level == pytest.approx(10 * np.log10(2 * recording().var(axis=1)), abs=0.01)
    noise = np.array([c.noise_db for c in result.channels])
    assert noise == pytest.approx(20 * np.log10(5e-4 * np.sqrt(2)), abs=1.0)


def test_nor_does_a_reverberant_one() -> None:
    array = circle()
    clips = {"novel-reader": speech("novel-reader", 8.0), "card-reader": speech("card-reader", 8.0)}
    spec = RenderSpec(
        duration_s=8.0,
        room=RoomSpec(size_m=[6.0, 4.5, 2.8], t20_s=0.4),
        array=ArraySpec(positions_m=array.positions_m.tolist()),
        talker=[TalkerSpec(name=n, azimuth_deg=a, distance_m=1.2) for n, a in zip(clips, AZIMUTHS, strict=True)],
        noise=NoiseSpec(sensor_snr_db=40.0),
    )
    mixture = render_scene(spec, clips=clips).mixture
    assert alarms(check(scene_of(mixture))) <= {"noise"}  # two talkers without a pause, in a room
    swapped = check(scene_of(mixture[[0, 1, 5, 3, 4, 2, 6]]))
    assert only(swapped, "order").channels == (2, 5)


def test_dead_and_copied_channels() -> None:
    def change(y: np.ndarray) -> np.ndarray:
        y[3], y[5] = 0.0, -0.5 * y[1]
        return y

    result = checked(change)
    assert only(result, "dead").channels == (3,)
    assert only(result, "copy").channels == (1, 5)
    assert not result.fit


@pytest.mark.parametrize("limit", [0.1, 1.0])
def test_clipping_at_any_ceiling(limit: float) -> None:
    def change(y: np.ndarray) -> np.ndarray:
        y[2] = np.clip(limit / 0.1 * y[2], -limit, limit)
        return y

    result = checked(change)
    finding = only(result, "clipping")
    assert finding.channels == (2,)
    where = np.abs(recording()[2]) >= 0.1
    runs = where[:-2] & where[1:-1] & where[2:]
    in_runs = np.convolve(runs, np.ones(3), "full") > 0
    same = np.diff(np.clip(recording()[2], -0.1, 0.1)) == 0
    assert same.any()
    assert result.channels[2].clipped == pytest.approx(in_runs.sum(), rel=0.05)


def test_loud_but_unclipped_is_not_clipped() -> None:
    assert all(c.clipped == 0 for c in check(scene_of(recording() / np.abs(recording()).max())).channels)


def test_offset_and_hum() -> None:
    def change(y: np.ndarray) -> np.ndarray:
        t = np.arange(y.shape[1]) / RATE
        for k in (1, 2, 3):
            y[1] += 0.02 / k * np.sin(2 * np.pi * 50 * k * t + k)
        y[4] -= 0.02
        return y

    result = checked(change)
    assert only(result, "dc").value == pytest.approx(-2.0, abs=0.02)
    hum = only(result, "hum")
    assert hum.channels == (1,) and "50" in hum.what
    assert result.fit


@pytest.mark.parametrize("mains", [50.0, 60.0])
def test_hum_is_told_from_the_other_mains(mains: float) -> None:
    rng = np.random.default_rng(2)
    y = 1e-3 * rng.standard_normal((2, 4 * RATE))
    y[0] += 0.002 * np.sin(2 * np.pi * mains * np.arange(4 * RATE) / RATE)
    meter = ChannelMeter(2, RATE, 4 * RATE)
    meter.add(y)
    hum = meter.readings()[0].hum_db[:, 0]
    assert (hum > 12.0).tolist() == [mains == 50.0, mains == 60.0]


@pytest.mark.parametrize("value", [0.0, None])
def test_drop_outs(value: float | None) -> None:
    def change(y: np.ndarray) -> np.ndarray:
        for at in (40000, 63995):  # the second across the border of two chunks
            y[2, at : at + 200] = y[2, at] if value is None else value
        return y

    result = checked(change)
    finding = only(result, "dropouts")
    assert finding.channels == (2,)
    assert "2.500 s" in finding.where
    assert finding.value == pytest.approx(2 * 200 / 16, rel=0.02)
    assert ("zeros" in finding.what) == (value is not None)


def test_silence_at_the_ends_is_no_drop_out() -> None:
    def change(y: np.ndarray) -> np.ndarray:
        y[:, :3000] = y[:, -3000:] = 0.0
        return y

    assert "dropouts" not in alarms(checked(change))


def test_polarity_and_gain() -> None:
    def change(y: np.ndarray) -> np.ndarray:
        y[4] *= -1.0
        y[2] *= 10 ** (3.0 / 20)
        y[6] *= 10 ** (-30.0 / 20)
        return y

    result = checked(change)
    assert only(result, "polarity").channels == (4,)
    lost, off = [f for f in result.findings if f.kind == "gain"]
    assert lost.severity == "unfit" and lost.channels == (6,) and lost.value == pytest.approx(-30.0, abs=0.5)
    assert off.channels == (2,) and "+3.0 dB" in off.what


def test_known_corrections_are_no_findings() -> None:
    content = circle().to_file()
    content.polarity, content.gain_db = [1, 1, 1, 1, -1, 1, 1], [0.0, 0.0, 3.0, 0.0, 0.0, 0.0, 0.0]
    y = recording().copy()
    y[4] *= -1.0
    y[2] *= 10 ** (3.0 / 20)
    assert alarms(check(scene_of(y, Array.from_file(content, where="here")))) == set()


@pytest.mark.parametrize("pair", [(2, 5), (1, 2), (0, 3)])
def test_swapped_channels(pair: tuple[int, int]) -> None:
    order = np.arange(7)
    order[list(pair)] = order[list(pair)[::-1]]
    assert only(checked(lambda y: y[order]), "order").channels == pair


def test_a_late_channel() -> None:
    result = checked(lambda y: np.vstack([y[:6], np.roll(y[6:], 400, axis=1)]))
    finding = only(result, "delay")
    assert finding.channels == (6,)
    assert finding.value == pytest.approx(25.0, abs=0.3)
    assert "order" not in alarms(result)


@pytest.mark.parametrize("odd", [0, 5])
def test_a_channel_of_another_recording(odd: int) -> None:
    def change(y: np.ndarray) -> np.ndarray:
        y[odd] = speech("digits", SECONDS) - speech("digits", SECONDS).mean()
        return y

    assert only(checked(change), "unrelated").channels == (odd,)


@pytest.mark.parametrize("ppm", [40.0, -80.0])
def test_a_drifting_clock(ppm: float) -> None:
    def change(y: np.ndarray) -> np.ndarray:
        n = np.arange(y.shape[1], dtype=np.float64)
        y[3] = np.interp(n * (1.0 - 1e-6 * ppm), n, y[3])
        return y

    finding = only(checked(change, 24.0), "drift")
    assert finding.channels == (3,)
    assert finding.value == pytest.approx(ppm, abs=6.0)


def test_talkers_too_close_for_the_array() -> None:
    close = Array.from_positions([[0.0, 0.0, 0.0], [0.002, 0.0, 0.0], [0.0, 0.002, 0.0]])
    y = 0.1 * np.random.default_rng(4).standard_normal((3, RATE))
    scene = Scene.from_arrays(y, close, [Talker.at("a", 10.0), Talker.at("b", 12.0)], sample_rate=RATE)
    result = check(scene)
    finding = only(result, "resolution")
    assert finding.severity == "unfit" and "2 deg" in finding.what


def test_levels_in_spl_once_calibrated() -> None:
    content = circle().to_file()
    content.full_scale_db_spl = 120.0
    result = check(scene_of(recording(), Array.from_file(content, where="here")))
    for channel in result.channels:
        assert channel.level_db is not None and channel.level_db_spl == pytest.approx(120.0 + channel.level_db)


def test_it_goes_into_json_and_notebooks() -> None:
    result = checked(lambda y: -y * np.array([1, 1, -1, 1, 1, 1, 1])[:, None])
    tree = json.loads(json.dumps(result.to_dict(), allow_nan=False))
    assert tree["fit"] is False
    assert {"kind", "what", "where", "confidence", "remedy", "severity", "channels"} <= set(tree["findings"][0])
    assert "not fit" in result._repr_html_()
