"""The scene: a recording with its array and its talkers, read from one TOML file."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal

import msgspec
import numpy as np
from numpy.typing import ArrayLike

from unmix.array import Array, ArrayFile
from unmix.audio import Recording, Samples
from unmix.errors import FileError, InputError
from unmix.files import read_toml, write_toml
from unmix.rttm import read_rttm
from unmix.scene_file import ArrayTable, RecordingTable, SceneFile, Stretches, TalkerTable
from unmix.track import Orientation, Track

__all__ = ["REFERENCE_KINDS", "Scene", "Talker"]

ReferenceKind = Literal["early", "image", "dry"]
REFERENCE_KINDS: tuple[ReferenceKind, ...] = ("early", "image", "dry")
"""Kinds of reference, the preferred one first."""


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

    @classmethod
    def at(
        cls, name: str, azimuth_deg: float, *, elevation_deg: float = 0.0, distance_m: float | None = None
    ) -> Talker:
        """A talker at rest at a bearing in degrees; without `distance_m` far away (plane wave)."""
        return cls(name, float(np.radians(azimuth_deg)), float(np.radians(elevation_deg)), distance_m)

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
        """A scene from samples in memory: recording (channels, samples), full scale 1.0.

        Raises InputError when the shapes disagree, the samples are integers or not finite, or two talkers share a name.
        """
        samples = Samples(np.asarray(recording), sample_rate)
        if len(samples.signals) != array.channels:
            raise InputError(
                f"recording: {len(samples.signals)} channels for an array of {array.channels} microphones; "
                "give (channels, samples)"
            )
        names = [talker.name for talker in talkers]
        if len(set(names)) < len(names):
            raise InputError(f"talkers: two are called {max(names, key=names.count)!r}; rename one")
        return cls(title, samples, array, tuple(talkers), temperature_c=temperature_c)

    @classmethod
    def load(cls, path: str | Path) -> Scene:
        """Read a scene file. Every error names file, key and remedy.

        Raises FileError for a missing or damaged file, InputError for wrong content.
        """
        path = Path(path)
        if path.is_dir():
            raise FileError(f"{path}: is a folder; name the scene file in it (TOML)")
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
    return replace(Array.from_file(content, where=f"{path}: [array]"), responses=array.responses)


def _stretches(given: Stretches | None, recording: Recording, path: Path, key: str) -> Stretches:
    for start, stop in given or []:
        if not 0.0 <= start < stop:
            raise InputError(f"{path}: key `{key}`: [{start:g}, {stop:g}] is no stretch of time; give [start, stop]")
        if start >= recording.duration_s:
            raise InputError(f"{path}: key `{key}`: {start:g} s lies beyond the {recording.duration_s:g} s recording")
    return list(given or [])


def _talkers(content: SceneFile, path: Path) -> tuple[Talker, ...]:
    talkers: list[Talker] = []
    activity = None if content.activity is None else _read_activity(path, content)
    for index, table in enumerate(content.talker):
        name = table.name if table.name is not None else f"talker-{index + 1}"
        key = f"talker[{index}]"
        if not name.strip():
            raise InputError(f"{path}: key `{key}.name` is empty; give a name or leave it out")
        if name in [t.name for t in talkers]:
            raise InputError(f"{path}: key `{key}.name`: two talkers are called {name!r}; rename one")
        talkers.append(_talker(table, name, key, path, activity))
    return tuple(talkers)


def _talker(table: TalkerTable, name: str, key: str, path: Path, activity: dict[str, Stretches] | None) -> Talker:
    _check_bearing(table, key, path)
    return Talker(
        name=name,
        azimuth=None if table.azimuth_deg is None else float(np.radians(table.azimuth_deg)),
        elevation=float(np.radians(table.elevation_deg or 0.0)),
        distance_m=table.distance_m,
        track=Track.load(path.parent / table.track) if table.track else None,
        active_s=_active(table, name, key, path, activity),
        references=_references(table, key, path),
    )


def _check_bearing(table: TalkerTable, key: str, path: Path) -> None:
    for field_name in ("azimuth_deg", "elevation_deg", "distance_m"):
        if getattr(table, field_name) is None:
            continue
        if table.track is not None:
            raise InputError(f"{path}: key `{key}`: both `track` and `{field_name}` are given; keep one")
        _finite(getattr(table, field_name), path, f"{key}.{field_name}")
    if table.azimuth_deg is not None and abs(table.azimuth_deg) > 360.0:
        raise InputError(f"{path}: key `{key}.azimuth_deg`: {table.azimuth_deg:g}; give degrees within +-360")
    if table.elevation_deg is not None and abs(table.elevation_deg) > 90.0:
        raise InputError(f"{path}: key `{key}.elevation_deg`: {table.elevation_deg:g}; give degrees within +-90")
    if table.distance_m is not None and table.distance_m <= 0.0:
        raise InputError(f"{path}: key `{key}.distance_m`: {table.distance_m:g}; give metres above zero")


def _references(table: TalkerTable, key: str, path: Path) -> dict[str, Path]:
    if table.reference is not None and table.references is not None:
        raise InputError(f"{path}: key `{key}`: both `reference` and `references` are given; keep one")
    given: dict[str, Any] = msgspec.structs.asdict(table.references) if table.references else {}
    given["plain"] = table.reference
    references = {kind: path.parent / file for kind, file in given.items() if file is not None}
    for kind, file in references.items():
        if not file.exists():
            raise FileError(f"{path}: key `{key}`: {kind} reference {file} does not exist; correct the path")
    return references


def _read_activity(path: Path, content: SceneFile) -> dict[str, Stretches]:
    """Stretches by talker from the activity file; a name in it that no talker bears is an error."""
    file = path.parent / str(content.activity)
    spoken = read_rttm(file)
    names = {(t.name or f"talker-{i + 1}").replace(" ", "_") for i, t in enumerate(content.talker)}
    strange = sorted(set(spoken) - names)
    if strange and names:
        raise InputError(f"{file}: speaks of {strange[0]!r}, whom {path} does not name; make the names agree")
    return spoken


def _active(
    table: TalkerTable, name: str, key: str, path: Path, activity: dict[str, Stretches] | None
) -> Stretches | None:
    if table.active_s is None:
        return None if activity is None else activity.get(name.replace(" ", "_"), [])
    if activity is not None:
        raise InputError(f"{path}: key `{key}.active_s`: `activity` is given at the top; keep one")
    for start, stop in table.active_s:
        if not 0.0 <= start < stop:
            raise InputError(f"{path}: key `{key}.active_s`: [{start:g}, {stop:g}] is no stretch; give [start, stop]")
    return list(table.active_s)
