"""What the README shows works as shown."""

from __future__ import annotations

import importlib
import re
import shlex
from pathlib import Path

import click
import numpy as np
import pytest

import unmix
from unmix.batch.plan import Plan
from unmix.cli.commands import COMMANDS
from unmix.files import decode_toml
from unmix.scene_file import SceneFile
from unmix.variant import PRESETS, Variant

README = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", README, re.DOTALL)


def test_the_scene_is_a_scene() -> None:
    text = next(block for block in blocks("toml") if "[recording]" in block)
    scene = decode_toml(text, SceneFile, where="README.md")
    assert [t.name for t in scene.talker] == ["mate", "pilot"]
    # What stands in remarks is meant to be taken out of them.
    spoken = re.sub(r"^# (?=\w+ = )", "", text, flags=re.MULTILINE)
    assert decode_toml(spoken, SceneFile, where="README.md").recording.noise_only_s == [(0.0, 1.5)]


def test_the_variant_is_a_variant() -> None:
    text = next(block for block in blocks("toml") if "base =" in block)
    assert decode_toml(text, Variant, where="README.md").solver.noise == "measured"


def test_the_plan_is_a_plan() -> None:
    text = next(block for block in blocks("toml") if "[[vary]]" in block)
    plan = decode_toml(text, Plan, where="README.md")
    assert len(plan.render) == len(plan.vary) == 1


def test_every_preset_and_its_purpose_is_listed() -> None:
    for preset in PRESETS.values():
        assert f"| `{preset.name}`" in README
        assert preset.summary in README


COMMAND_LINES = [
    line for line in re.findall(r"^    (unmix .+?)$", README.replace("\\\n", " "), re.MULTILINE) if "DIR" not in line
]


@pytest.mark.parametrize("line", COMMAND_LINES)
def test_every_command_shown_can_be_typed(line: str) -> None:
    _, name, *arguments = shlex.split(line, comments=True)
    assert name in COMMANDS
    command = importlib.import_module(f"unmix.cli.{name}").command
    assert isinstance(command, click.Command)
    command.make_context(name, arguments)


def test_there_are_commands_to_check() -> None:
    assert len(COMMAND_LINES) >= 3


def test_the_python_shown_runs() -> None:
    """The second snippet, on noise; that the talkers are real speech does not matter here."""
    snippet = next(block for block in blocks("python") if "from_arrays" in block)
    recording = 0.1 * np.random.default_rng(12).standard_normal((4, 16000))
    names = {"unmix": unmix, "recording": recording, "np": np}
    exec(snippet.replace("unmix.solve(scene)", 'result = unmix.solve(scene, "model")'), names)
    result = names["result"]
    assert isinstance(result, unmix.Solution)
    assert result.signals is not None and result.signals.shape == (2, 16000)
    assert "mate" in result._repr_html_()


def test_cautions_are_there() -> None:
    for word in ("Consent", "Listening level", "licensed professionals"):
        assert word in README
