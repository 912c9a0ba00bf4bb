"""`unmix grade`: from a scene or from files, for people and for scripts."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from tests.cli.conftest import RATE, Run, signals
from tests.conftest import speech
from unmix.audio import write_audio


@pytest.fixture
def solved(run: Run, scene: Path) -> Path:
    """The scene's folder, with talkers in `out`."""
    assert run("solve", scene, "--out", scene.parent / "out", "--variant", "model").status == 0
    return scene.parent


def test_each_talker_before_and_after(run: Run, solved: Path) -> None:
    ran = run("grade", solved / "scene.toml", "--estimates", solved / "out", "--out", solved / "out")
    assert ran.status == 0
    for word in ("mate", "Chief Pilot", "before", "after", "gain", "SIR", "STOI"):
        assert word in ran.out
    tree = json.loads((solved / "out" / "grades.json").read_text())
    for talker in tree["talkers"]:
        assert talker["sir_db"] > 20.0
        assert talker["gain"]["sir_db"] == pytest.approx(talker["sir_db"] - talker["unprocessed"]["sir_db"])
        # The figures of the table are those of the file.
        assert f"{talker['sir_db']:.1f}" in ran.out


def test_json_is_the_content_of_grades_json(run: Run, solved: Path) -> None:
    ran = run("grade", solved / "scene.toml", "--estimates", solved / "out", "--out", solved / "out", "--json")
    assert (ran.status, ran.err) == (0, "")
    assert ran.json == json.loads((solved / "out" / "grades.json").read_text())
    assert ran.json["against"] == "plain"


def test_files_are_graded_by_the_references_names(run: Run, solved: Path) -> None:
    (solved / "est").mkdir()
    write_audio(solved / "est" / "b.wav", signals()[1:2], RATE)
    write_audio(solved / "est" / "a.wav", signals()[:1], RATE)
    ran = run(
        *("grade", "--reference", solved / "mate.wav", "--reference", solved / "pilot.wav"),
        *("--estimate", solved / "est" / "b.wav", "--estimate", solved / "est" / "a.wav"),
        *("--unprocessed", solved / "mix.wav", "--json"),
    )
    assert ran.status == 0
    assert [(t["name"], t["estimate"]) for t in ran.json["talkers"]] == [("mate", 1), ("pilot", 0)]
    # Nothing is left between a reference and itself: no sentinel number, a reason.
    assert all(t["sir_db"] is None and "rounding" in t["undefined"]["sir_db"] for t in ran.json["talkers"])
    assert all(t["unprocessed"]["sdr_db"] < 10.0 for t in ran.json["talkers"])


def test_cross_check_prints_the_difference(run: Run, solved: Path) -> None:
    ran = run("grade", solved / "scene.toml", "--estimates", solved / "out", "--cross-check")
    assert "Largest difference to mir_eval: " in ran.out
    assert float(ran.out.split("mir_eval: ")[1].split(" dB")[0]) < 1e-6


def test_what_is_undefined_is_a_dash_and_a_reason(run: Run, solved: Path) -> None:
    write_audio(solved / "out" / "mate.wav", 0.0 * signals()[:1], RATE, overwrite=True)
    ran = run("grade", solved / "scene.toml", "--estimates", solved / "out")
    assert ran.status == 0
    assert "–" in ran.out and "Note: mate: no sdr_db" in ran.out
    ran = run("grade", solved / "scene.toml", "--estimates", solved / "out", "--json")
    mate = ran.json["talkers"][0]
    assert mate["sdr_db"] is None and "silent" in mate["undefined"]["sdr_db"]


def test_a_reference_of_another_rate_and_length(run: Run, solved: Path) -> None:
    """Another rate is resampled, a length a little off is trimmed and said so; half of it is an error."""
    from unmix.audio import resample

    write_audio(solved / "mate.wav", resample(signals()[:1], RATE, 48000), 48000, overwrite=True)
    write_audio(solved / "pilot.wav", signals()[1:2, : int(1.2 * RATE)], RATE, overwrite=True)
    ran = run("grade", solved / "scene.toml", "--estimates", solved / "out", "--json")
    assert ran.status == 0
    assert all(t["sir_db"] > 15.0 for t in ran.json["talkers"])
    assert any("pilot.wav" in line and "1.200 s" in line for line in ran.json["warnings"])
    write_audio(solved / "pilot.wav", signals()[1:2, : int(0.5 * RATE)], RATE, overwrite=True)
    ran = run("grade", solved / "scene.toml", "--estimates", solved / "out")
    assert ran.status == 1
    assert "pilot.wav" in ran.err and "do these belong together?" in ran.err


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ((), "give SCENE and --estimates DIR"),
        (("scene.toml",), "--estimates DIR"),
        (("scene.toml", "--reference", "a.wav", "--estimate", "b.wav"), "not both"),
        (("--reference", "a.wav"), "give --reference and --estimate"),
        (("--reference", "a.wav", "--estimate", "b.wav", "--estimates", "out"), "belongs to a SCENE"),
        (("scene.toml", "--estimates", "out", "--against", "wet"), "'wet' is not one of"),
    ],
)
def test_usage(run: Run, arguments: tuple[str, ...], message: str) -> None:
    ran = run("grade", *arguments)
    assert (ran.status, ran.out) == (2, "")
    assert message in ran.err
    ran = run("grade", *arguments, "--json")
    assert (ran.status, ran.out, ran.err.count("\n")) == (2, "", 1)


def test_bad_input(run: Run, solved: Path) -> None:
    scene = solved / "scene.toml"
    cases = [
        (("--estimates", solved / "none"), "none: "),
        (("--estimates", solved / "out", "--against", "early"), "has no early reference"),
        (("--estimates", solved / "out", "--filter-length", "0"), "filter_length 0"),
    ]
    for arguments, message in cases:
        ran = run("grade", scene, *arguments)
        assert (ran.status, ran.out, ran.err.count("\n")) == (1, "", 1)
        assert message in ran.err
    (solved / "grades.json").write_text("mine")
    ran = run("grade", scene, "--estimates", solved / "out", "--out", solved)
    assert ran.status == 1
    assert "grades.json: exists already" in ran.err
    assert (solved / "grades.json").read_text() == "mine"


def test_a_real_recording(run: Run, tmp_path: Path) -> None:
    talkers = np.array([speech("novel-reader", 6.0), speech("card-reader", 6.0)])
    talkers[0, 3 * 16000 :] = 0.0
    talkers[1, : 2 * 16000] = 0.0
    write_audio(tmp_path / "mix.wav", np.repeat(talkers.sum(axis=0)[None], 2, axis=0), 16000)
    (tmp_path / "out").mkdir()
    text = '[recording]\nfile = "mix.wav"\n[array]\npositions_m = [[0, 0, 0], [0.05, 0, 0]]\n'
    for k, (name, active) in enumerate((("mate", [[0.0, 3.0]]), ("pilot", [[2.0, 6.0]]))):
        write_audio(tmp_path / f"{name}.wav", (talkers[k] + 0.1 * talkers[1 - k])[None], 16000)
        write_audio(tmp_path / "out" / f"{name}.wav", (talkers[k] + 0.03 * talkers[1 - k])[None], 16000)
        text += f'[[talker]]\nname = "{name}"\nazimuth_deg = {60 * k}\nreference = "{name}.wav"\nactive_s = {active}\n'
    (tmp_path / "scene.toml").write_text(text)
    common = ("grade", tmp_path / "scene.toml", "--estimates", tmp_path / "out")
    alone = run(*common, "--alone")
    assert alone.status == 0, alone.err
    assert alone.out.count("-30.5 [-30.5 -30.5]") == 2 and "cannot say what leaks while several speak" in alone.out
    assert run(*common, "--alone", "--json").json["stretches"] == "given"
    close = run(*common, "--close", "--out", tmp_path / "graded")
    assert close.status == 0, close.err
    assert "Bleed of the close microphones" in close.out and "-20.0" in close.out
    assert (tmp_path / "graded" / "grades.json").exists()
    again = run(*common, "--close", "--out", tmp_path / "graded")
    assert again.status == 1 and "exists already" in again.err
    assert run(*common, "--close", "--alone").status == 2
