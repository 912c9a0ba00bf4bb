"""The scene file: every key that a scene's TOML may hold."""

from __future__ import annotations

from typing import Literal

import msgspec

__all__ = [
    "ArrayTable",
    "OrientationTable",
    "RecordingTable",
    "ReferencesTable",
    "RoomTable",
    "SceneFile",
    "Stretches",
    "TalkerTable",
]

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
