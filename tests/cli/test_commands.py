"""The other commands, and how the command line behaves as a whole."""

from __future__ import annotations

import os
import re
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import msgspec
import numpy as np
import pytest

from tests.cli.conftest import RATE, Run
from unmix.audio import write_audio
from unmix.cli.commands import COMMANDS
from unmix.cli.common import progress_bar
from unmix.variant import PRESETS

UNMIX = [sys.executable, "-m", "unmix"]

SPEC = """
title = "two at a desk"
duration_s = 1.0
[array]
positions_m = [[0.0, 0.0, 0.0], [0.04, 0.0, 0.0], [0.0, 0.04, 0.0]]
[[talker]]
name = "a"
clip = "a.wav"
azimuth_deg = 10.0
distance_m = 1.0
[[talker]]
name = "b"
clip = "a.wav"
azimuth_deg = 120.0
distance_m = 1.0
[noise]
sensor_snr_db = 30.0
"""


@pytest.fixture
def spec(tmp_path: Path) -> Path:
    write_audio(tmp_path / "a.wav", 0.1 * np.random.default_rng(2).standard_normal((1, RATE)), RATE)
    (tmp_path / "spec.toml").write_text(SPEC)
    return tmp_path / "spec.toml"


def test_help_lists_every_command(run: Run) -> None:
    for flag in ("--help", "-h"):
        ran = run(flag)
        assert ran.status == 0
        for name, line in COMMANDS.items():
            assert name in ran.out and line.split()[0] in ran.out


@pytest.mark.parametrize("name", COMMANDS)
def test_each_command_explains_itself(run: Run, name: str) -> None:
    ran = run(name, "--help")
    assert ran.status == 0
    assert f"Usage: unmix {name}" in ran.out


def test_version(run: Run) -> None:
    from unmix import __version__

    assert run("--version").out == f"unmix {__version__}\n"


def test_a_misspelt_command_is_told_the_nearest(run: Run) -> None:
    ran = run("slove", "x")
    assert (ran.status, ran.out) == (2, "")
    assert "there is no command 'slove'; did you mean 'solve'?" in ran.err
    assert "commands: demo, solve" in run("qqq").err


def test_render_writes_a_scene_that_solve_takes(run: Run, spec: Path, tmp_path: Path) -> None:
    ran = run("render", spec, "--out", tmp_path / "scene", "--json")
    assert (ran.status, ran.err) == (0, "")
    assert ran.json["scene"] == str(tmp_path / "scene" / "scene.toml")
    assert "mix.wav" in ran.json["files"]
    assert run("solve", ran.json["scene"], "--out", tmp_path / "out", "--variant", "model").status == 0
    ran = run("render", spec, "--out", tmp_path / "scene")
    assert ran.status == 1
    assert "scene.toml: exists already" in ran.err
    ran = run("render", spec, "--out", tmp_path / "scene", "--overwrite")
    assert ran.status == 0
    assert "two at a desk: 1.0 s at 16000 Hz" in ran.out and "consent" in ran.out


def test_render_explains_every_field(run: Run) -> None:
    tree = run("render", "--explain", "--json").json
    keys = [field["key"] for field in tree["fields"]]
    assert "talker[].azimuth_deg" in keys and "room.t20_s" in keys
    assert all(field["meaning"] for field in tree["fields"])
    assert all(key in run("render", "--explain").out for key in keys)


def test_render_names_what_is_wrong(run: Run, spec: Path, tmp_path: Path) -> None:
    spec.write_text(SPEC.replace("a.wav", "gone.wav"))
    ran = run("render", spec, "--out", tmp_path / "scene")
    assert (ran.status, ran.err.count("\n")) == (1, 1)
    assert "gone.wav" in ran.err
    assert not (tmp_path / "scene").exists()
    assert run("render", spec).status == 2


def test_variants_lists_presets_and_fields(run: Run) -> None:
    ran = run("variants")
    tree = run("variants", "--json").json
    assert [p["name"] for p in tree["presets"]] == list(PRESETS)
    assert tree["default"] in PRESETS
    for preset in PRESETS.values():
        assert preset.name in ran.out and preset.summary in ran.out
    for field in tree["fields"]:
        assert field["key"] in ran.out
        assert field["meaning"], f"{field['key']} has no meaning"


def test_variants_shows_one(run: Run, tmp_path: Path) -> None:
    assert run("variants", "model", "--json").json == PRESETS["model"].to_dict()
    assert "model.order" in run("variants", "model").out
    (tmp_path / "mine.toml").write_text('base = "model"\n[model]\norder = 3\n')
    expected = msgspec.structs.replace(PRESETS["model"].model, order=3)
    assert run("variants", tmp_path / "mine.toml", "--json").json["model"] == msgspec.to_builtins(expected)
    ran = run("variants", "modle")
    assert ran.status == 1
    assert "did you mean 'model'?" in ran.err


def test_the_demo_does_the_whole_job(run: Run, tmp_path: Path) -> None:
    """As a newcomer runs it; the figures are the grades', three talkers, each better than before."""
    ran = run("demo", "--out", tmp_path / "demo", "--json")
    assert ran.status == 0
    talkers = ran.json["grades"]["talkers"]
    assert [t["name"] for t in talkers] == ["mate", "engineer", "bosun"]
    assert all(t["gain"]["sir_db"] > 5.0 and t["gain"]["stoi"] > 0.1 for t in talkers)
    for talker in ran.json["solution"]["talkers"]:
        assert (tmp_path / "demo" / "talkers" / talker["file"]).exists()
    assert (tmp_path / "demo" / "scene" / "mix.wav").exists()
    ran = run("demo", "--out", tmp_path / "demo")
    assert ran.status == 1
    assert "exists already; choose another place or pass --overwrite" in ran.err


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_completion_scripts(run: Run, shell: str) -> None:
    ran = run("completion", shell)
    assert ran.status == 0
    assert "_UNMIX_COMPLETE" in ran.out
    if shutil.which(shell):
        subprocess.run([shell, "-n"], input=ran.out, text=True, check=True)


@pytest.mark.parametrize(
    ("words", "expected"),
    [("unmix so", {"solve"}), ("unmix solve x --variant ", set(PRESETS)), ("unmix solve --ove", {"--overwrite"})],
)
def test_completion_answers(words: str, expected: set[str]) -> None:
    environment = os.environ | {
        "_UNMIX_COMPLETE": "bash_complete",
        "COMP_WORDS": words,
        "COMP_CWORD": str(len(words.split(" ")) - 1),
    }
    code = "from unmix.cli import main; main([])"
    done = subprocess.run([sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True)
    answers = {line.split(",")[1] for line in done.stdout.splitlines() if line.startswith("plain,")}
    assert answers == expected


def test_an_interrupt_is_one_line(run: Run, monkeypatch: pytest.MonkeyPatch, scene: Path, tmp_path: Path) -> None:
    def interrupted(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("unmix.jobs.solve.solve_to_folder", interrupted)
    ran = run("solve", scene, "--out", tmp_path / "out")
    assert ran.status == 130
    assert ran.err.strip() == "interrupted: nothing half-written was left behind"


def test_a_defect_of_the_program_is_not_dressed_as_the_users(
    monkeypatch: pytest.MonkeyPatch, scene: Path, tmp_path: Path
) -> None:
    from unmix.cli import main

    def defective(*_: object, **__: object) -> None:
        raise ZeroDivisionError

    monkeypatch.setattr("unmix.jobs.solve.solve_to_folder", defective)
    with pytest.raises(ZeroDivisionError):
        main(["solve", str(scene), "--out", str(tmp_path / "out")])


@pytest.mark.skipif(sys.platform == "win32", reason="signals of another system")
@pytest.mark.parametrize(("sent", "status"), [(signal.SIGTERM, 143), (signal.SIGINT, 130)])
def test_a_killed_run_leaves_nothing_half_written(scene: Path, tmp_path: Path, sent: int, status: int) -> None:
    rows = np.random.default_rng(6).uniform(-0.1, 0.1, (5, 120 * RATE))
    write_audio(scene.parent / "mix.wav", rows, RATE, overwrite=True)
    (tmp_path / "slow.toml").write_text('base = "model"\n[solver]\nmethod = "reduced"\n')
    out = tmp_path / "out"
    command = [*UNMIX, "solve", scene, "--out", out, "--variant", tmp_path / "slow.toml"]
    # Whoever runs the tests in the background hands down an interrupt that is ignored.
    process = subprocess.Popen(
        command,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        text=True,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
    )
    deadline = time.monotonic() + 60.0
    while not list(out.glob(".unfinished-*/*.wav")):
        assert process.poll() is None and time.monotonic() < deadline
        time.sleep(0.01)
    process.send_signal(sent)
    _, err = process.communicate(timeout=60.0)
    assert process.returncode == status
    assert "Traceback" not in err
    assert not out.exists()


def test_a_reader_that_leaves_early_is_no_error() -> None:
    process = subprocess.Popen([*UNMIX, "variants"], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stdout is not None and process.stderr is not None
    process.stdout.close()
    err = process.stderr.read()
    process.wait(timeout=60.0)
    process.stderr.close()
    assert err == ""


def test_progress_needs_a_terminal(capsys: pytest.CaptureFixture[str]) -> None:
    with progress_bar("working") as report:
        report(0.5)
    assert capsys.readouterr() == ("", "")


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
@pytest.mark.parametrize(("seconds", "shown"), [(0.1, False), (3.0, True)])
def test_a_bar_with_time_left_for_what_takes_long(seconds: float, shown: bool) -> None:
    import pty

    code = (
        "import time\nfrom unmix.cli.common import progress_bar\n"
        f"with progress_bar('working') as report:\n for k in range(11):\n  report(k / 10); time.sleep({seconds} / 10)"
    )
    ours, theirs = pty.openpty()
    environment = os.environ | {"TERM": "xterm", "COLUMNS": "80"}
    process = subprocess.Popen([sys.executable, "-c", code], stderr=theirs, env=environment)
    process.wait(timeout=60.0)
    os.close(theirs)
    said = b""
    try:
        while chunk := os.read(ours, 65536):
            said += chunk
    except OSError:
        pass  # the other end is closed and all is read
    os.close(ours)
    text = re.sub(rb"\x1b\[[0-9;?]*[A-Za-z]", b"", said).decode()
    assert ("working" in text) == shown
    assert bool(re.search(r"\d %  0:0\d left", text)) == shown
