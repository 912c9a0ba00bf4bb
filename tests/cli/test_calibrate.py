"""`unmix calibrate` as a shell sees it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.calibration.rig import RATE, Faults, take
from tests.cli.conftest import Run
from tests.conftest import circle
from unmix.array import Array
from unmix.audio import read_audio, write_audio

SCENE = """
[recording]
file = "{name}.wav"
[array]
file = "array.toml"
[[talker]]
name = "loudspeaker"
azimuth_deg = {azimuth}
"""
FAULTS = Faults.draw(np.random.default_rng(21), 5)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    rng = np.random.default_rng(22)
    circle(4).save(tmp_path / "array.toml")
    for name, azimuth in (("front", 20.0), ("left", 110.0), ("right", -100.0)):
        write_audio(tmp_path / f"{name}.wav", take(circle(4), FAULTS, np.radians(azimuth), 0.0, rng, seconds=2.0), RATE)
        (tmp_path / f"{name}.toml").write_text(SCENE.format(name=name, azimuth=azimuth))
    return tmp_path


def test_an_array_file_with_corrections(run: Run, folder: Path) -> None:
    ran = run("calibrate", folder / "front.toml", "--out", folder / "fitted.toml")
    assert ran.status == 0, ran.err
    assert "From 1 take" in ran.out
    fitted = Array.load(folder / "fitted.toml")
    assert fitted.gain_db == pytest.approx(FAULTS.against(0).gain_db, abs=0.1)
    assert fitted.delay_std_s is not None
    again = run("calibrate", folder / "front.toml", "--out", folder / "fitted.toml")
    assert again.status == 1 and "--overwrite" in again.err


def test_positions_from_three_takes_as_json(run: Run, folder: Path) -> None:
    scenes = [folder / f"{name}.toml" for name in ("front", "left", "right")]
    ran = run("calibrate", *scenes, "--positions", "--out", folder / "fitted.toml", "--json")
    assert ran.status == 0, ran.err
    assert ran.json["axes"] == "xy"
    assert max(ran.json["channels"]["moved_m"]) < 2e-4
    refused = run("calibrate", scenes[0], "--positions", "--out", folder / "more.toml")
    assert refused.status == 1 and "three bearings" in refused.err
    assert not (folder / "more.toml").exists()


def test_a_tone(run: Run, folder: Path) -> None:
    tone = np.tile(0.1 * np.sin(2 * np.pi * 1000 * np.arange(2 * RATE) / RATE), (5, 1))
    write_audio(folder / "front.wav", tone, RATE, overwrite=True)
    ran = run("calibrate", folder / "front.toml", "--tone-level", 94, "--out", folder / "spl.toml")
    assert "full scale is 114.0 dB SPL" in ran.out
    assert Array.load(folder / "spl.toml").full_scale_db_spl == pytest.approx(114.0, abs=0.01)
    (folder / "front.toml").write_text((folder / "front.toml").read_text().replace("array.toml", "spl.toml"))
    level = run("check", folder / "front.toml", "--json").json["channels"][0]["level_db_spl"]
    assert level == pytest.approx(94.0, abs=0.1)
    solved = run("solve", folder / "front.toml", "--variant", "reference-mic", "--out", folder / "out")
    assert "dB SPL" in solved.out and " 97.0 " in solved.out  # a sine's peak is 3 dB above its level


@pytest.mark.parametrize(
    "options",
    [
        [],
        ["--out", "a.toml", "--blind", "--tone-level", "94"],
        ["--out", "a.toml", "--tone-channel", "1"],
        ["--out", "a.toml", "--responses", "a.sofa"],
        ["--sweep", "s.wav", "--responses", "a.sofa", "--out", "a.toml"],
    ],
)
def test_options_that_do_not_go_together(run: Run, folder: Path, options: list[str]) -> None:
    assert run("calibrate", folder / "front.toml", *options).status == 2


def test_recorders_are_put_onto_one_clock(run: Run, folder: Path) -> None:
    rng = np.random.default_rng(23)
    none = Faults(np.zeros(5), np.zeros(5), np.ones(5), np.zeros((5, 3)))
    y = take(circle(4), none, np.radians(20.0), 0.0, rng, seconds=12.0)
    y[3] = np.roll(y[3], 1600)
    n = np.arange(y.shape[1], dtype=float)
    y[2] = np.interp(n * (1 - 50e-6), n, y[2])
    write_audio(folder / "front.wav", y, RATE, overwrite=True)
    refused = run("calibrate", folder / "front.toml", "--out", folder / "fitted.toml")
    assert refused.status == 1 and "--repaired" in refused.err
    alone = run("calibrate", folder / "front.toml", "--repaired", folder / "alone.wav", "--json")
    assert [round(c["drift_ppm"]) for c in alone.json["clocks"]] == [50, 0]
    ran = run("calibrate", folder / "front.toml", "--repaired", folder / "one.wav", "--out", folder / "fitted.toml")
    assert ran.status == 0, ran.err
    assert "Channel 2" in ran.out and "Channel 3: +100." in ran.out
    fitted = Array.load(folder / "fitted.toml")
    assert np.abs(fitted.delay_s).max() < 1e-5
    assert np.array_equal(read_audio(folder / "alone.wav")[0], read_audio(folder / "one.wav")[0])
