"""`unmix solve`: what it writes, what it says, and what bad input gets."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from tests.cli.conftest import RATE, SCENE, SECONDS, Run, signals
from unmix.audio import read_audio, write_audio

Rewrite = Callable[[Callable[[np.ndarray], np.ndarray]], Path]


def files(folder: Path) -> list[str]:
    return sorted(p.name for p in folder.rglob("*") if p.is_file())


def test_one_file_per_talker_and_who_is_who(run: Run, scene: Path, tmp_path: Path) -> None:
    ran = run("solve", scene, "--out", tmp_path / "out", "--variant", "model")
    assert ran.status == 0
    assert files(tmp_path / "out") == ["Chief-Pilot.wav", "mate.wav", "report.html", "solution.json"]
    for name in ("mate", "Chief-Pilot"):
        read, rate = read_audio(tmp_path / "out" / f"{name}.wav")
        assert (read.shape, rate) == ((1, round(SECONDS * RATE)), RATE)
    assert "mate" in ran.out and "Chief-Pilot.wav" in ran.out
    assert "consent" in ran.out and "the loudest is" in ran.out and "no clinical assessment" in ran.out


def test_json_is_the_content_of_solution_json(run: Run, scene: Path, tmp_path: Path) -> None:
    ran = run("solve", scene, "--out", tmp_path / "out", "--variant", "model", "--json")
    assert (ran.status, ran.err) == (0, "")
    tree = ran.json
    assert tree == json.loads((tmp_path / "out" / "solution.json").read_text())
    assert [(t["name"], t["file"], t["azimuth_deg"]) for t in tree["talkers"]] == [
        ("mate", "mate.wav", pytest.approx(20.0)),
        ("Chief Pilot", "Chief-Pilot.wav", pytest.approx(110.0)),
    ]
    assert tree["variant"] == "model"
    assert tree["warnings"] == []


def test_talkers_come_at_the_level_of_the_reference_microphone(run: Run, scene: Path, tmp_path: Path) -> None:
    run("solve", scene, "--out", tmp_path / "out", "--variant", "model")
    expected = signals()[:2]
    for name, talker in zip(("mate", "Chief-Pilot"), expected, strict=True):
        got = read_audio(tmp_path / "out" / f"{name}.wav")[0][0]
        # What is left of the other talker and of the noise was found 45 dB down.
        assert np.sum((got - talker) ** 2) < 1e-4 * np.sum(talker**2)


def test_a_variant_file_is_taken(run: Run, scene: Path, tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text('base = "model"\n[model]\norder = 4\n')
    ran = run("solve", scene, "--out", tmp_path / "out", "--variant", tmp_path / "mine.toml", "--json")
    assert ran.json["variant"] == "mine"
    assert ran.json["settings"]["model"]["order"] == 4


def test_one_file_per_channel_in_flac(run: Run, scene: Path, tmp_path: Path) -> None:
    for index, channel in enumerate(signals()[2:]):
        write_audio(tmp_path / f"m{index}.flac", channel[None], RATE)
    names = ", ".join(f'"m{i}.flac"' for i in range(5))
    scene.write_text(SCENE.replace('file = "mix.wav"', f"files = [{names}]"))
    assert run("solve", scene, "--out", tmp_path / "out", "--variant", "model").status == 0


@pytest.mark.parametrize("rate", [8000, 44100, 192000])
def test_other_rates(run: Run, scene: Path, tmp_path: Path, rate: int) -> None:
    rows = np.random.default_rng(8).uniform(-0.1, 0.1, (5, rate // 4))
    write_audio(tmp_path / "mix.wav", rows, rate, subtype="PCM_24", overwrite=True)
    ran = run("solve", scene, "--out", tmp_path / "out", "--variant", "model", "--json")
    assert ran.status == 0
    assert ran.json["sample_rate"] == rate
    assert read_audio(tmp_path / "out" / "mate.wav")[0].shape == (1, rate // 4)


# Every line of what bad input gets: what is changed, and the one line that must come.
def missing(scene: Path) -> None:
    (scene.parent / "mix.wav").unlink()


def truncated(scene: Path) -> None:
    path = scene.parent / "mix.wav"
    path.write_bytes(path.read_bytes()[:60_000])


def not_a_number(scene: Path) -> None:
    rows = signals()[2:]
    rows[3, RATE] = np.nan
    write_audio(scene.parent / "mix.wav", rows, RATE, overwrite=True)


def infinite(scene: Path) -> None:
    rows = signals()[2:]
    rows[0, 100] = np.inf
    write_audio(scene.parent / "mix.wav", rows, RATE, overwrite=True)


def too_few_channels(scene: Path) -> None:
    write_audio(scene.parent / "mix.wav", signals()[2:5], RATE, overwrite=True)


def array_text(scene: Path, old: str, new: str) -> None:
    path = scene.parent / "array.toml"
    path.write_text(path.read_text().replace(old, new))


def coincident(scene: Path) -> None:
    (scene.parent / "array.toml").write_text(f"positions_m = {[[0.0, 0.0, 0.0], [0.04, 0.0, 0.0]] * 2 + [[1.0] * 3]}\n")


def millimetres(scene: Path) -> None:
    rows = [[0.0, 0.0, 0.0], [40.0, 0.0, 0.0], [0.0, 40.0, 0.0], [-40.0, 0.0, 0.0], [0.0, -40.0, 0.0]]
    (scene.parent / "array.toml").write_text(f"positions_m = {rows}\n")


def unknown_key(scene: Path) -> None:
    scene.write_text(SCENE.replace("azimuth_deg", "azimut_deg", 1))


def more_talkers_than_microphones(scene: Path) -> None:
    scene.write_text(SCENE + "".join(f'[[talker]]\nname = "t{k}"\nazimuth_deg = {40 * k + 150}\n' for k in range(4)))


def too_short(scene: Path) -> None:
    write_audio(scene.parent / "mix.wav", signals()[2:, :100], RATE, overwrite=True)


def not_audio(scene: Path) -> None:
    (scene.parent / "mix.wav").write_text("these are notes")


def slow_rate(scene: Path) -> None:
    write_audio(scene.parent / "mix.wav", signals()[2:], 4000, overwrite=True)


BAD = [
    (missing, r"mix.wav: no such file"),
    (truncated, r"mix.wav: cut short"),
    (not_a_number, "mix.wav: channel 3 holds NaN or infinite samples at 1.000 s"),
    (infinite, "mix.wav: channel 0 holds NaN or infinite samples at 0.006 s"),
    (too_few_channels, "the recording has 3 channels and the array 5 microphones"),
    (coincident, "microphones 0 and 2 stand at the same place"),
    (millimetres, "80 m wide; are the positions in millimetres?"),
    (unknown_key, "unknown key `azimut_deg` in talker[0]; did you mean `azimuth_deg`?"),
    (more_talkers_than_microphones, "6 talkers"),
    (too_short, "at least 100 ms are needed"),
    (not_audio, "mix.wav: not readable audio"),
    (slow_rate, "mix.wav: sample rate 4000 Hz; 8000 to 192000 Hz are supported"),
]


@pytest.mark.parametrize(("spoil", "message"), BAD, ids=[spoil.__name__ for spoil, _ in BAD])
@pytest.mark.parametrize("as_json", [False, True], ids=["people", "json"])
def test_bad_input_gets_one_line_and_leaves_nothing(
    run: Run, scene: Path, tmp_path: Path, spoil: Callable[[Path], None], message: str, as_json: bool
) -> None:
    spoil(scene)
    ran = run("solve", scene, "--out", tmp_path / "out", "--variant", "model", *["--json"] * as_json)
    assert (ran.status, ran.out) == (1, "")
    assert ran.err.startswith("error: ") and ran.err.count("\n") == 1
    assert message in ran.err
    assert not (tmp_path / "out").exists()


def silent(rows: np.ndarray) -> np.ndarray:
    rows[2] = 0.0
    return rows


def duplicated(rows: np.ndarray) -> np.ndarray:
    rows[4] = rows[1]
    return rows


@pytest.mark.parametrize(
    ("spoil", "message"),
    [(silent, "channel 2 is silent"), (duplicated, "channels 1 and 4 hold the same samples")],
)
def test_dead_and_doubled_channels_are_warned_of(
    run: Run, rewrite: Rewrite, tmp_path: Path, spoil: Callable[[np.ndarray], np.ndarray], message: str
) -> None:
    path = rewrite(spoil)
    ran = run("solve", path, "--out", tmp_path / "a", "--variant", "model")
    assert ran.status == 0
    assert [line for line in ran.err.splitlines() if line.startswith(f"warning: {message}")]
    ran = run("solve", path, "--out", tmp_path / "b", "--variant", "model", "--json")
    assert (ran.status, ran.err) == (0, "")
    assert any(message in line for line in ran.json["warnings"])


def test_a_loud_talker_is_scaled_down_whole_and_named(run: Run, rewrite: Rewrite, tmp_path: Path) -> None:
    ran = run("solve", rewrite(lambda rows: 8.0 * rows), "--out", tmp_path / "out", "--variant", "model", "--json")
    loud = max(ran.json["talkers"], key=lambda t: t["peak"])
    assert loud["peak"] > 1.0
    assert loud["scale"] == pytest.approx(1.0 / loud["peak"])
    for talker in ran.json["talkers"]:
        assert np.abs(read_audio(tmp_path / "out" / talker["file"])[0]).max() <= 1.0
    assert any(loud["name"] in line and "full scale" in line for line in ran.json["warnings"])


def test_files_in_the_way_are_kept_without_overwrite(run: Run, scene: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / "mate.wav").write_text("mine")
    ran = run("solve", scene, "--out", out, "--variant", "model")
    assert ran.status == 1
    assert "mate.wav: exists already; choose another place or pass --overwrite" in ran.err
    assert files(out) == ["mate.wav"]
    assert (out / "mate.wav").read_text() == "mine"
    assert run("solve", scene, "--out", out, "--variant", "model", "--overwrite").status == 0
    ran = run("solve", scene, "--out", out, "--variant", "model")
    assert "solution.json: exists already" in ran.err


def test_an_out_folder_that_cannot_be_written(run: Run, scene: Path, tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("a file")
    for out in (tmp_path / "taken", tmp_path / "taken" / "deeper"):
        ran = run("solve", scene, "--out", out, "--variant", "model")
        assert ran.status == 1
        assert "cannot be written" in ran.err and "choose another folder" in ran.err


@pytest.mark.parametrize(
    ("variant", "message"),
    [
        ("modle", "no variant 'modle'; did you mean 'model'?"),
        ("gone.toml", "gone.toml: no such file"),
    ],
)
def test_unknown_variants(run: Run, scene: Path, tmp_path: Path, variant: str, message: str) -> None:
    ran = run("solve", scene, "--out", tmp_path / "out", "--variant", variant)
    assert ran.status == 1
    assert message in ran.err
    assert ran.err.count("\n") == 1


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("[model]\nordr = 4", "unknown key `ordr` in [model]; did you mean `order`?"),
        ("[model]\norder = 40", "key `model.order`: expected a whole number <= 12"),
        ('[solver]\nnoise = "pink"', "key `solver.noise`: 'pink' is none of 'diffuse', 'fitted'"),
        ('base = "modle"', "key `base`: no preset 'modle'"),
    ],
)
def test_wrong_variant_files(run: Run, scene: Path, tmp_path: Path, text: str, message: str) -> None:
    (tmp_path / "mine.toml").write_text(text)
    ran = run("solve", scene, "--out", tmp_path / "out", "--variant", tmp_path / "mine.toml")
    assert ran.status == 1
    assert "mine.toml: " in ran.err and message in ran.err
