"""A page for blind listening: the variants of a scene under random names, and the key that tells them apart.

Scale and procedure after ITU-R BS.1534-3: an open reference; the variants, the hidden reference and the hidden
unprocessed microphone in random order, all level-matched, to be switched between while they play; a continuous scale
of 0 to 100 in five grades. Or pairs: two at a time, which is better. What a page cannot have is the standard's
low-passed anchors: the unprocessed microphone stands at the lower end.

The page knows signals by random tokens only; the key stays with whoever runs the test.
"""

from __future__ import annotations

import secrets
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError
from unmix.files import refuse_to_replace
from unmix.jobs.listening import KEY_NAME, Key, KeyTrial, write_key
from unmix.metrics.listening import MICROPHONE, REFERENCE
from unmix.report.material import SceneMaterial
from unmix.report.page import PageFile, render_page, write_page
from unmix.report.scene_sound import OUTPUT, SceneSound, scene_sound
from unmix.report.scene_sound import REFERENCE as REFERENCE_KIND
from unmix.report.sound import BASE64, BYTES_PER_SAMPLE, encode, matched_levels

__all__ = ["LISTENING", "Procedure", "Take", "listening_page", "takes_of", "write_listening_page"]

Floats = NDArray[np.float64]
Procedure = Literal["scale", "pairs"]

LISTENING = "listening.html"
LONGEST_S = 10.0
"""Longer signals than about this are hard to compare (BS.1534-3)."""
MOST_CONDITIONS = 12
"""More than this in one trial is more than people can compare (BS.1534-3)."""


@dataclass(frozen=True)
class Take:
    """One talker of one scene, under every condition: signals of equal length."""

    scene: str
    talker: str
    sample_rate: int
    conditions: dict[str, Floats]


def takes_of(materials: Sequence[tuple[str, SceneMaterial]], *, talkers: Sequence[str] = ()) -> list[Take]:
    """The takes of one scene that was separated in several ways.

    materials  by the name of the variant; all of one scene, with references
    talkers    whom to listen to; everybody by default

    Raises InputError when the scenes differ or a reference is missing.
    """
    first = materials[0][1]
    sounds = []
    for name, material in materials:
        if material.names != first.names or material.title != first.title:
            raise InputError(f"{name}: is of {material.title!r}, not of {first.title!r}; compare variants of one scene")
        sound = scene_sound(material, megabytes=_megabytes(material))
        if sound is None or material.recording is None:
            raise InputError(f"{name}: its recording is out of reach; pass --scene")
        sounds.append((name, sound))
    chosen = list(talkers) or list(first.names)
    unknown = [name for name in chosen if name not in first.names]
    if unknown:
        raise InputError(f"there is no talker {unknown[0]!r}, only {', '.join(first.names)}")
    return [_take(first.title, talker, sounds) for talker in chosen]


def _megabytes(material: SceneMaterial) -> float:
    """Room for as many seconds as a trial has."""
    rate = material.recording.sample_rate if material.recording is not None else 48000
    return LONGEST_S * BASE64 * BYTES_PER_SAMPLE * rate * (1 + 2 * len(material.names)) / 1e6


def _take(scene: str, talker: str, sounds: Sequence[tuple[str, SceneSound]]) -> Take:
    conditions: dict[str, Floats] = {}
    _, first = sounds[0]
    for kind, name in ((REFERENCE_KIND, REFERENCE), (OUTPUT, "")):
        for variant, sound in sounds if kind == OUTPUT else sounds[:1]:
            found = [h.signal for h in sound.heard if h.talker == talker and h.kind == kind]
            if not found:
                what = "reference" if kind == REFERENCE_KIND else "signal"
                raise InputError(f"{scene}: talker {talker!r} has no {what} in {variant}; blind listening needs both")
            conditions[name or variant] = found[0]
    conditions[MICROPHONE] = first.heard[0].signal
    shortest = min(len(signal) for signal in conditions.values())
    return Take(scene, talker, first.sample_rate, {name: s[:shortest] for name, s in conditions.items()})


def write_listening_page(
    takes: Sequence[Take],
    path: Path,
    *,
    procedure: Procedure = "scale",
    title: str = "Listening test",
    seed: int | None = None,
    overwrite: bool = False,
) -> tuple[PageFile, Path]:
    """Write the page and, beside it, the key; returns both.

    seed  draws the tokens; by default they cannot be foreseen

    Raises FileError when one exists and `overwrite` is not given, InputError when there is nothing to compare.
    """
    key_path = path.with_name(KEY_NAME)
    for file in (path, key_path):
        refuse_to_replace(file, overwrite=overwrite)
    text, key = listening_page(takes, procedure=procedure, title=title, seed=seed)
    write_key(key_path, key, overwrite=overwrite)
    return write_page(path, text, overwrite=overwrite), key_path


def listening_page(
    takes: Sequence[Take], *, procedure: Procedure = "scale", title: str = "Listening test", seed: int | None = None
) -> tuple[str, Key]:
    """The page as HTML and its key; parameters as of `write_listening_page`."""
    if not takes:
        raise InputError("there is nothing to listen to")
    _check(takes)
    draw = np.random.default_rng(seed if seed is not None else secrets.randbits(64))
    test = _token(draw)
    trials: list[dict[str, Any]] = []
    key: list[KeyTrial] = []
    sounds: list[dict[str, str]] = []
    for number, take in enumerate(takes, start=1):
        trial, stimuli = _trial(f"trial-{number}", take, draw, sounds)
        trials.append(trial)
        key.append(KeyTrial(trial=trial["trial"], scene=take.scene, talker=take.talker, stimuli=stimuli))
    text = render_page(
        "listening.html",
        ["player.js", "listening.js"],
        kind=f"listening, {procedure}",
        title=title,
        procedure=procedure,
        count=len(takes),
        sounds=sounds,
        described={"test": test, "procedure": procedure, "trials": trials},
    )
    return text, Key(test=test, procedure=procedure, trials=key)


def _check(takes: Sequence[Take]) -> None:
    for take in takes:
        variants = [name for name in take.conditions if name not in (REFERENCE, MICROPHONE)]
        if not variants:
            raise InputError(f"{take.scene}: no variant to judge; separate the scene first")
        if len(take.conditions) > MOST_CONDITIONS:
            raise InputError(
                f"{take.scene}: {len(take.conditions)} signals in one trial are more than people can compare; "
                f"choose at most {MOST_CONDITIONS - 2} variants"
            )


def _trial(
    name: str, take: Take, draw: np.random.Generator, sounds: list[dict[str, str]]
) -> tuple[dict[str, Any], dict[str, str]]:
    """A trial as the page knows it, and its tokens; the sounds are appended in the tokens' order."""
    names = list(take.conditions)
    gains = dict(zip(names, matched_levels(list(take.conditions.values()), take.sample_rate), strict=True))
    tokens = {_token(draw): condition for condition in names}
    open_reference = _token(draw)
    signals = []
    for token, condition in sorted({**tokens, open_reference: REFERENCE}.items()):
        # Fades hide where the stretch was cut out; the peak gives nothing away, as all are stored at the same one.
        coded = encode(_faded(take.conditions[condition], take.sample_rate), take.sample_rate, gains[condition])
        signals.append({"id": token, "matched": coded.matched, "asItWas": coded.matched})
        sounds.append({"id": token, "data": coded.data})
    seconds = len(next(iter(take.conditions.values()))) / take.sample_rate
    trial = {
        "trial": name,
        "open": open_reference,
        "stimuli": sorted(tokens),
        "signals": signals,
        "seconds": seconds,
        "sample_rate": take.sample_rate,
    }
    return trial, tokens


def _token(draw: np.random.Generator) -> str:
    return "s" + draw.bytes(6).hex()


def _faded(signal: Floats, sample_rate: int) -> Floats:
    count = min(round(0.02 * sample_rate), len(signal) // 2)
    ramp = np.linspace(0.0, 1.0, count)
    faded = signal.copy()
    faded[:count] *= ramp
    faded[len(faded) - count :] *= ramp[::-1]
    return faded
