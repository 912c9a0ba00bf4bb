"""What grading needs, from files and arrays: checked, at one rate and of one length."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.audio import HIGHEST_RATE_HZ, LOWEST_RATE_HZ, Recording, Samples, resample
from unmix.audio_open import open_audio
from unmix.errors import FileError, InputError
from unmix.files import safe_names
from unmix.metrics.timebase import LONG_S
from unmix.scene import REFERENCE_KINDS, Scene

__all__ = [
    "Estimates",
    "check_options",
    "check_signals",
    "choose_kind",
    "estimates_of_scene",
    "fit",
    "read_signal",
    "recording_of_file",
    "recording_of_scene",
    "references_of_scene",
    "stacked",
]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

AUDIO_SUFFIXES = (".wav", ".flac", ".w64", ".rf64", ".aiff", ".aif")
PLAIN = "plain"
EXACT_IN_SINGLE = ("PCM_S8", "PCM_U8", "PCM_16", "PCM_24", "FLOAT")
"""Sample formats, by libsndfile's names, whose every value a float of 32 bits holds."""
ABSURD = 2.0
"""Signals whose lengths differ by more than this factor do not belong together."""
UNNOTICED_S = 0.002
"""Lengths that differ by less than this are made equal without a word: rates that were converted round differently."""
ALL_MICROPHONES_S = LONG_S
"""Longer recordings are graded against the reference microphone only, so that not all channels are held at once."""
NOT_LOOKED_FOR = (
    f"the best single microphone is not looked for in recordings beyond {ALL_MICROPHONES_S / 60:.0f} minutes"
)


@dataclass(frozen=True)
class Estimates:
    """Estimates with the names they came under; `notes` say what was changed."""

    names: tuple[str, ...]
    signals: Signals
    notes: tuple[str, ...] = ()


def check_options(sample_rate: int, filter_length: int) -> None:
    """Raise InputError for a rate or a filter length that cannot be meant."""
    if not LOWEST_RATE_HZ <= sample_rate <= HIGHEST_RATE_HZ:
        raise InputError(f"sample_rate {sample_rate} Hz; {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz are supported")
    if filter_length < 1:
        raise InputError(f"filter_length {filter_length}; give one tap or more")


def check_signals(signals: Any, what: str) -> Floats:
    """`signals` as a (rows, samples) array of floats. Raises InputError naming `what`."""
    array = np.asarray(signals)
    if array.ndim != 2 or array.shape[1] == 0:
        raise InputError(f"{what}: shape {array.shape}; give (signals, samples), one row per signal")
    if not np.issubdtype(array.dtype, np.floating):
        raise InputError(f"{what}: type {array.dtype}; give floating point with full scale 1.0")
    return array


def choose_kind(available: Mapping[str, Sequence[str]], against: str | None) -> str:
    """The kind of reference to grade against: the one asked for, else early, image, dry or plain, the first all have.

    `available` holds each talker's kinds by name. Raises InputError naming the talker who lacks one.
    """
    kinds = (*REFERENCE_KINDS, PLAIN)
    if against is not None and against not in kinds:
        raise InputError(f"there is no reference kind {against!r}; choose among {', '.join(kinds)}")
    for name, has in available.items():
        if not has:
            raise InputError(f"talker {name!r} has no reference; add `reference`, or grade without any: --alone")
        if against is not None and against not in has:
            raise InputError(f"talker {name!r} has no {against} reference, only {', '.join(sorted(has))}")
    if against is not None:
        return against
    for kind in kinds:
        if all(kind in has for has in available.values()):
            return kind
    raise InputError(f"the talkers have no kind of reference in common; give {' or '.join(REFERENCE_KINDS)} for all")


def fit(signals: Signals, samples: int, sample_rate: int, what: str) -> tuple[Signals, list[str]]:
    """`signals` (rows, n) trimmed or padded with zeros to `samples`, and a note that names `what` if that mattered.

    Raises InputError when the lengths have nothing to do with each other.
    """
    n = signals.shape[-1]
    if n == samples:
        return signals, []
    lengths = f"{n / sample_rate:.3f} s long where {samples / sample_rate:.3f} s are graded"
    if max(n, samples) > ABSURD * min(n, samples):
        raise InputError(f"{what}: {lengths}; do these belong together?")
    if n > samples:
        fitted, verb = signals[..., :samples], "trimmed"
    else:
        fitted, verb = np.pad(signals, [(0, 0)] * (signals.ndim - 1) + [(0, samples - n)]), "padded with silence"
    if abs(n - samples) <= UNNOTICED_S * sample_rate:
        return fitted, []
    return fitted, [f"{what}: {lengths}; {verb}"]


def _read_all(path: Path) -> tuple[Signals, int]:
    """A whole file (channels, samples) and its rate; a long one in single precision where that holds its samples."""
    recording = Recording.open([path])
    signals = np.empty((len(recording.channels), recording.samples), dtype=_precision(path, recording))
    at = 0
    for chunk in recording.chunks():
        signals[:, at : at + chunk.shape[1]] = chunk
        at += chunk.shape[1]
    return signals, recording.sample_rate


def _precision(path: Path, recording: Recording) -> type[np.floating[Any]]:
    """Single precision for what is long and has 24 significant bits or fewer, so that none is lost."""
    if recording.duration_s <= LONG_S:
        return np.float64
    with open_audio(path) as stream:
        return np.float32 if stream.subtype in EXACT_IN_SINGLE else np.float64


def read_signal(path: Path, sample_rate: int, *, channel: int | None = None) -> tuple[Signals, list[str]]:
    """One signal (samples,) at `sample_rate` from a file, and a note if it was resampled.

    A file of several channels needs `channel`. Raises FileError or InputError naming the file.
    """
    signals, rate = _read_all(path)
    if len(signals) > 1 and channel is None:
        raise InputError(f"{path}: has {len(signals)} channels; give a file with one")
    index = 0 if len(signals) == 1 or channel is None else channel
    if not 0 <= index < len(signals):
        raise InputError(f"{path}: there is no channel {index}; the file has 0 to {len(signals) - 1}")
    if rate == sample_rate:
        return signals[index], []
    try:
        converted = resample(np.asarray(signals[index : index + 1], dtype=np.float64), rate, sample_rate)[0]
    except (RuntimeError, ValueError) as error:
        raise FileError(f"{path}: cannot be resampled from {rate} to {sample_rate} Hz ({error}); convert it") from None
    return converted, [f"{path}: resampled from {rate} to {sample_rate} Hz"]


def references_of_scene(scene: Scene, kind: str) -> tuple[Signals, list[str]]:
    """The talkers' references of one kind, (talkers, samples) at the recording's rate and length, and notes."""
    rows, notes = [], []
    for talker in scene.talkers:
        path = talker.references[kind]
        signal, said = read_signal(path, scene.sample_rate, channel=scene.array.reference_channel)
        signal = _excerpt(signal, scene)
        fitted, more = fit(signal, scene.recording.samples, scene.sample_rate, str(path))
        rows.append(fitted)
        notes += said + more
    return stacked(rows), notes


def _excerpt(signal: Signals, scene: Scene) -> Signals:
    """A signal that is as long as the recording's files, cut as the scene cuts the recording."""
    recording = scene.recording
    if isinstance(recording, Samples):
        return signal
    whole = Recording.open(recording.files).samples
    if recording.samples < whole and abs(signal.size - whole) <= UNNOTICED_S * scene.sample_rate:
        return signal[recording.start : recording.stop]
    return signal


def recording_of_scene(scene: Scene) -> tuple[Signals, Signals | None, list[str]]:
    """The reference microphone (samples,), all of them (channels, samples) unless too long, and notes."""
    reference = scene.array.reference_channel
    if scene.recording.duration_s <= ALL_MICROPHONES_S:
        microphones = scene.recording.read()
        return microphones[reference], microphones, []
    one = np.concatenate([chunk[reference] for chunk in scene.recording.chunks()])
    return one, None, [NOT_LOOKED_FOR]


def recording_of_file(path: Path, sample_rate: int, samples: int, channel: int) -> tuple[Signals, Signals, list[str]]:
    """The reference microphone (samples,), all of them (channels, samples), that one only if too long, and notes.

    Raises FileError or InputError naming the file.
    """
    recording = Recording.open([path])
    if not 0 <= channel < len(recording.channels):
        raise InputError(f"{path}: there is no channel {channel}; it has 0 to {len(recording.channels) - 1}")
    every = recording.duration_s <= ALL_MICROPHONES_S
    read = [read_signal(path, sample_rate, channel=c) for c in (recording.channels if every else [channel])]
    notes = [*read[0][1]]
    signals, said = fit(stacked([signal for signal, _ in read]), samples, sample_rate, str(path))
    if not every and len(recording.channels) > 1:
        said.append(NOT_LOOKED_FOR)
    return signals[channel if every else 0], signals, notes + said


def estimates_of_scene(scene: Scene, folder: Path) -> Estimates:
    """The talker signals in a folder that `solve` wrote, or in any folder of audio files.

    `solution.json`, where there is one, says which file is whose; else the files' stems do, as file names are made of
    talkers' names. Raises FileError or InputError naming the file.
    """
    if not folder.is_dir():
        raise FileError(f"{folder}: no such folder; name the folder that holds the talker signals")
    record = folder / "solution.json"
    files = _files_of_solution(record) if record.exists() else _files_by_stem(scene, folder)
    rows, notes = [], []
    for path in files.values():
        signal, said = read_signal(path, scene.sample_rate)
        fitted, more = fit(signal, scene.recording.samples, scene.sample_rate, str(path))
        rows.append(fitted)
        notes += said + more
    return Estimates(tuple(files), stacked(rows), tuple(notes))


def stacked(rows: list[Signals]) -> Signals:
    """Signals of one length as one array (rows, samples); `rows` is emptied on the way, so that none is held twice."""
    together = np.empty((len(rows), rows[0].size), dtype=np.result_type(*rows))
    for k in reversed(range(len(rows))):
        together[k] = rows.pop()
    return together


def _files_of_solution(record: Path) -> dict[str, Path]:
    try:
        tree = json.loads(record.read_text(encoding="utf-8"))
        files = {str(talker["name"]): talker["file"] for talker in tree["talkers"]}
    except (UnicodeDecodeError, json.JSONDecodeError, KeyError, TypeError):
        raise FileError(
            f"{record}: does not say which file is whose (`talkers`, `name`, `file`); solve again"
        ) from None
    for name, file in files.items():
        if not isinstance(file, str):
            raise InputError(f"{record}: talker {name!r} has no file; solve with an output folder")
    if not files:
        raise InputError(f"{record}: lists no talkers; solve again")
    return {name: record.parent / file for name, file in files.items()}


def _files_by_stem(scene: Scene, folder: Path) -> dict[str, Path]:
    found = sorted(path for path in folder.iterdir() if path.suffix.lower() in AUDIO_SUFFIXES and path.is_file())
    if not found:
        raise FileError(f"{folder}: holds no audio files; name the folder that holds the talker signals")
    names = [talker.name for talker in scene.talkers]
    by_stem = {stem.lower(): name for stem, name in zip(safe_names(names), names, strict=True)}
    return {by_stem.get(path.stem.lower(), path.stem): path for path in found}
