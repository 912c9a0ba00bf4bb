"""The listening job: answers of listeners and the key to what they heard in, figures out."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Any, Literal

import msgspec
import numpy as np
from msgspec import Meta
from numpy.typing import NDArray

from unmix.errors import FileError, InputError
from unmix.files import write_aside
from unmix.metrics.listening import Listening, analyse_listening, pair_scores

__all__ = ["KEY_NAME", "Answers", "Key", "KeyTrial", "analyse_answers", "read_key", "scores_csv", "write_key"]

Floats = NDArray[np.float64]

KEY_NAME = "listening-key.json"


class _Strict(msgspec.Struct, forbid_unknown_fields=True, kw_only=True, frozen=True):
    pass


class KeyTrial(_Strict, kw_only=True, frozen=True):
    """What was heard in a trial: conditions by the token that the page knows them by."""

    trial: str
    scene: str
    talker: str
    stimuli: dict[str, str]


class Key(_Strict, kw_only=True, frozen=True):
    """Which condition is behind which token; kept from the listeners."""

    format: Literal["unmix-listening-key-1"] = "unmix-listening-key-1"
    test: str
    procedure: Literal["scale", "pairs"]
    trials: Annotated[list[KeyTrial], Meta(min_length=1)]


class _Answer(_Strict, kw_only=True, frozen=True):
    trial: str
    practice: bool = False
    order: list[str] = []
    seconds: float = 0.0
    scores: dict[str, Annotated[float, Meta(ge=0.0, le=100.0)]] = {}
    pair: Annotated[list[str], Meta(min_length=2, max_length=2)] | None = None
    preferred: str | None = None


class Answers(_Strict, kw_only=True, frozen=True):
    """What one listener answered, as the page saves it."""

    format: Literal["unmix-listening-1"]
    test: str
    procedure: Literal["scale", "pairs"]
    listener: Annotated[str, Meta(min_length=1)]
    started: str = ""
    finished: str = ""
    answers: list[_Answer]


def _read(path: Path, kind: type[Any], what: str) -> Any:
    try:
        return msgspec.json.decode(path.read_bytes(), type=kind)
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; check the path") from None
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    except (msgspec.DecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: is not {what} ({error})") from None


def read_key(path: Path) -> Key:
    """The key of a listening test. Raises FileError or InputError naming the file."""
    key: Key = _read(path, Key, "the key of a listening test as `unmix report --listening` writes it")
    return key


def write_key(path: Path, key: Key, *, overwrite: bool = False) -> None:
    """Write the key of a listening test. Raises FileError when it exists and `overwrite` is not given."""
    with write_aside(path, overwrite=overwrite) as aside:
        aside.write_bytes(msgspec.json.format(msgspec.json.encode(key), indent=2) + b"\n")


def analyse_answers(
    files: Sequence[Path], *, key: Path | None = None, screen: bool = True, seed: int = 0
) -> tuple[Listening, list[dict[str, Any]]]:
    """Read what listeners answered and say what they found.

    files   one per listener, as the listening page saves them
    key     which condition is behind which token; by default ``listening-key.json`` beside the first file
    screen  False keeps listeners who did not recognise the hidden reference

    Returns the outcome and one row per listener, scene, talker and condition. Raises FileError or InputError naming
    file and remedy.
    """
    if not files:
        raise InputError("give at least one file of answers")
    opened = read_key(key if key is not None else files[0].parent / KEY_NAME)
    conditions = sorted({name for trial in opened.trials for name in trial.stimuli.values()})
    listeners: dict[str, Path] = {}
    tables = []
    for path in files:
        answers: Answers = _read(path, Answers, "answers as the listening page saves them")
        _check(answers, opened, path, listeners)
        tables.append(_table(answers, opened, conditions, path))
    scores = np.stack(tables)
    names = list(listeners)
    found = analyse_listening(scores, names, conditions, procedure=opened.procedure, screen=screen, seed=seed)
    kept = {listener.name: listener.kept for listener in found.listeners}
    rows = [
        {"listener": name, "scene": trial.scene, "talker": trial.talker, "variant": condition, "score": float(value)}
        for i, name in enumerate(names)
        for j, trial in enumerate(opened.trials)
        for condition, value in zip(conditions, scores[i, j], strict=True)
        if kept[name] and np.isfinite(value)
    ]
    return found, rows


def _check(answers: Answers, key: Key, path: Path, listeners: dict[str, Path]) -> None:
    if answers.test != key.test or answers.procedure != key.procedure:
        raise InputError(f"{path}: belongs to another listening test than the key; give the key written with its page")
    if answers.listener in listeners:
        raise InputError(
            f"{path}: listener {answers.listener!r} has answered in {listeners[answers.listener]} already; "
            "leave one file out"
        )
    listeners[answers.listener] = path


def _table(answers: Answers, key: Key, conditions: list[str], path: Path) -> Floats:
    """One listener's scores: (trials, conditions), NaN where there is none; practice does not count."""
    index = {trial.trial: j for j, trial in enumerate(key.trials)}
    table = np.full((len(key.trials), len(conditions)), np.nan)
    pairs: dict[int, dict[tuple[str, str], float]] = {}
    for answer in answers.answers:
        if answer.practice:
            continue
        if answer.trial not in index:
            raise InputError(f"{path}: there is no trial {answer.trial!r} in the key")
        j = index[answer.trial]
        stimuli = key.trials[j].stimuli
        strange = [token for token in (*answer.scores, *(answer.pair or [])) if token not in stimuli]
        if strange:
            raise InputError(f"{path}: trial {answer.trial!r} has no signal {strange[0]!r} in the key")
        for token, score in answer.scores.items():
            table[j, conditions.index(stimuli[token])] = score
        if answer.pair is not None:
            a, b = answer.pair
            if answer.preferred not in (a, b, None):
                raise InputError(f"{path}: trial {answer.trial!r}: {answer.preferred!r} was not in the pair")
            share = 0.5 if answer.preferred is None else float(answer.preferred == a)
            pairs.setdefault(j, {})[stimuli[a], stimuli[b]] = share
    for j, preferred in pairs.items():
        table[j] = pair_scores(preferred, conditions)
    return table


def scores_csv(rows: Sequence[dict[str, Any]]) -> str:
    """Rows of `analyse_answers` as CSV that a batch takes as `[[scores]]`: scene, variant, talker, listening."""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(["scene", "variant", "talker", "listening"])
    writer.writerows([row["scene"], row["variant"], row["talker"], f"{row['score']:.6g}"] for row in rows)
    return stream.getvalue()
