import json
from pathlib import Path

import numpy as np
import pytest

from unmix.audio import read_audio, write_audio
from unmix.errors import FileError, InputError
from unmix.jobs.render import render
from unmix.render.activity import quiet_stretches, speech_stretches
from unmix.scene import Scene

RATE = 16000
SPEC = """
title = "Two at the chart table"
seed = 3
[room]
size_m = [4.2, 3.6, 2.6]
t20_s = 0.25
[array]
positions_m = [[0.04, 0.0, 0.0], [-0.02, 0.0346, 0.0], [-0.02, -0.0346, 0.0], [0.0, 0.0, 0.0]]
reference_channel = 3
[[talker]]
name = "First mate"
clip = "mate.wav"
azimuth_deg = 20.0
distance_m = 1.2
start_s = 0.6
[[talker]]
name = "bosun"
clip = "bosun.wav"
azimuth_deg = 90.0
distance_m = 1.1
[noise]
sensor_snr_db = 30.0
"""
WALKING = SPEC.replace("azimuth_deg = 90.0\ndistance_m = 1.1", 'track = "walk.csv"')
WALK = "time_s,azimuth_deg,elevation_deg,distance_m\n0.0,90.0,5.0,1.1\n1.0,95.0,5.0,1.1\n"


@pytest.fixture
def spec(tmp_path: Path) -> Path:
    rng = np.random.default_rng(0)
    # One clip at another rate than the scene's.
    write_audio(tmp_path / "mate.wav", 0.1 * rng.standard_normal((1, RATE // 2)), RATE)
    write_audio(tmp_path / "bosun.wav", 0.1 * rng.standard_normal((1, 44100 // 2)), 44100)
    (tmp_path / "walk.csv").write_text(WALK)
    (tmp_path / "spec.toml").write_text(SPEC)
    return tmp_path / "spec.toml"


def test_a_rendered_folder_is_a_scene_with_its_truth(spec: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    spec.write_text(WALKING)
    shares: list[float] = []
    done = render(spec, out, progress=shares.append)
    assert shares == sorted(shares)
    assert shares[-1] == 1.0
    assert {path.name for path in out.iterdir()} == set(done.files)
    scene = Scene.load(done.scene_path)
    assert scene.title == "Two at the chart table"
    assert [talker.name for talker in scene.talkers] == ["First mate", "bosun"]
    assert scene.talkers[0].azimuth == pytest.approx(np.radians(20.0))
    assert scene.talkers[0].distance_m == 1.2
    assert scene.talkers[1].track is not None
    assert scene.array.reference_channel == 3
    assert scene.recording.read() == pytest.approx(done.scene.mixture, abs=1e-6)
    for talker, dry, early, image in zip(
        scene.talkers, done.scene.dry, done.scene.early, done.scene.image, strict=True
    ):
        for kind, truth in (("dry", dry), ("early", early), ("image", image)):
            assert read_audio(talker.references[kind])[0][0] == pytest.approx(truth, abs=1e-6)
    truth = json.loads((out / "truth.json").read_text())
    assert truth == done.truth
    assert [talker["t20_s"] for talker in truth["talkers"]] == pytest.approx([0.25, 0.25], rel=0.05)
    assert truth["talkers"][0]["clip_s"] == [0.6, 1.1]


def test_bearings_can_be_kept_back_and_activity_told(spec: Path, tmp_path: Path) -> None:
    spec.write_text("write_bearings = false\nwrite_activity = true\nwrite_images = true\n" + SPEC)
    done = render(spec, tmp_path / "out")
    scene = Scene.load(done.scene_path)
    assert not any(talker.located for talker in scene.talkers)
    assert scene.talkers[0].active_s[0][0] == pytest.approx(0.6, abs=0.05)
    images, _ = read_audio(tmp_path / "out" / "First-mate-images.wav")
    assert images == pytest.approx(done.scene.images[0], abs=1e-6)


def test_an_array_that_turns_is_written_with_its_orientation(spec: Path, tmp_path: Path) -> None:
    (tmp_path / "head.csv").write_text("time_s,qw,qx,qy,qz\n0.0,1,0,0,0\n1.0,0.9659258,0,0,0.2588190\n")
    spec.write_text(SPEC.replace("reference_channel = 3", 'reference_channel = 3\norientation = "head.csv"'))
    scene = Scene.load(render(spec, tmp_path / "out").scene_path)
    assert scene.orientation is not None
    assert scene.orientation.matrices(1.0)[:, 0] == pytest.approx([np.cos(np.pi / 6), 0.5, 0.0], abs=1e-6)


def test_nothing_is_replaced_unasked_and_nothing_half_written(spec: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    render(spec, out)
    before = {path.name: path.stat().st_mtime_ns for path in out.iterdir()}
    with pytest.raises(FileError, match=r"scene\.toml: exists already"):
        render(spec, out)
    assert {path.name: path.stat().st_mtime_ns for path in out.iterdir()} == before
    render(spec, out, overwrite=True)
    spec.write_text(SPEC.replace("mate.wav", "nobody.wav"))
    with pytest.raises(FileError, match=r"nobody\.wav: no such file"):
        render(spec, tmp_path / "other")
    assert not (tmp_path / "other").exists()


def test_errors_name_the_spec(spec: Path, tmp_path: Path) -> None:
    spec.write_text(SPEC.replace("distance_m = 1.2", "distance_m = 12.0"))
    with pytest.raises(
        InputError, match=r"spec\.toml: key `talker\[0\]`: 'First mate' would be at .* outside the room"
    ):
        render(spec, tmp_path / "out")


def test_activity_of_bursts() -> None:
    signal = np.zeros(3 * RATE)
    for start_s in (0.5, 0.9, 2.0):
        signal[round(start_s * RATE) : round((start_s + 0.2) * RATE)] = 0.1
    spoken = speech_stretches(signal, RATE)
    assert spoken == [(0.5, 1.1), (2.0, 2.2)]
    assert quiet_stretches([spoken, [(1.2, 1.4)]], 3.0, ring_s=0.1) == [(0.0, 0.5), (1.5, 2.0), (2.3, 3.0)]
    assert speech_stretches(np.zeros(100), RATE) == []
