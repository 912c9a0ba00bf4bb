"""The microphone array: where its microphones are, and what is known to be wrong with each channel."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import msgspec
import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.errors import InputError
from unmix.files import read_toml, write_toml
from unmix.physics import pairwise_distances

if TYPE_CHECKING:
    from unmix.sofa import Responses

__all__ = ["Array", "ArrayFile"]

Floats = NDArray[np.float64]

_COINCIDENT_M = 1e-5
_DOUBTFUL_APERTURE_M = 10.0


class ArrayFile(msgspec.Struct, forbid_unknown_fields=True, kw_only=True, omit_defaults=True):
    """An array as it stands in a TOML file, or inline in a scene file."""

    positions_m: list[list[float]]
    reference_channel: int = 0
    title: str = ""
    gain_db: list[float] | None = None
    delay_s: list[float] | None = None
    polarity: list[int] | None = None
    gain_std_db: list[float] | None = None
    delay_std_s: list[float] | None = None
    position_std_m: list[float] | None = None
    full_scale_db_spl: float | None = None
    allow_large: bool = False


@dataclass(frozen=True)
class Array:
    """Microphone positions and per-channel corrections.

    A channel as recorded is ``polarity * gain * ideal(t - delay)``: the corrections say what the channel does to the
    sound, and `solve` puts them into the model (they are never applied to the samples).

    positions_m        (channels, 3), x front, y left, z up, from the array's origin
    reference_channel  index of the microphone at which talkers are received
    gain_db, delay_s   (channels,), relative to a faultless channel; zero when unknown
    polarity           (channels,), +1 or -1
    *_std_*            (channels,) standard deviations of the corrections, None when unknown
    full_scale_db_spl  sound pressure level of a full-scale sine, None when not calibrated
    responses          measured responses that replace pure delays in the model; None for microphones in free field
    """

    positions_m: Floats
    reference_channel: int = 0
    title: str = ""
    gain_db: Floats = field(default_factory=lambda: np.zeros(0))
    delay_s: Floats = field(default_factory=lambda: np.zeros(0))
    polarity: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    gain_std_db: Floats | None = None
    delay_std_s: Floats | None = None
    position_std_m: Floats | None = None
    full_scale_db_spl: float | None = None
    responses: Responses | None = field(default=None, repr=False, compare=False)

    def __post_init__(self) -> None:
        positions = np.array(self.positions_m, dtype=np.float64)
        object.__setattr__(self, "positions_m", positions)
        m = len(positions)
        for name, default in (("gain_db", 0.0), ("delay_s", 0.0), ("polarity", 1)):
            value = np.array(getattr(self, name))
            object.__setattr__(self, name, np.full(m, default) if value.size == 0 else value)

    @classmethod
    def load(cls, path: str | Path) -> Array:
        """Read an array file (TOML, or SOFA). Raises FileError or InputError naming file, key and remedy."""
        path = Path(path)
        if path.suffix.lower() == ".sofa":
            from unmix.sofa import read_sofa

            responses = read_sofa(path)
            content = ArrayFile(positions_m=responses.positions_m.tolist(), title=responses.title)
            return replace(cls.from_file(content, where=f"{path}: ReceiverPosition"), responses=responses)
        return cls.from_file(read_toml(path, ArrayFile), where=str(path))

    @classmethod
    def from_positions(cls, positions_m: ArrayLike, *, reference_channel: int = 0) -> Array:
        """An array from microphone positions alone: (channels, 3) in metres."""
        positions = np.asarray(positions_m, dtype=np.float64)
        if positions.ndim != 2:
            raise InputError(f"positions_m: expected (channels, 3), got shape {positions.shape}")
        return cls.from_file(
            ArrayFile(positions_m=positions.tolist(), reference_channel=reference_channel),
            where="positions_m",
        )

    @classmethod
    def from_file(cls, content: ArrayFile, *, where: str) -> Array:
        """Check what an array file says; `where` names its source in errors."""
        positions = _checked_positions(content, where)
        m = len(positions)
        if not 0 <= content.reference_channel < m:
            raise InputError(
                f"{where}: key `reference_channel`: {content.reference_channel} is not a channel; the array has "
                f"0 to {m - 1}"
            )
        columns: dict[str, Any] = {}
        for name in ("gain_db", "delay_s", "polarity", "gain_std_db", "delay_std_s", "position_std_m"):
            value = getattr(content, name)
            if value is None:
                continue
            if len(value) != m:
                raise InputError(f"{where}: key `{name}`: {len(value)} values for {m} microphones; give one for each")
            if not np.all(np.isfinite(value)):
                raise InputError(f"{where}: key `{name}`: values must be finite numbers")
            columns[name] = np.array(value, dtype=np.int64 if name == "polarity" else np.float64)
        if "polarity" in columns and not np.all(np.abs(columns["polarity"]) == 1):
            raise InputError(f"{where}: key `polarity`: each value must be 1 or -1")
        return cls(
            positions_m=positions,
            reference_channel=content.reference_channel,
            title=content.title,
            full_scale_db_spl=content.full_scale_db_spl,
            **columns,
        )

    def to_file(self) -> ArrayFile:
        """The array as the content of a file; corrections that are all neutral are left out."""

        def column(name: str, neutral: float | None) -> list[Any] | None:
            value = getattr(self, name)
            return None if value is None or (neutral is not None and np.all(value == neutral)) else value.tolist()

        return ArrayFile(
            positions_m=self.positions_m.tolist(),
            reference_channel=self.reference_channel,
            title=self.title,
            gain_db=column("gain_db", 0.0),
            delay_s=column("delay_s", 0.0),
            polarity=column("polarity", 1),
            gain_std_db=column("gain_std_db", None),
            delay_std_s=column("delay_std_s", None),
            position_std_m=column("position_std_m", None),
            full_scale_db_spl=self.full_scale_db_spl,
            allow_large=self.aperture_m > _DOUBTFUL_APERTURE_M,
        )

    def save(self, path: str | Path, *, overwrite: bool = False) -> None:
        """Write an array file (TOML). Raises FileError when it exists and `overwrite` is not given.

        Measured responses have no place in it: InputError; `unmix.sofa.write_sofa` writes them.
        """
        if self.responses is not None:
            raise InputError(f"{path}: an array file cannot hold measured responses; name the SOFA file itself")
        write_toml(Path(path), msgspec.to_builtins(self.to_file()), overwrite=overwrite)

    @property
    def channels(self) -> int:
        """Number of microphones."""
        return len(self.positions_m)

    @property
    def aperture_m(self) -> float:
        """Largest distance between two microphones."""
        return float(pairwise_distances(self.positions_m).max())

    def take(self, channels: ArrayLike) -> Array:
        """The array made of some channels only; its reference is the old one if kept, else the first."""
        index = np.asarray(channels, dtype=np.intp)
        kept = np.flatnonzero(index == self.reference_channel)
        per_channel = ["positions_m", "gain_db", "delay_s", "polarity", "gain_std_db", "delay_std_s", "position_std_m"]
        columns: dict[str, Any] = {
            name: value[index] for name in per_channel if (value := getattr(self, name)) is not None
        }
        responses = None if self.responses is None else self.responses.take(index)
        return replace(self, reference_channel=int(kept[0]) if len(kept) else 0, responses=responses, **columns)


def _checked_positions(content: ArrayFile, where: str) -> Floats:
    if not content.positions_m or any(len(row) != 3 for row in content.positions_m):
        raise InputError(f"{where}: key `positions_m`: give [x, y, z] in metres for each microphone")
    positions = np.array(content.positions_m, dtype=np.float64)
    if not np.all(np.isfinite(positions)):
        raise InputError(f"{where}: key `positions_m`: positions must be finite numbers")
    distance = pairwise_distances(positions)
    np.fill_diagonal(distance, np.inf)
    if distance.min() < _COINCIDENT_M:
        first, second = np.unravel_index(int(distance.argmin()), distance.shape)
        raise InputError(
            f"{where}: key `positions_m`: microphones {min(first, second)} and {max(first, second)} stand at the "
            "same place; correct one, or leave its channel out"
        )
    np.fill_diagonal(distance, 0.0)
    if distance.max() > _DOUBTFUL_APERTURE_M and not content.allow_large:
        raise InputError(
            f"{where}: key `positions_m`: the array is {distance.max():.0f} m wide; are the positions in millimetres? "
            "Give metres, or set `allow_large = true`"
        )
    return positions
