"""Who sits where: a scene file, or an array file with a bearing for each talker."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

if TYPE_CHECKING:
    from unmix.array import Array
    from unmix.scene import Scene, Talker

__all__ = ["bearing_option", "who_and_where"]

Decorated = TypeVar("Decorated", bound=Callable[..., Any])

bearing_option: Callable[[Decorated], Decorated] = click.option(
    "--bearing",
    "bearings",
    multiple=True,
    metavar="AZ[,EL[,M]]",
    help="One talker's azimuth and elevation in degrees and distance in metres; repeat it. Needed with an array file.",
)


def who_and_where(path: Path, bearings: Sequence[str]) -> tuple[Array, Sequence[Talker], Scene | None]:
    """Array and talkers of a scene file, or of an array file and bearings."""
    from unmix.array import Array
    from unmix.errors import InputError
    from unmix.files import read_toml
    from unmix.scene import Scene

    given = [_talker(text, index) for index, text in enumerate(bearings)]
    if path.suffix.lower() == ".sofa" or "recording" not in read_toml(path, dict):
        array = Array.load(path)
        if not given:
            raise InputError(f"{path}: an array file says not where talkers are; give --bearing for each")
        return array, given, None
    scene = Scene.load(path)
    if not given and not (scene.talkers and all(t.located for t in scene.talkers)):
        raise InputError(
            f"{path}: there must be a bearing for each talker; run `unmix locate` first, or give --bearing"
        )
    return scene.array, given or scene.talkers, scene


def _talker(text: str, index: int) -> Talker:
    from math import isfinite

    from unmix.errors import InputError
    from unmix.scene import Talker

    try:
        values = [float(part) for part in text.split(",")]
    except ValueError:
        values = []
    if not 1 <= len(values) <= 3 or not all(map(isfinite, values)) or (len(values) == 3 and values[2] <= 0.0):
        raise InputError(f"--bearing {text}: give AZ, AZ,EL or AZ,EL,M as numbers, such as 20,0,1.2")
    elevation = values[1] if len(values) > 1 else 0.0
    distance = values[2] if len(values) > 2 else None
    return Talker.at(f"talker-{index + 1}", values[0], elevation_deg=elevation, distance_m=distance)
