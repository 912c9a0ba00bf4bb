"""Scene files: what they hold, and one line for whatever is wrong with them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from unmix.array import Array
from unmix.audio import write_audio
from unmix.errors import FileError, InputError
from unmix.rttm import read_rttm, write_rttm
from unmix.scene import Scene, Talker

RATE = 16000
GOOD = """
title = "At the chart table"
[recording]
file = "mix.wav"
[array]
positions_m = [[0.0, 0.0, 0.0], [0.04, 0.0, 0.0], [0.0, 0.04, 0.0]]
[[talker]]
name = "mate"
azimuth_deg = 20.0
distance_m = 1.2
[[talker]]
name = "pilot"
azimuth_deg = -95
elevation_deg = 10
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A folder with a three-channel recording of one second and a reference."""
    signals = 0.1 * np.random.default_rng(11).standard_normal((3, RATE))
    write_audio(tmp_path / "mix.wav", signals, RATE)
    write_audio(tmp_path / "mate.wav", signals[:1], RATE)
    return tmp_path


def scene_file(folder: Path, text: str = GOOD) -> Path:
    (folder / "scene.toml").write_text(text)
    return folder / "scene.toml"


def test_a_scene_is_what_its_file_says(folder: Path) -> None:
    scene = Scene.load(scene_file(folder))
    assert (scene.title, scene.sample_rate, scene.temperature_c) == ("At the chart table", RATE, 20.0)
    mate, pilot = scene.talkers
    assert (mate.name, pilot.name) == ("mate", "pilot")
    assert mate.azimuth == pytest.approx(np.radians(20.0))
    assert (mate.distance_m, pilot.distance_m) == (1.2, None)
    assert (pilot.azimuth, pilot.elevation) == pytest.approx((np.radians(-95.0), np.radians(10.0)))
    assert all(t.located for t in scene.talkers)
    assert scene.recording.read().shape == (3, RATE)


def test_talkers_without_names_or_bearings_are_numbered_and_to_be_located(folder: Path) -> None:
    scene = Scene.load(scene_file(folder, GOOD[: GOOD.index("[[talker]]")] + "[[talker]]\n[[talker]]\n"))
    assert [t.name for t in scene.talkers] == ["talker-1", "talker-2"]
    assert not any(t.located for t in scene.talkers)


def test_paths_are_relative_to_the_scene_file(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    sub = folder / "scenes"
    sub.mkdir()
    (folder / "array.toml").write_text("positions_m = [[0.0, 0.0, 0.0], [0.04, 0.0, 0.0], [0.0, 0.04, 0.0]]\n")
    (folder / "walk.csv").write_text("time_s,azimuth_deg\n0,10\n1,40\n")
    text = """
    [recording]
    file = "../mix.wav"
    [array]
    file = "../array.toml"
    reference_channel = 1
    [[talker]]
    name = "mate"
    track = "../walk.csv"
    references = { early = "../mate.wav" }
    """
    monkeypatch.chdir("/")
    scene = Scene.load(scene_file(sub, text))
    assert scene.array.reference_channel == 1
    assert scene.talkers[0].references["early"].resolve() == (folder / "mate.wav").resolve()
    assert scene.talkers[0].track is not None
    assert scene.talkers[0].track.time_s.tolist() == [0.0, 1.0]


def replaced(old: str, new: str) -> str:
    assert old in GOOD
    return GOOD.replace(old, new, 1)


WRONG = {
    "no table": ("[array]\npositions_m = [[0.0, 0.0, 0.0]]", "key `recording` is missing"),
    "misspelt": (replaced("azimuth_deg", "azimut_deg"), r"unknown key `azimut_deg` in talker\[0\]; did you mean `azi"),
    "misspelt table": (replaced("[[talker]]", "[[talkers]]"), "unknown key `talkers` in the top level; did you mean"),
    "not TOML": (replaced("title =", "title"), "not valid TOML"),
    "text for a number": (replaced("20.0", '"left"'), r"key `talker\[0\]\.azimuth_deg`: expected a number, got text"),
    "no such azimuth": (replaced("20.0", "700.0"), r"`talker\[0\]\.azimuth_deg`: 700; give degrees within \+-360"),
    "azimuth NaN": (replaced("20.0", "nan"), r"`talker\[0\]\.azimuth_deg`: nan is not a finite number"),
    "no such elevation": (replaced("= 10", "= 100"), r"`talker\[1\]\.elevation_deg`: 100; give degrees within \+-90"),
    "no distance": (replaced("1.2", "0.0"), r"`talker\[0\]\.distance_m`: 0; give metres above zero"),
    "one name twice": (replaced('"pilot"', '"mate"'), r"`talker\[1\]\.name`: two talkers are called 'mate'"),
    "empty name": (replaced('"pilot"', '" "'), r"`talker\[1\]\.name` is empty"),
    "wrong channel count": (
        replaced(", [0.0, 0.04, 0.0]]", "]"),
        "the recording has 3 channels and the array 2 microphones; set `channels` in .recording. or correct",
    ),
    "unknown channel": (replaced('"mix.wav"', '"mix.wav"\nchannels = [0, 1, 9]'), "there is no channel 9"),
    "coincident": (replaced("[0.04, 0.0, 0.0]", "[0.0, 0.0, 0.0]"), "microphones 0 and 1 stand at the same place"),
    "millimetres": (replaced("[0.04, 0.0, 0.0]", "[40.0, 0.0, 0.0]"), "40 m wide; are the positions in millimetres"),
    "two recordings": (replaced('"mix.wav"', '"mix.wav"\nfiles = ["mix.wav"]'), "needs `file` .* or `files`"),
    "no recording": (replaced('file = "mix.wav"', ""), "needs `file` .* or `files`"),
    "two arrays": (replaced("[array]", '[array]\nfile = "a.toml"'), "needs `file` or `positions_m`, one of the two"),
    "bearing and track": (replaced("distance_m", 'track = "a.csv"\ndistance_m'), "both `track` and `azimuth_deg`"),
    "two references": (
        replaced("distance_m", 'reference = "mate.wav"\nreferences = { dry = "mate.wav" }\ndistance_m'),
        "both `reference` and `references`",
    ),
    "unknown reference kind": (
        replaced("distance_m", 'references = { eearly = "mate.wav" }\ndistance_m'),
        r"unknown key `eearly` in .*talker\[0\]\.references.*; did you mean `early`",
    ),
    "noise backwards": (
        replaced('"mix.wav"', '"mix.wav"\nnoise_only_s = [[0.5, 0.2]]'),
        r"`recording\.noise_only_s`: \[0\.5, 0\.2\] is no stretch of time",
    ),
    "noise beyond": (
        replaced('"mix.wav"', '"mix.wav"\nnoise_only_s = [[5.0, 6.0]]'),
        "5 s lies beyond the 1 s recording",
    ),
    "activity backwards": (replaced("distance_m", "active_s = [[1.0, 0.5]]\ndistance_m"), r"`talker\[0\]\.active_s`"),
    "too hot": (GOOD + "[room]\ntemperature_c = 293.15\n", r"`room\.temperature_c`: 293\.15 is not a room's"),
    "start NaN": (replaced('"mix.wav"', '"mix.wav"\nstart_s = nan'), r"`recording\.start_s`: nan"),
}


@pytest.mark.parametrize("what", WRONG)
def test_wrong_scenes_get_one_line(folder: Path, what: str) -> None:
    text, message = WRONG[what]
    path = scene_file(folder, text)
    with pytest.raises(InputError, match=message) as caught:
        Scene.load(path)
    assert str(folder) in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (replaced("mix.wav", "mixx.wav"), r"mixx\.wav: no such file"),
        (replaced("distance_m", 'reference = "gone.wav"\ndistance_m'), r"`talker\[0\]`: plain reference .*gone\.wav"),
        (replaced("azimuth_deg = 20.0\ndistance_m = 1.2", 'track = "gone.csv"'), r"gone\.csv: no such file"),
        (GOOD + '[orientation]\nfile = "gone.csv"\n', r"gone\.csv: no such file"),
        ('activity = "gone.rttm"\n' + GOOD, r"gone\.rttm: no such file"),
    ],
)
def test_missing_files_are_named(folder: Path, text: str, message: str) -> None:
    with pytest.raises(FileError, match=message):
        Scene.load(scene_file(folder, text))


def test_a_folder_is_no_scene(folder: Path) -> None:
    with pytest.raises(FileError, match="is a folder; name the scene file in it"):
        Scene.load(folder)


def test_corrections_beside_an_array_file_are_refused(folder: Path) -> None:
    (folder / "array.toml").write_text("positions_m = [[0.0, 0.0, 0.0], [0.04, 0.0, 0.0], [0.0, 0.04, 0.0]]\n")
    text = '[recording]\nfile = "mix.wav"\n[array]\nfile = "array.toml"\ngain_db = [0.0, 0.0, 1.0]\n'
    with pytest.raises(InputError, match=r"`gain_db` belongs into array\.toml"):
        Scene.load(scene_file(folder, text))


def test_a_scene_is_saved_as_it_was_read(folder: Path) -> None:
    scene = Scene.load(scene_file(folder))
    scene.save(folder / "again.toml")
    again = Scene.load(folder / "again.toml")
    assert (again.talkers, again.title) == (scene.talkers, scene.title)
    np.testing.assert_array_equal(again.array.positions_m, scene.array.positions_m)
    with pytest.raises(FileError, match="exists already"):
        scene.save(folder / "again.toml")


def test_a_scene_from_arrays() -> None:
    array = Array.from_positions([[0.0, 0.0, 0.0], [0.04, 0.0, 0.0]])
    talkers = [Talker.at("mate", 20.0, distance_m=1.2), Talker.at("pilot", -95.0, elevation_deg=10.0)]
    scene = Scene.from_arrays(np.zeros((2, RATE)), array, talkers, sample_rate=RATE)
    assert [t.azimuth for t in scene.talkers] == pytest.approx(np.radians([20.0, -95.0]))
    assert (scene.talkers[0].distance_m, scene.talkers[1].elevation) == (1.2, pytest.approx(np.radians(10.0)))
    with pytest.raises(InputError, match="3 channels for an array of 2 microphones"):
        Scene.from_arrays(np.zeros((3, RATE)), array, sample_rate=RATE)
    with pytest.raises(InputError, match="type int16; give floating point"):
        Scene.from_arrays(np.zeros((2, RATE), dtype=np.int16), array, sample_rate=RATE)
    with pytest.raises(InputError, match="two are called 'mate'"):
        Scene.from_arrays(np.zeros((2, RATE)), array, [talkers[0], talkers[0]], sample_rate=RATE)
    with pytest.raises(InputError, match="was not read from a file"):
        scene.save("never.toml")


def test_activity_comes_from_rttm(folder: Path) -> None:
    (folder / "who.rttm").write_text(
        "SPEAKER mix 1 0.10 0.25 <NA> <NA> mate <NA> <NA>\n"
        "SPKR-INFO mix 1 <NA> <NA> <NA> unknown mate <NA> <NA>\n"
        "SPEAKER mix 1 0.60 0.30 <NA> <NA> mate <NA> <NA>\n"
    )
    scene = Scene.load(scene_file(folder, 'activity = "who.rttm"\n' + GOOD))
    assert scene.talkers[0].active_s == [(0.10, 0.35), (0.60, pytest.approx(0.90))]
    assert scene.talkers[1].active_s == []
    with pytest.raises(InputError, match="`activity` is given at the top; keep one"):
        text = 'activity = "who.rttm"\n' + replaced("distance_m", "active_s = [[0.0, 1.0]]\ndistance_m")
        Scene.load(scene_file(folder, text))
    (folder / "who.rttm").write_text("SPEAKER mix 1 0.10 0.25 <NA> <NA> maat <NA> <NA>\n")
    with pytest.raises(InputError, match=r"who\.rttm: speaks of 'maat', whom .*scene\.toml does not name"):
        Scene.load(scene_file(folder, 'activity = "who.rttm"\n' + GOOD))


def test_rttm_comes_back_as_written(tmp_path: Path) -> None:
    activity = {"first mate": [(0.5, 1.25), (3.0, 4.0)], "pilot": [(1.0, 2.0)]}
    write_rttm(tmp_path / "a.rttm", activity, file_id="mix")
    assert read_rttm(tmp_path / "a.rttm") == {"first_mate": [(0.5, 1.25), (3.0, 4.0)], "pilot": [(1.0, 2.0)]}
    starts = [float(line.split()[3]) for line in (tmp_path / "a.rttm").read_text().splitlines()]
    assert starts == sorted(starts)


@pytest.mark.parametrize(
    "line",
    ["SPEAKER mix 1 0.1", "SPEAKER mix 1 x 0.2 <NA> <NA> a <NA> <NA>", "SPEAKER mix 1 1 -2 <NA> <NA> a <NA> <NA>"],
)
def test_wrong_rttm_names_the_line(tmp_path: Path, line: str) -> None:
    (tmp_path / "a.rttm").write_text(f"SPEAKER mix 1 0 1 <NA> <NA> a <NA> <NA>\n{line}\n")
    with pytest.raises(InputError, match=r"a\.rttm: line 2: "):
        read_rttm(tmp_path / "a.rttm")
