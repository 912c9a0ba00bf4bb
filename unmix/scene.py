"""The scene: a recording with its array and its talkers, read from one TOML file."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import msgspec
import numpy as np
from numpy.typing import ArrayLike

from unmix.array import Array, ArrayFile
from unmix.audio import Recording, Samples
from unmix.errors import FileError, InputError
from unmix.files import read_toml, write_toml
from unmix.track import Orientation, Track

__all__ = ["REFERENCE_KINDS", "Scene", "SceneFile", "Talker"]

ReferenceKind = Literal["early", "image", "dry"]
REFERENCE_KINDS: tuple[ReferenceKind, ...] = ("early", "image", "dry")
"""Kinds of reference, the preferred one first."""

Stretches = list[tuple[float, float]]


class _Strict(msgspec.Struct, forbid_unknown_fields=True, kw_only=True, omit_defaults=True):
    pass


class RecordingTable(_Strict):
    """The `[recording]` table."""

    file: str | None = None
    files: list[str] | None = None
    channels: list[int] | None = None
    start_s: float = 0.0
    stop_s: float | None = None
    noise_only_s: Stretches | None = None


class ArrayTable(_Strict):
    """The `[array]` table: a file, or the content of an array file inline."""

    file: str | None = None
    positions_m: list[list[float]] | None = None
    reference_channel: int | None = None
    title: str = ""
    gain_db: list[float] | None = None
    delay_s: list[float] | None = None
    polarity: list[int] | None = None
    gain_std_db: list[float] | None = None
    delay_std_s: list[float] | None = None
    position_std_m: list[float] | None = None
    full_scale_db_spl: float | None = None
    allow_large: bool = False


class ReferencesTable(_Strict):
    """The `references` of a talker, by kind."""

    dry: str | None = None
    early: str | None = None
    image: str | None = None


class TalkerTable(_Strict):
    """One `[[talker]]` table."""

    name: str | None = None
    azimuth_deg: float | None = None
    elevation_deg: float | None = None
    distance_m: float | None = None
    track: str | None = None
    active_s: Stretches | None = None
    reference: str | None = None
    references: ReferencesTable | None = None


class OrientationTable(_Strict):
    """The `[orientation]` table."""

    file: str
    clock_offset_s: float | Literal["estimate"] = 0.0


class RoomTable(_Strict):
    """The `[room]` table."""

    temperature_c: float = 20.0


class SceneFile(_Strict, kw_only=True):
    """A scene as it stands in a TOML file."""

    title: str = ""
    activity: str | None = None
    recording: RecordingTable
    array: ArrayTable
    talker: list[TalkerTable] = []
    orientation: OrientationTable | None = None
    room: RoomTable | None = None


@dataclass(frozen=True)
class Talker:
    """One person speaking. Angles in radians; None where the scene does not say.

    references  paths by kind; a plain `reference` stands under "plain"
    """

    name: str
    azimuth: float | None = None
    elevation: float = 0.0
    distance_m: float | None = None
    track: Track | None = None
    active_s: Stretches | None = None
    references: dict[str, Path] = field(default_factory=dict)

    @property
    def located(self) -> bool:
        """Whether the scene says where the talker is."""
        return self.azimuth is not None or self.track is not None


@dataclass(frozen=True)
class Scene:
    """A recording with its array and talkers; made by `Scene.load` or from arrays by `unmix.solve`."""

    title: str
    recording: Recording | Samples
    array: Array
    talkers: tuple[Talker, ...] = ()
    noise_only_s: Stretches = field(default_factory=list)
    orientation: Orientation | None = None
    clock_offset_s: float | Literal["estimate"] = 0.0
    temperature_c: float = 20.0
    path: Path | None = None
    content: SceneFile | None = None

    @property
    def sample_rate(self) -> int:
        """Sample rate of the recording in hertz."""
        return self.recording.sample_rate

    @classmethod
    def from_arrays(
        cls,
        recording: ArrayLike,
        array: Array,
        talkers: Sequence[Talker] = (),
        *,
        sample_rate: int,
        title: str = "recording",
        temperature_c: float = 20.0,
    ) -> Scene:
        """A scene from samples in memory: recording (channels, samples). Raises InputError when shapes disagree."""
        samples = Samples(np.asarray(recording, dtype=np.float64), sample_rate)
        if len(samples.signals) != array.channels:
            raise InputError(f"recording has {len(samples.signals)} channels and the array {array.channels} microphones")
        return cls(title, samples, array, tuple(talkers), temperature_c=temperature_c)

    @classmethod
    def load(cls, path: str | Path) -> Scene:
        """Read a scene file. Every error names file, key and remedy.

        Raises FileError for a missing or damaged file, InputError for wrong content.
        """
        path = Path(path)
        content = read_toml(path, SceneFile)
        recording = _recording(content.recording, path)
        array = _array(content.array, path)
        if len(recording.channels) != array.channels:
            raise InputError(
                f"{path}: the recording has {len(recording.channels)} channels and the array {array.channels} "
                "microphones; set `channels` in [recording] or correct `positions_m`"
            )
        orientation = content.orientation
        if orientation is not None and isinstance(orientation.clock_offset_s, float):
            _finite(orientation.clock_offset_s, path, "orientation.clock_offset_s")
        temperature = content.room.temperature_c if content.room else 20.0
        if not -40.0 <= temperature <= 60.0:
            raise InputError(f"{path}: key `room.temperature_c`: {temperature:g} is not a room's; give degrees Celsius")
        return cls(
            title=content.title or path.stem,
            recording=recording,
            array=array,
            talkers=_talkers(content, path),
            noise_only_s=_stretches(content.recording.noise_only_s, recording, path, "recording.noise_only_s"),
            orientation=Orientation.load(path.parent / orientation.file) if orientation else None,
            clock_offset_s=orientation.clock_offset_s if orientation else 0.0,
            temperature_c=temperature,
            path=path,
            content=content,
        )

    def save(self, path: str | Path, *, overwrite: bool = False) -> None:
        """Write `content` as a scene file. Raises FileError when it exists and `overwrite` is not given."""
        if self.content is None:
            raise InputError("this scene was not read from a file; there is nothing to write back")
        write_toml(Path(path), msgspec.to_builtins(self.content), overwrite=overwrite)


def _finite(value: float, path: Path, key: str) -> float:
    if not math.isfinite(value):
        raise InputError(f"{path}: key `{key}`: {value} is not a finite number")
    return value


def _recording(table: RecordingTable, path: Path) -> Recording:
    if (table.file is None) == (table.files is None):
        raise InputError(f"{path}: [recording] needs `file` (one multichannel file) or `files` (one per channel)")
    names = table.files if table.files is not None else [str(table.file)]
    if not names:
        raise InputError(f"{path}: key `recording.files` is empty")
    for key in ("start_s", "stop_s"):
        if getattr(table, key) is not None:
            _finite(getattr(table, key), path, f"recording.{key}")
    return Recording.open(
        [path.parent / name for name in names], channels=table.channels, start_s=table.start_s, stop_s=table.stop_s
    )


def _array(table: ArrayTable, path: Path) -> Array:
    if (table.file is None) == (table.positions_m is None):
        raise InputError(f"{path}: [array] needs `file` or `positions_m`, one of the two")
    inline = {k: v for k, v in msgspec.structs.asdict(table).items() if k != "file" and v is not None}
    if table.file is None:
        return Array.from_file(ArrayFile(**inline), where=f"{path}: [array]")
    extra = set(inline) - {"reference_channel", "title", "allow_large"}
    if extra:
        raise InputError(f"{path}: [array]: `{min(extra)}` belongs into {table.file}, since `file` is given")
    array = Array.load(path.parent / table.file)
    if table.reference_channel is None:
        return array
    content = array.to_file()
    content.reference_channel = table.reference_channel
    return Array.from_file(content, where=f"{path}: [array]")


def _stretches(given: Stretches | None, recording: Recording, path: Path, key: str) -> Stretches:
    for start, stop in given or []:
        if not 0.0 <= start < stop:
            raise InputError(f"{path}: key `{key}`: [{start:g}, {stop:g}] is no stretch of time; give [start, stop]")
        if start >= recording.duration_s:
            raise InputError(f"{path}: key `{key}`: {start:g} s lies beyond the {recording.duration_s:g} s recording")
    return list(given or [])


def _talkers(content: SceneFile, path: Path) -> tuple[Talker, ...]:
    talkers = []
    for index, table in enumerate(content.talker):
        name = table.name if table.name is not None else f"talker-{index + 1}"
        key = f"talker[{index}]"
        if not name.strip():
            raise InputError(f"{path}: key `{key}.name` is empty; give a name or leave it out")
        if name in [t.name for t in talkers]:
            raise InputError(f"{path}: key `{key}.name`: two talkers are called {name!r}; rename one")
        talkers.append(_talker(table, name, key, path, content))
    return tuple(talkers)


def _talker(table: TalkerTable, name: str, key: str, path: Path, content: SceneFile) -> Talker:
    if table.track is not None and table.azimuth_deg is not None:
        raise InputError(f"{path}: key `{key}`: both `track` and `azimuth_deg` are given; keep one")
    for field_name in ("azimuth_deg", "elevation_deg", "distance_m"):
        if getattr(table, field_name) is not None:
            _finite(getattr(table, field_name), path, f"{key}.{field_name}")
    if table.azimuth_deg is not None and abs(table.azimuth_deg) > 360.0:
        raise InputError(f"{path}: key `{key}.azimuth_deg`: {table.azimuth_deg:g}; give degrees within +-360")
    if table.elevation_deg is not None and abs(table.elevation_deg) > 90.0:
        raise InputError(f"{path}: key `{key}.elevation_deg`: {table.elevation_deg:g}; give degrees within +-90")
    if table.distance_m is not None and table.distance_m <= 0.0:
        raise InputError(f"{path}: key `{key}.distance_m`: {table.distance_m:g}; give metres above zero")
    if table.reference is not None and table.references is not None:
        raise InputError(f"{path}: key `{key}`: both `reference` and `references` are given; keep one")
    given: dict[str, Any] = msgspec.structs.asdict(table.references) if table.references else {}
    given["plain"] = table.reference
    references = {kind: path.parent / file for kind, file in given.items() if file is not None}
    for kind, file in references.items():
        if not file.exists():
            raise FileError(f"{path}: key `{key}`: {kind} reference {file} does not exist; correct the path")
    return Talker(
        name=name,
        azimuth=None if table.azimuth_deg is None else float(np.radians(table.azimuth_deg)),
        elevation=float(np.radians(table.elevation_deg or 0.0)),
        distance_m=table.distance_m,
        track=Track.load(path.parent / table.track) if table.track else None,
        active_s=_activity(table, name, key, path, content),
        references=references,
    )


def _activity(table: TalkerTable, name: str, key: str, path: Path, content: SceneFile) -> Stretches | None:
    if table.active_s is not None:
        for start, stop in table.active_s:
            if not 0.0 <= start < stop:
                raise InputError(
                    f"{path}: key `{key}.active_s`: [{start:g}, {stop:g}] is no stretch; give [start, stop]"
                )
        return list(table.active_s)
    if content.activity is None:
        return None
    return read_rttm(path.parent / content.activity).get(name, [])


def read_rttm(path: Path) -> dict[str, Stretches]:
    """Stretches of speech per talker from an RTTM file (NIST Rich Transcription 2009: SPEAKER lines)."""
    try:
        lines = path.read_text(encoding="utf-8").splitlines()
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; check the path") from None
    found: dict[str, Stretches] = {}
    for number, line in enumerate(lines, start=1):
        words = line.split()
        if not words or words[0] != "SPEAKER":
            continue
        try:
            start, duration, name = float(words[3]), float(words[4]), words[7]
        except (IndexError, ValueError):
            raise InputError(f"{path}: line {number}: not an RTTM SPEAKER line: {line!r}") from None
        found.setdefault(name, []).append((start, start + duration))
    return found


def write_rttm(path: Path, activity: dict[str, Stretches], *, file_id: str, overwrite: bool = False) -> None:
    """Write stretches of speech per talker as RTTM SPEAKER lines, ordered by time; spaces in names become `_`."""
    from unmix.files import write_aside

    rows = sorted((a, b, name.replace(" ", "_")) for name, stretches in activity.items() for a, b in stretches)
    with write_aside(path, overwrite=overwrite) as aside:
        aside.write_text(
            "".join(f"SPEAKER {file_id} 1 {a:.3f} {b - a:.3f} <NA> <NA> {n} <NA> <NA>\n" for a, b, n in rows),
            encoding="utf-8",
        )
