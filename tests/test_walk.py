"""The README's walk through the job prints what the README says it prints."""

from __future__ import annotations

import importlib.util
import re
import sys
from pathlib import Path
from types import ModuleType

import pytest

ROOT = Path(__file__).parents[1]
pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="the README's output is a terminal's")

TIMES = re.compile(
    r"Done in \d+ s|in [\d.]+ s(?= \()|\([\d.]+ times (?:faster|slower) than real time\)|\([\d.]+ MB\)"
    r"|through in [\d.]+ s"
)
NUMBER = re.compile(r"[+\-\u2212]?\d+(?:\.\d+)?")


def load() -> ModuleType:
    spec = importlib.util.spec_from_file_location("readme", ROOT / "docs" / "readme.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def words(text: str) -> list[str]:
    """The words of an output, however it is folded; times stand for themselves."""
    return re.sub(r"[─│\s]+", " ", TIMES.sub("TIME", text)).split()


def same(shown: str, real: str) -> bool:
    """Equal, figures to one and a half of their last digit: other processors round otherwise."""
    if shown == real:
        return True
    if NUMBER.sub("#", shown) != NUMBER.sub("#", real):
        return False
    pairs = zip(NUMBER.findall(shown), NUMBER.findall(real), strict=True)
    return all(
        abs(float(a.replace("\u2212", "-")) - float(b.replace("\u2212", "-")))
        <= 1.5 * 10.0 ** -len(a.partition(".")[2]) + 1e-9
        for a, b in pairs
    )


def test_figures_are_compared_by_their_last_digit() -> None:
    assert same("+15.3", "+15.4") and not same("+15.3", "+15.5")
    assert same("(-6.6", "(-6.5") and not same("16000", "16002")
    assert not same("mate", "bosun") and not same("0.93", "0.9x")


def test_the_walk_prints_what_the_readme_says(tmp_path: Path) -> None:
    readme = load()
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    found = list(readme.blocks(text))
    assert {command.split()[1] for command, _ in found} >= {"demo", "check", "locate", "solve", "grade", "report"}
    for command, shown in found:
        said, real = words(shown), words(readme.run(command, tmp_path))
        assert len(said) == len(real), f"{command}: run docs/readme.py; now it says {' '.join(real)}"
        wrong = [(a, b) for a, b in zip(said, real, strict=True) if not same(a, b)]
        assert not wrong, f"{command}: run docs/readme.py; shown and real: {wrong[:5]}"


@pytest.mark.parametrize("name", ["verdict.png", "spectrograms.png"])
def test_the_pictures_are_there_and_small(name: str) -> None:
    path = ROOT / "docs" / "pictures" / name
    assert f"docs/pictures/{name}" in (ROOT / "README.md").read_text(encoding="utf-8")
    assert 5_000 < path.stat().st_size < 250_000
