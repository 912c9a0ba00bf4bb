"""Answers and key: read strictly, matched by token, turned into figures."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from unmix.cli import main
from unmix.errors import FileError, InputError
from unmix.jobs.listening import KEY_NAME, Key, KeyTrial, analyse_answers, scores_csv, write_key

STIMULI = {"sa": "full", "sb": "microphone", "sc": "reference"}


@pytest.fixture
def key(tmp_path: Path) -> Path:
    trials = [
        KeyTrial(trial=f"trial-{n}", scene="watch", talker=name, stimuli={f"{t}{n}": c for t, c in STIMULI.items()})
        for n, name in ((1, "mate"), (2, "pilot"))
    ]
    write_key(tmp_path / KEY_NAME, Key(test="t1", procedure="scale", trials=trials))
    return tmp_path / KEY_NAME


def answers(folder: Path, name: str, full: float, **changes: Any) -> Path:
    made = [
        {"trial": f"trial-{n}", "order": [], "scores": {f"sa{n}": full + n, f"sb{n}": 20, f"sc{n}": 100}}
        for n in (1, 2)
    ]
    practice = {"trial": "trial-1", "practice": True, "scores": {"sa1": 0, "sb1": 0, "sc1": 100}}
    tree = {"format": "unmix-listening-1", "test": "t1", "procedure": "scale", "listener": name}
    path = folder / f"{name}.json"
    path.write_text(json.dumps(tree | {"answers": [practice, *made]} | changes))
    return path


def test_scores_are_gathered_and_practice_is_not(tmp_path: Path, key: Path) -> None:
    files = [answers(tmp_path, name, full) for name, full in (("a", 60.0), ("b", 70.0))]
    found, rows = analyse_answers(files)
    assert {c.name: c.interval.mean for c in found.conditions} == {"reference": 100.0, "full": 66.5, "microphone": 20.0}
    assert len(rows) == 12
    assert rows[0] == {"listener": "a", "scene": "watch", "talker": "mate", "variant": "full", "score": 61.0}
    lines = scores_csv(rows).splitlines()
    assert lines[0] == "scene,variant,talker,listening" and lines[1] == "watch,full,mate,61"


def test_pairs(tmp_path: Path) -> None:
    trial = KeyTrial(trial="trial-1", scene="watch", talker="mate", stimuli=STIMULI)
    write_key(tmp_path / KEY_NAME, Key(test="t2", procedure="pairs", trials=[trial]))
    made = [
        {"trial": "trial-1", "pair": ["sa", "sb"], "preferred": "sa"},
        {"trial": "trial-1", "pair": ["sc", "sa"], "preferred": None},
        {"trial": "trial-1", "pair": ["sb", "sc"], "preferred": "sc"},
    ]
    path = answers(tmp_path, "a", 0.0, test="t2", procedure="pairs", answers=made)
    found, _ = analyse_answers([path])
    assert {c.name: c.interval.mean for c in found.conditions} == {"full": 75.0, "reference": 75.0, "microphone": 0.0}
    wrong = answers(tmp_path, "b", 0.0, test="t2", procedure="pairs", answers=[{**made[0], "preferred": "sc"}])
    with pytest.raises(InputError, match="'sc' was not in the pair"):
        analyse_answers([wrong])


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"test": "t9"}, "belongs to another listening test"),
        ({"format": "something"}, "is not answers as the listening page saves them"),
        ({"answers": [{"trial": "trial-7", "scores": {}}]}, "no trial 'trial-7'"),
        ({"answers": [{"trial": "trial-1", "scores": {"zz": 5}}]}, "no signal 'zz'"),
        ({"answers": [{"trial": "trial-1", "scores": {"sa1": 101}}]}, r"scores"),
        ({"listener": ""}, "listener"),
    ],
)
def test_what_does_not_fit_is_named(tmp_path: Path, key: Path, changes: dict[str, Any], said: str) -> None:
    path = answers(tmp_path, "a", 50.0, **changes)
    with pytest.raises(InputError, match=said) as error:
        analyse_answers([path])
    assert str(path) in str(error.value)


def test_the_same_listener_twice_is_an_error(tmp_path: Path, key: Path) -> None:
    first = answers(tmp_path, "a", 50.0)
    second = tmp_path / "again.json"
    second.write_text(first.read_text())
    with pytest.raises(InputError, match="has answered in"):
        analyse_answers([first, second])


def test_without_a_key_nothing_can_be_said(tmp_path: Path) -> None:
    path = answers(tmp_path, "a", 50.0)
    with pytest.raises(FileError, match=r"listening-key\.json: no such file"):
        analyse_answers([path])
    (tmp_path / KEY_NAME).write_text("{}")
    with pytest.raises(InputError, match="is not the key of a listening test"):
        analyse_answers([path])


def test_the_command_writes_what_it_prints(tmp_path: Path, key: Path, capsys: pytest.CaptureFixture[str]) -> None:
    files = [answers(tmp_path, name, full) for name, full in (("a", 60.0), ("b", 70.0))]
    arguments = ["grade", *(x for f in files for x in ("--listeners", str(f))), "--out", str(tmp_path / "out")]
    with pytest.raises(SystemExit) as left:
        main(arguments)
    assert left.value.code == 0
    said = capsys.readouterr().out
    assert "2 of 2 listeners kept, 2 trials" in said and "66.5" in said
    tree = json.loads((tmp_path / "out" / "listening.json").read_text())
    assert [c["name"] for c in tree["conditions"]] == ["reference", "full", "microphone"]
    with pytest.raises(SystemExit) as left:
        main(arguments)
    assert left.value.code == 1
    with pytest.raises(SystemExit) as left:
        main(["grade", "--keep-all"])
    assert left.value.code == 2
