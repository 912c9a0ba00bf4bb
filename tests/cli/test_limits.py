"""`unmix limits` as a shell sees it."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.cli.conftest import Run
from tests.conftest import circle


@pytest.fixture
def array(tmp_path: Path) -> Path:
    circle(4).save(tmp_path / "array.toml")
    return tmp_path / "array.toml"


def test_tables_and_picture(run: Run, array: Path) -> None:
    ran = run("limits", array, "--sweep", "--plot", array.parent / "limits.svg")
    assert ran.status == 0, ran.err
    for word in ("usable", "own anchor", "nearest anchor", "head pairs", "How many microphones"):
        assert word in ran.out
    picture = (array.parent / "limits.svg").read_text()
    assert "noise gain, dB" in picture and "12 microphones" in picture
    again = run("limits", array, "--plot", array.parent / "limits.svg")
    assert again.status == 1 and "--overwrite" in again.err


def test_json_is_one_object(run: Run, array: Path) -> None:
    tree = run("limits", array, "--json", "--snr", 40).json
    assert tree["snr_db"] == 40 and tree["microphones"] == 5
    assert tree["sweep"] == []


def test_a_missing_array_is_one_line(run: Run, tmp_path: Path) -> None:
    ran = run("limits", tmp_path / "nothing.toml")
    assert ran.status == 1
    assert ran.err.count("\n") == 1 and "no such file" in ran.err
