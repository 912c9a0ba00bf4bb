"""The stretch of a scene that its report shows and plays: every signal, cut alike, aligned, and level-matched."""

from __future__ import annotations

import base64
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.audio import Recording, Samples, resample
from unmix.errors import UnmixError
from unmix.metrics.grades import Grades
from unmix.report.levels import STEP_S, frame_powers, level_db, spoken, telling_stretch
from unmix.report.material import SceneMaterial
from unmix.report.sound import Sound, encode, matched_levels, most_seconds
from unmix.report.spectrogram import palette, spectrogram_db, spectrogram_png

__all__ = ["MICROPHONE", "Heard", "SceneSound", "picture_of", "scene_sound"]

Floats = NDArray[np.float64]

MICROPHONE, OUTPUT, REFERENCE = "microphone", "after", "reference"
LONGEST_S = 60.0
"""Nobody listens longer to a report, and pictures of more show nothing."""


@dataclass(frozen=True)
class Heard:
    """One signal of the page. `talker` is empty for the microphone; `kind` is microphone, after or reference."""

    id: str
    talker: str
    kind: str
    signal: Floats = field(repr=False)


@dataclass(frozen=True)
class SceneSound:
    """What can be seen and heard of a scene.

    heard      signals of the stretch, all as long as each other
    start_s    where in the recording the stretch begins
    whole_s    how long the recording is
    powers     frame powers over the whole recording of each talker's best signal, by name: (frames,)
    powers_of  what these are: "reference" or "after"
    notes      files that could not be used
    """

    heard: tuple[Heard, ...]
    sample_rate: int
    start_s: float
    seconds: float
    whole_s: float
    powers: dict[str, Floats] = field(repr=False)
    powers_of: str
    notes: tuple[str, ...] = ()

    def gains(self) -> list[float]:
        """Gains that make all signals equally loud."""
        return matched_levels([h.signal for h in self.heard], self.sample_rate)

    def encoded(self) -> list[Sound]:
        """Every signal as the page carries it."""
        return [encode(h.signal, self.sample_rate, g) for h, g in zip(self.heard, self.gains(), strict=True)]


def scene_sound(material: SceneMaterial, *, megabytes: float) -> SceneSound | None:
    """The telling stretch of every signal there is, as long as `megabytes` of sound allow; None without signals."""
    notes: list[str] = []
    sources = _sources(material, notes)
    if not sources:
        return None
    rate = sources[0][3].sample_rate
    if material.recording is not None:
        rate = material.recording.sample_rate
    whole_s = max(source.duration_s for _, _, kind, source, _ in sources if kind != REFERENCE or len(sources) == 1)
    powers, powers_of = _powers(sources, whole_s)
    length_s = min(LONGEST_S, whole_s, max(2.0, most_seconds(megabytes, len(sources), rate)))
    start_s, stop_s = 0.0, whole_s
    if length_s < whole_s:
        start_s, _ = telling_stretch(np.stack(list(powers.values())), length_s)
        stop_s = min(start_s + length_s, whole_s)
    heard = tuple(
        Heard(id_, talker, kind, _stretch(source, channel, start_s, stop_s, rate))
        for (id_, talker, kind, source, channel) in _shifted(sources, material.grades)
    )
    shortest = min(len(h.signal) for h in heard)
    heard = tuple(replace(h, signal=h.signal[:shortest]) for h in heard)
    return SceneSound(heard, rate, start_s, shortest / rate, whole_s, powers, powers_of, tuple(notes))


Source = tuple[str, str, str, Any, Any]
"""Id, talker, kind, recording, and the channel; after `_shifted` the channel with the delay in seconds."""


def _sources(material: SceneMaterial, notes: list[str]) -> list[Source]:
    """Everything that can be heard: microphone first, then each talker's output and reference."""
    found: list[Source] = []
    if material.recording is not None:
        found.append(("mic", "", MICROPHONE, material.recording, material.reference_channel))
    for k, name in enumerate(material.names):
        for kind, files in ((OUTPUT, material.outputs), (REFERENCE, material.references)):
            if name not in files:
                continue
            try:
                recording = Recording.open([files[name]])
            except UnmixError as error:
                notes.append(f"not in this report: {error}")
                continue
            if kind == REFERENCE:
                recording = _as_the_scene_cuts(recording, material)
            channel = min(material.reference_channel, len(recording.channels) - 1)
            found.append((f"{kind}-{k}", name, kind, recording, channel))
    return found


def _as_the_scene_cuts(reference: Recording, material: SceneMaterial) -> Recording:
    """A reference as long as the recording's files, cut to the excerpt that the scene takes of them."""
    recording = material.recording
    if not isinstance(recording, Recording):
        return reference
    whole = Recording.open(recording.files)
    same = abs(reference.duration_s - whole.duration_s) < 0.002
    if not same or recording.samples == whole.samples:
        return reference
    share = reference.sample_rate / recording.sample_rate
    return replace(reference, start=round(recording.start * share), stop=round(recording.stop * share))


def _powers(sources: list[Source], whole_s: float) -> tuple[dict[str, Floats], str]:
    """Frame powers of each talker's reference where all have one, else of their outputs, else of the microphone."""
    talkers = list(dict.fromkeys(talker for _, talker, *_ in sources if talker))
    for wanted in (REFERENCE, OUTPUT):
        of = {talker: (source, c) for _, talker, kind, source, c in sources if kind == wanted}
        if talkers and all(t in of for t in talkers):
            break
    else:
        wanted, of = MICROPHONE, {"": (sources[0][3], sources[0][4])}
        talkers = [""]
    frames = max(1, int(whole_s / STEP_S))
    powers = {}
    for talker in talkers:
        found = frame_powers(*of[talker])[:frames]
        powers[talker] = np.pad(found, (0, frames - len(found)))
    return powers, wanted


def _shifted(sources: list[Source], grades: Grades | None) -> list[Source]:
    """References come as much later as grading found the talker's signal to be behind them."""
    late = {t.name: t.offset_s for t in grades.talkers} if grades is not None else {}
    return [
        (id_, talker, kind, source, (channel, (late.get(talker) or 0.0) if kind == REFERENCE else 0.0))
        for id_, talker, kind, source, channel in sources
    ]


def _stretch(source: Recording | Samples, place: tuple[int, float], start_s: float, stop_s: float, rate: int) -> Floats:
    """One channel from `start_s` to `stop_s`, delayed, at the page's rate; silence where there is nothing."""
    channel, delay_s = place
    own = source.sample_rate
    first, count = round((start_s - delay_s) * own), round((stop_s - start_s) * own)
    a, b = min(max(first, 0), source.samples), min(max(first + count, 0), source.samples)
    if isinstance(source, Recording):
        part = replace(source, start=source.start + a, stop=source.start + b)
        cut = part.read()[channel] if b > a else np.empty(0)
    else:
        cut = source.signals[channel, a:b]
    signal = np.zeros(count)
    signal[max(0, a - first) : max(0, a - first) + len(cut)] = cut
    return np.asarray(resample(signal[None], own, rate)[0])


def picture_of(sound: SceneSound) -> tuple[list[dict[str, str]], str]:
    """Spectrograms of all signals on one scale, each at equal loudness, and the scale's colours for the style sheet."""
    levels = [spectrogram_db(g * h.signal, sound.sample_rate) for g, h in zip(sound.gains(), sound.heard, strict=True)]
    top = max(float(np.percentile(level, 99.9)) for level in levels)
    colours = palette()
    pictures = [
        {"id": h.id, "png": base64.b64encode(spectrogram_png(level, top, colours)).decode("ascii")}
        for h, level in zip(sound.heard, levels, strict=True)
    ]
    return pictures, ", ".join(f"rgb({r} {g} {b})" for r, g, b in colours[:: len(colours) // 8])


def timeline_rows(sound: SceneSound, given: dict[str, list[tuple[float, float]]]) -> list[dict[str, Any]]:
    """Level and speech of each talker over the whole recording, as paths of 0 to `width` by 100.

    given  stretches of speech that the scene states; found from the levels for the others
    """
    rows = []
    width = 1000
    for k, (name, powers) in enumerate(sound.powers.items()):
        stretches = given.get(name) or spoken(powers)
        parts = np.array_split(powers, min(len(powers), 500))
        levels = level_db(np.array([part.max() for part in parts]))
        heights = np.clip((levels - levels.max()) / 60.0 + 1.0, 0.0, 1.0) * 88.0
        x = np.linspace(0.0, width, len(heights))
        line = " ".join(f"{a:.1f},{90.0 - h:.1f}" for a, h in zip(x, heights, strict=True))
        total = sum(b - a for a, b in stretches)
        rows.append(
            {
                "name": name or "microphone",
                "width": width,
                "path": f"M0,90 L{line} L{width},90 Z",
                "spoken": [(a / sound.whole_s * width, min(b / sound.whole_s, 1.0) * width) for a, b in stretches],
                "colour": f"--s{k % 6}",
                "from_s": -sound.start_s,
                "to_s": sound.whole_s - sound.start_s,
                "label": f"Level over time; speech for {total:.1f} s of {sound.whole_s:.1f} s in {len(stretches)} "
                f"{'stretch' if len(stretches) == 1 else 'stretches'}",
            }
        )
    return rows
