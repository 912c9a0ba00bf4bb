"""Things that change over time: where a talker is, and how the array is turned."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.errors import FileError, InputError
from unmix.physics import direction_angles, unit_vector

__all__ = ["Orientation", "Track", "read_columns"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Track:
    """A talker's bearing over time: arrays of equal length; seconds, radians, metres (NaN: plane wave)."""

    time_s: Floats
    azimuth: Floats
    elevation: Floats
    distance_m: Floats

    @classmethod
    def load(cls, path: str | Path) -> Track:
        """Read a CSV file with columns time_s, azimuth_deg and optionally elevation_deg, distance_m."""
        columns = read_columns(Path(path), required=("time_s", "azimuth_deg"), optional=("elevation_deg", "distance_m"))
        time = columns["time_s"]
        distance = columns.get("distance_m")
        if distance is not None and np.any(distance <= 0.0):
            raise InputError(f"{path}: column `distance_m`: {distance.min():g}; give metres above zero")
        return cls(
            time_s=time,
            azimuth=np.radians(columns["azimuth_deg"]),
            elevation=np.radians(columns.get("elevation_deg", np.zeros_like(time))),
            distance_m=columns.get("distance_m", np.full_like(time, np.nan)),
        )

    def save(self, path: str | Path, *, overwrite: bool = False) -> None:
        """Write the CSV file that `load` reads."""
        from unmix.files import write_aside

        with write_aside(Path(path), overwrite=overwrite) as aside, aside.open("w", newline="") as stream:
            known = bool(np.all(np.isfinite(self.distance_m)))
            writer = csv.writer(stream)
            writer.writerow(["time_s", "azimuth_deg", "elevation_deg"] + ["distance_m"] * known)
            for t, az, el, r in zip(self.time_s, self.azimuth, self.elevation, self.distance_m, strict=True):
                writer.writerow([f"{t:.4f}", f"{np.degrees(az):.3f}", f"{np.degrees(el):.3f}"] + [f"{r:.4f}"] * known)

    def at(self, time_s: ArrayLike) -> tuple[Floats, Floats, Floats]:
        """Azimuth, elevation and distance at the given times, interpolated on the sphere, held beyond both ends."""
        t = np.asarray(time_s, dtype=np.float64)
        directions = unit_vector(self.azimuth, self.elevation)
        mixed = np.stack([np.interp(t, self.time_s, directions[:, i]) for i in range(3)], axis=-1)
        azimuth, elevation = direction_angles(mixed)
        return azimuth, elevation, np.interp(t, self.time_s, self.distance_m)


@dataclass(frozen=True)
class Orientation:
    """How the array is turned: unit quaternions (w, x, y, z) that rotate array coordinates into the world's.

    notes  what the user should know about where they come from, one line each
    """

    time_s: Floats
    quaternions: Floats
    notes: tuple[str, ...] = ()

    @classmethod
    def load(cls, path: str | Path) -> Orientation:
        """Read a CSV file of quaternions, or of an inertial sensor's raw readings.

        Quaternions: columns time_s, qw, qx, qy, qz; they are normalised (with a note when off by more than a
        hundredth), and refused when zero. Raw readings: columns time_s, gx, gy, gz in rad/s and ax, ay, az in m/s^2,
        along the array's axes; see `unmix.attitude`.
        """
        path = Path(path)
        raw = ("gx", "gy", "gz", "ax", "ay", "az")
        columns = read_columns(path, required=("time_s",), optional=("qw", "qx", "qy", "qz", *raw))
        if "gx" in columns:
            from unmix.attitude import integrate_attitude

            columns = read_columns(path, required=("time_s", *raw))
            rates, forces = (np.stack([columns[n] for n in names], axis=-1) for names in (raw[:3], raw[3:]))
            attitude = integrate_attitude(columns["time_s"], rates, forces, where=str(path))
            return cls(columns["time_s"], attitude.quaternions, (attitude.note,))
        columns = read_columns(path, required=("time_s", "qw", "qx", "qy", "qz"))
        q = np.stack([columns[name] for name in ("qw", "qx", "qy", "qz")], axis=-1)
        norm = np.linalg.norm(q, axis=-1)
        if np.any(norm < 1e-6):
            line = int(np.argmax(norm < 1e-6)) + 2
            raise InputError(f"{path}: line {line}: quaternion of length zero; every row needs a rotation")
        notes: tuple[str, ...] = ()
        if np.any(np.abs(norm - 1.0) > 0.01):
            notes = (f"{path}: quaternions are not of unit length ({norm.min():.3g} to {norm.max():.3g}): normalised",)
        return cls(columns["time_s"], q / norm[:, None], notes)

    def matrices(self, time_s: ArrayLike) -> Floats:
        """Rotations (array to world) at the given times: (..., 3, 3).

        Interpolated on the sphere, held beyond both ends.
        """
        from scipy.spatial.transform import Rotation, Slerp

        t = np.clip(np.asarray(time_s, dtype=np.float64), self.time_s[0], self.time_s[-1])
        rotations = Rotation.from_quat(self.quaternions, scalar_first=True)
        if len(self.time_s) == 1:
            return np.broadcast_to(rotations.as_matrix()[0], (*t.shape, 3, 3)).copy()
        flat = Slerp(self.time_s, rotations)(t.ravel()).as_matrix()
        return np.asarray(flat.reshape(*t.shape, 3, 3))


def read_columns(path: Path, *, required: tuple[str, ...], optional: tuple[str, ...] = ()) -> dict[str, Floats]:
    """Read named numeric columns of a CSV file; `time_s`, where there is one, must increase strictly.

    Raises FileError when the file cannot be read, InputError naming file and line when its content is wrong.
    """
    try:
        with path.open(newline="", encoding="utf-8-sig") as stream:
            reader = csv.reader(stream)
            rows = [(reader.line_num, row) for row in reader if row and not row[0].startswith("#")]
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; check the path") from None
    except (OSError, UnicodeDecodeError) as error:
        raise FileError(f"{path}: cannot be read as text ({error})") from None
    header = [name.strip() for name in rows[0][1]] if rows else []
    missing = [name for name in required if name not in header]
    if missing:
        raise InputError(f"{path}: column `{missing[0]}` is missing; the first line must name {', '.join(required)}")
    unknown = [name for name in header if name not in required + optional]
    if unknown:
        raise InputError(f"{path}: unknown column `{unknown[0]}`; known: {', '.join(required + optional)}")
    if len(rows) < 2:
        raise InputError(f"{path}: no rows below the header")
    values = np.empty((len(rows) - 1, len(header)))
    for index, (line, row) in enumerate(rows[1:]):
        try:
            values[index] = _numbers(row, len(header))
        except ValueError:
            raise InputError(f"{path}: line {line}: expected {len(header)} numbers, got {','.join(row)!r}") from None
        if not np.all(np.isfinite(values[index])):
            raise InputError(f"{path}: line {line}: values must be finite numbers")
    columns = {name: values[:, i].copy() for i, name in enumerate(header)}
    if "time_s" in columns and np.any(np.diff(columns["time_s"]) <= 0):
        line = rows[int(np.argmax(np.diff(columns["time_s"]) <= 0)) + 2][0]
        raise InputError(f"{path}: line {line}: time_s does not increase; sort the rows and remove repeats")
    return columns


def _numbers(row: list[str], count: int) -> list[float]:
    if len(row) != count:
        raise ValueError
    return [float(cell) for cell in row]
