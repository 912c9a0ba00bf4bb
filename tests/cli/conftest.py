"""Scene folders for the commands, and a way to run one as a shell would."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from unmix.audio import write_audio
from unmix.cli import main
from unmix.model.delays import paths_from_bearings

RATE = 16000
SECONDS = 1.5
SCENE = """
[recording]
file = "mix.wav"
[array]
file = "array.toml"
[[talker]]
name = "mate"
azimuth_deg = 20.0
distance_m = 1.2
reference = "mate.wav"
[[talker]]
name = "Chief Pilot"
azimuth_deg = 110.0
distance_m = 1.2
reference = "pilot.wav"
"""


@dataclass(frozen=True)
class Ran:
    """What a command left: exit status, standard output, standard error."""

    status: int
    out: str
    err: str

    @property
    def json(self) -> dict[str, Any]:
        """Standard output as the one JSON object it must be."""
        tree = json.loads(self.out)
        assert isinstance(tree, dict)
        return tree


Run = Callable[..., Ran]


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str]) -> Run:
    """Run a command in this process: `run("solve", path, "--json")`."""

    def command(*arguments: object) -> Ran:
        capsys.readouterr()
        with pytest.raises(SystemExit) as left:
            main([str(a) for a in arguments])
        said = capsys.readouterr()
        assert isinstance(left.value.code, int)
        return Ran(left.value.code, said.out, said.err)

    return command


def signals() -> np.ndarray:
    """Two talkers as received at the reference microphone, and the recording of five microphones."""
    array = circle(4)
    paths = paths_from_bearings(array, np.radians([20.0, 110.0]), 0.0, 1.2)
    talkers = np.stack([speech("novel-reader", SECONDS), speech("card-reader", SECONDS)])
    mixture = delayed(talkers, paths, RATE).sum(axis=0)
    return np.concatenate([talkers, mixture + 1e-4 * np.random.default_rng(4).standard_normal(mixture.shape)])


@pytest.fixture
def scene(tmp_path: Path) -> Path:
    """A scene file with two talkers and their references."""
    rows = signals()
    circle(4).save(tmp_path / "array.toml")
    write_audio(tmp_path / "mate.wav", rows[:1], RATE)
    write_audio(tmp_path / "pilot.wav", rows[1:2], RATE)
    write_audio(tmp_path / "mix.wav", rows[2:], RATE)
    path = tmp_path / "scene.toml"
    path.write_text(SCENE)
    return path


@pytest.fixture
def rewrite(scene: Path) -> Callable[[Callable[[np.ndarray], np.ndarray]], Path]:
    """Replace the recording by what a function makes of it; the scene stays the same."""

    def change(function: Callable[[np.ndarray], np.ndarray]) -> Path:
        write_audio(scene.parent / "mix.wav", function(signals()[2:]), RATE, overwrite=True)
        return scene

    return change
