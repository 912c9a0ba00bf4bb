"""What `locate` hands over: who is where, when, and how sure that is."""

from __future__ import annotations

import html
import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
from numpy.typing import NDArray

from unmix.bearings.count import TalkerCount
from unmix.errors import InputError
from unmix.files import refuse_to_replace, safe_names
from unmix.scene import Scene, Talker
from unmix.scene_file import SceneFile, TalkerTable
from unmix.track import Track

__all__ = ["Located", "LocatedTalker", "ScoreMap"]

Floats = NDArray[np.float64]
Stretches = list[tuple[float, float]]


@dataclass(frozen=True)
class LocatedTalker:
    """One talker found. Angles in radians, in the world's frame when the array's orientation is known.

    azimuth, elevation  of a moving talker: where they were in the middle of their time
    candidates          other bearings (azimuth, elevation) the array cannot tell from this one
    track               bearing over time; two equal points for a talker at rest
    active_s            stretches (start, stop) in seconds in which the talker speaks
    share               of the evidence that is this talker's, 0 to 1
    doubtful            whether the talker was asked for without being plain in the recording
    """

    name: str
    azimuth: float
    elevation: float
    azimuth_std: float
    elevation_std: float
    candidates: tuple[tuple[float, float], ...]
    track: Track
    moving: bool
    active_s: Stretches
    share: float
    distance_m: float | None = None
    doubtful: bool = False


@dataclass(frozen=True)
class ScoreMap:
    """Score of directions, for pictures: largest weight along each azimuth; (points,) radians and 0 to 1."""

    azimuth: Floats
    score: Floats


@dataclass(frozen=True)
class Located:
    """Talkers found in a recording, in the order of the scene, else by azimuth.

    frame           "array", or "world" when the array's orientation was given
    ambiguity       what the array cannot tell apart, in words; None when nothing
    count           how many talkers, and what else is possible
    detections      (n, 2) time in seconds and azimuth in radians of single detections, for pictures
    clock_offset_s  added to recording time to get the orientation's time; None without orientation
    """

    talkers: tuple[LocatedTalker, ...]
    count: TalkerCount
    method: str
    frame: str
    ambiguity: str | None
    warnings: tuple[str, ...]
    duration_s: float
    score: ScoreMap
    detections: Floats
    clock_offset_s: float | None = None
    wall_time_s: float = 0.0
    scene: Scene | None = field(default=None, repr=False)
    details: dict[str, Any] = field(default_factory=dict, repr=False)

    @property
    def names(self) -> tuple[str, ...]:
        """Talker names in order."""
        return tuple(t.name for t in self.talkers)

    @property
    def activity(self) -> dict[str, Stretches]:
        """Stretches of speech by talker, as `unmix.rttm.write_rttm` takes them."""
        return {t.name: list(t.active_s) for t in self.talkers}

    def to_dict(self) -> dict[str, Any]:
        """Plain values: what `unmix locate --json` prints."""
        return {
            "talkers": [_talker_dict(t) for t in self.talkers],
            "count": {
                "estimated": self.count.estimated,
                "lowest": self.count.lowest,
                "highest": self.count.highest,
                "used": self.count.used,
                "reason": self.count.reason,
            },
            "frame": self.frame,
            "method": self.method,
            "ambiguity": self.ambiguity,
            "clock_offset_s": None if self.clock_offset_s is None else round(self.clock_offset_s, 4),
            "duration_s": self.duration_s,
            "wall_time_s": round(self.wall_time_s, 3),
            "warnings": list(self.warnings),
            **self.details,
        }

    def scene_with_bearings(self) -> Scene:
        """The scene with the bearings found; talkers on the move carry their track, those not found are as they were.

        Its `content` can be written as a scene file beside the original one; `save` also writes elsewhere, with tracks.
        """
        if self.scene is None:
            raise InputError("these talkers were not located from a scene; there is none to fill in")
        talkers = tuple(_in_order(self.scene.talkers, {t.name: t for t in self.talkers}))
        content = None if self.scene.content is None else self._content(self.scene.content, {})
        offset = self.clock_offset_s if self.clock_offset_s is not None else self.scene.clock_offset_s
        return replace(self.scene, talkers=talkers, content=content, clock_offset_s=offset)

    def save(self, path: str | Path, *, overwrite: bool = False) -> list[Path]:
        """Write the scene with bearings filled in, and a track file for each talker on the move.

        Paths in the scene are kept valid when it is written to another folder. Returns the files written; raises
        FileError when one exists and ``overwrite`` is not given.
        """
        path = Path(path)
        if self.scene is None or self.scene.content is None or self.scene.path is None:
            raise InputError("these talkers were not located from a scene file; there is none to fill in")

        stems = dict(zip(self.names, safe_names(self.names), strict=True))
        tracks = {t.name: f"{path.stem}-{stems[t.name]}.csv" for t in self.talkers if t.moving}
        content = _moved(self._content(self.scene.content, tracks), self.scene.path.parent, path.parent, set(tracks))
        files = [path.parent / name for name in tracks.values()]
        for file in (path, *files):
            refuse_to_replace(file, overwrite=overwrite)
        for talker, file in zip((t for t in self.talkers if t.moving), files, strict=True):
            talker.track.save(file, overwrite=overwrite)
        replace(self.scene, content=content).save(path, overwrite=overwrite)
        return [path, *files]

    def _content(self, content: SceneFile, tracks: dict[str, str]) -> SceneFile:
        found = {t.name: t for t in self.talkers}
        named = {(t.name or f"talker-{i + 1}"): t for i, t in enumerate(content.talker)}
        tables = [
            t if name not in found else _filled_table(t, found[name], tracks.get(name)) for name, t in named.items()
        ]
        tables += [_filled_table(None, t, tracks.get(t.name)) for t in self.talkers if t.name not in named]
        orientation = content.orientation
        if orientation is not None and self.clock_offset_s is not None:
            orientation = msgspec.structs.replace(orientation, clock_offset_s=round(self.clock_offset_s, 4))
        return msgspec.structs.replace(content, talker=tables, orientation=orientation)

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>{html.escape(t.name)}</td><td>{np.degrees(t.azimuth):.1f} ± {np.degrees(t.azimuth_std):.1f}</td>"
            f"<td>{np.degrees(t.elevation):.1f} ± {np.degrees(t.elevation_std):.1f}</td>"
            f"<td>{'moving' if t.moving else 'at rest'}</td><td>{sum(b - a for a, b in t.active_s):.1f}</td></tr>"
            for t in self.talkers
        )
        notes = "".join(f"<p>{html.escape(line)}</p>" for line in self.warnings)
        head = "<tr><th>talker</th><th>azimuth, deg</th><th>elevation, deg</th><th></th><th>active, s</th></tr>"
        return f"<table>{head}{rows}</table>{notes}"


def _talker_dict(t: LocatedTalker) -> dict[str, Any]:
    degrees = {
        "azimuth_deg": t.azimuth,
        "elevation_deg": t.elevation,
        "azimuth_std_deg": t.azimuth_std,
        "elevation_std_deg": t.elevation_std,
    }
    track = None
    if t.moving:
        track = [
            {"time_s": round(float(s), 3), "azimuth_deg": _deg(a), "elevation_deg": _deg(e)}
            for s, a, e in zip(t.track.time_s, t.track.azimuth, t.track.elevation, strict=True)
        ]
    return {
        "name": t.name,
        **{name: _deg(value) for name, value in degrees.items()},
        "candidates": [{"azimuth_deg": _deg(a), "elevation_deg": _deg(e)} for a, e in t.candidates],
        "distance_m": t.distance_m,
        "moving": t.moving,
        "track": track,
        "active_s": [[round(a, 3), round(b, 3)] for a, b in t.active_s],
        "share": round(t.share, 4),
        "doubtful": t.doubtful,
    }


def _deg(angle: float) -> float:
    return round(float(np.degrees(angle)), 3)


def _in_order(known: Sequence[Talker], found: dict[str, LocatedTalker]) -> Iterator[Talker]:
    """The scene's talkers, then those it did not list."""
    names = {t.name for t in known}
    for talker in known:
        yield talker if talker.name not in found else _filled(talker, found[talker.name])
    for name, talker_found in found.items():
        if name not in names:
            yield _filled(Talker(name=name), talker_found)


def _filled(base: Talker, found: LocatedTalker) -> Talker:
    if base.located:
        return base
    if found.moving:
        return replace(base, track=found.track)
    return replace(base, azimuth=found.azimuth, elevation=found.elevation)


def _filled_table(known: TalkerTable | None, found: LocatedTalker, track: str | None) -> TalkerTable:
    table = known if known is not None else TalkerTable()
    if table.azimuth_deg is not None or table.track is not None:
        return table
    if track is not None:
        return msgspec.structs.replace(table, name=found.name, track=track)
    return msgspec.structs.replace(
        table, name=found.name, azimuth_deg=_deg(found.azimuth), elevation_deg=_deg(found.elevation)
    )


def _moved(content: SceneFile, old: Path, new: Path, tracked: set[str]) -> SceneFile:
    """The content with its relative paths made valid from another folder; track files just written stay beside it."""
    if old.resolve() == new.resolve():
        return content

    def there(name: str | None) -> str | None:
        return None if name is None else os.path.relpath(old / name, new)

    def talker(table: TalkerTable) -> TalkerTable:
        references = table.references
        if references is not None:
            moved = {kind: there(file) for kind, file in msgspec.structs.asdict(references).items()}
            references = msgspec.structs.replace(references, **moved)
        track = table.track if table.name in tracked else there(table.track)
        return msgspec.structs.replace(table, track=track, reference=there(table.reference), references=references)

    recording, orientation = content.recording, content.orientation
    files = None if recording.files is None else [str(there(f)) for f in recording.files]
    return msgspec.structs.replace(
        content,
        activity=there(content.activity),
        recording=msgspec.structs.replace(recording, file=there(recording.file), files=files),
        array=msgspec.structs.replace(content.array, file=there(content.array.file)),
        talker=[talker(t) for t in content.talker],
        orientation=orientation and msgspec.structs.replace(orientation, file=str(there(orientation.file))),
    )
