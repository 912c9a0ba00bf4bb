"""A variant: one complete choice of settings, as a named preset or a TOML file."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Literal

import msgspec
from msgspec import Meta

from unmix.errors import FileError, InputError
from unmix.explain import FieldInfo, explain_fields
from unmix.files import read_toml
from unmix.settings import LowLatencySettings, ModelSettings, RoomSettings, SolverSettings, TransformSettings

__all__ = ["DEFAULT", "PRESETS", "Variant", "describe_fields", "load_variant"]


class Variant(msgspec.Struct, forbid_unknown_fields=True, kw_only=True, frozen=True):
    """One complete choice of settings."""

    name: Annotated[str, Meta(description="name in tables and reports")] = ""
    summary: Annotated[str, Meta(description="one line on what it is for")] = ""
    base: Annotated[str | None, Meta(description="preset that the file starts from (default: full)")] = None
    separator: Annotated[
        Literal["model", "reference-mic", "delay-and-sum", "minimum-variance", "linear-constraint"],
        Meta(description="the model, or a baseline to compare with"),
    ] = "model"
    model: ModelSettings = ModelSettings()
    solver: SolverSettings = SolverSettings()
    room: Annotated[RoomSettings | None, Meta(description="the room stage; left out: the model alone")] = None

    def to_dict(self) -> dict[str, Any]:
        """The variant as plain values, the form in which it stands in results."""
        tree: dict[str, Any] = msgspec.to_builtins(self)
        return tree


PRESETS: dict[str, Variant] = {
    v.name: v
    for v in (
        Variant(
            name="reference-mic",
            separator="reference-mic",
            summary="the unprocessed reference microphone, once per talker",
        ),
        Variant(
            name="delay-and-sum",
            separator="delay-and-sum",
            summary="microphones aligned to each talker and averaged",
        ),
        Variant(
            name="minimum-variance",
            separator="minimum-variance",
            summary="each talker kept, the diffuse field minimised",
        ),
        Variant(
            name="linear-constraint",
            separator="linear-constraint",
            summary="each talker kept, the others cancelled, the diffuse field minimised",
        ),
        Variant(name="model", summary="the delay model alone: for recordings without reflections, or outdoors"),
        Variant(
            name="dereverb",
            summary="the model on a recording whose late reverberation has been predicted and subtracted",
            room=RoomSettings(refinement=None, post=None),
        ),
        Variant(
            name="refined",
            summary="late reverberation subtracted, the model's separating matrix refined on the recording itself",
            room=RoomSettings(post=None),
        ),
        Variant(
            name="full",
            summary="refined, then a filter driven by who speaks when, and each talker's early sound restored",
            room=RoomSettings(),
        ),
        Variant(
            name="low-latency",
            summary="separating matrix learned on the way, 16 ms late: no dereverberation, no post filter, no judging",
            room=RoomSettings(
                transform=TransformSettings(overlap=2),
                prediction=None,
                learned=None,
                post=None,
                judge=False,
                low_latency=LowLatencySettings(),
            ),
        ),
    )
}
"""Variants by name; the last ones with the room stage."""


def load_variant(variant: str | Path | Variant) -> Variant:
    """A preset by name, a TOML file, or a variant as it is.

    A file states only what differs from its `base` preset. Raises InputError for an unknown name or field (with the
    nearest known one), FileError for a missing file.
    """
    if isinstance(variant, Variant):
        return variant
    name = str(variant)
    if name in PRESETS:
        return PRESETS[name]
    path = Path(variant)
    if path.suffix != ".toml" and not path.exists():
        import difflib

        near = difflib.get_close_matches(name, PRESETS, n=1)
        hint = f"did you mean {near[0]!r}?" if near else f"presets: {', '.join(PRESETS)}"
        raise InputError(f"no variant {name!r}; {hint} A variant file ends in .toml")
    return _from_file(path)


def _from_file(path: Path) -> Variant:
    import tomllib

    read_toml(path, Variant)  # names what is wrong, with the file
    try:
        tree = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror})") from None
    base = tree.get("base", DEFAULT)
    if base not in PRESETS:
        raise InputError(f"{path}: key `base`: no preset {base!r}; presets: {', '.join(PRESETS)}")
    merged = _merge(PRESETS[base].to_dict(), {"name": path.stem, "summary": "", **tree})
    return msgspec.convert(merged, Variant)


def _merge(below: dict[str, Any], above: dict[str, Any]) -> dict[str, Any]:
    merged = dict(below)
    for key, value in above.items():
        under = merged.get(key)
        merged[key] = _merge(under, value) if isinstance(under, dict) and isinstance(value, dict) else value
    return merged


DEFAULT = "full"
"""Preset used when none is named."""


def describe_fields() -> list[FieldInfo]:
    """Every field of a variant: key, type, unit, range, default, meaning."""
    return explain_fields(Variant)
