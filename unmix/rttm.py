"""Who speaks when, as RTTM files: their SPEAKER lines, as NIST laid them down for its evaluation RT-09."""

from __future__ import annotations

import math
from pathlib import Path

from unmix.errors import FileError, InputError
from unmix.files import write_aside

__all__ = ["read_rttm", "write_rttm"]

Stretches = list[tuple[float, float]]


def read_rttm(path: Path) -> dict[str, Stretches]:
    """Stretches of speech per talker, in seconds. Raises FileError, or InputError naming the line that is wrong."""
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; check the path") from None
    except (OSError, UnicodeDecodeError) as error:
        raise FileError(f"{path}: cannot be read as text ({error}); check the file") from None
    found: dict[str, Stretches] = {}
    for number, line in enumerate(lines, start=1):
        words = line.split()
        if not words or words[0] != "SPEAKER":
            continue
        try:
            start, duration, name = float(words[3]), float(words[4]), words[7]
        except (IndexError, ValueError):
            raise InputError(f"{path}: line {number}: not an RTTM SPEAKER line: {line!r}") from None
        if not (0.0 <= start < math.inf and 0.0 < duration < math.inf):
            raise InputError(f"{path}: line {number}: start {words[3]} s and duration {words[4]} s are no stretch")
        found.setdefault(name, []).append((start, start + duration))
    return found


def write_rttm(path: Path, activity: dict[str, Stretches], *, file_id: str, overwrite: bool = False) -> None:
    """Write stretches of speech per talker as RTTM SPEAKER lines, ordered by time; spaces in names become `_`."""
    rows = sorted((a, b, name.replace(" ", "_")) for name, stretches in activity.items() for a, b in stretches)
    with write_aside(path, overwrite=overwrite) as aside:
        aside.write_text(
            "".join(f"SPEAKER {file_id} 1 {a:.3f} {b - a:.3f} <NA> <NA> {n} <NA> <NA>\n" for a, b, n in rows),
            encoding="utf-8",
        )
