"""Scores from outside, of listeners or a speech recogniser: CSV, joined to results by scene, variant and talker."""

from __future__ import annotations

import csv
import difflib
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from unmix.batch.plan import ScoresTable
from unmix.errors import FileError, InputError

__all__ = ["Scores", "read_scores"]

PLACE = ("scene", "variant", "talker")
Place = tuple[str, str, str | None]


@dataclass(frozen=True)
class Scores:
    """Mean scores by scene, variant and talker (None: of the scene as a whole).

    columns  their names, with whether large values are good
    """

    columns: dict[str, bool]
    values: dict[Place, dict[str, float]]

    def of(self, scene: str, variant: str, talker: str | None) -> dict[str, float]:
        """The scores of one row of the results."""
        return {**self.values.get((scene, variant, None), {}), **self.values.get((scene, variant, talker), {})}


def read_scores(
    tables: Sequence[ScoresTable], base: Path, *, scenes: Sequence[str], variants: Sequence[str], taken: Sequence[str]
) -> Scores:
    """Read the plan's score files. Raises FileError or InputError naming file, line and column.

    `taken` are column names that results have already.
    """
    columns: dict[str, bool] = {}
    sums: dict[Place, dict[str, tuple[float, int]]] = {}
    for table in tables:
        path = base / table.file
        names = _read(path, {"scene": scenes, "variant": variants}, sums, [*taken, *columns])
        if unknown := sorted(set(table.lower_is_better) - set(names)):
            raise InputError(f"{path}: there is no column {unknown[0]!r}, only {', '.join(names)}")
        columns |= {name: name not in table.lower_is_better for name in names}
    means = {place: {name: total / count for name, (total, count) in row.items()} for place, row in sums.items()}
    return Scores(columns, means)


def _read(
    path: Path,
    known: dict[str, Sequence[str]],
    sums: dict[Place, dict[str, tuple[float, int]]],
    taken: Sequence[str],
) -> list[str]:
    try:
        with path.open(newline="", encoding="utf-8-sig") as stream:
            reader = csv.DictReader(stream)
            names = _columns(reader.fieldnames or [], path, taken)
            sets = {key: set(values) for key, values in known.items()}
            for row in reader:
                where = f"{path}: line {reader.line_num}"
                for key, values in known.items():
                    if row[key] not in sets[key]:
                        raise InputError(f"{where}: the plan has no {key} {row[key]!r}; {_nearest(row[key], values)}")
                place = (row["scene"], row["variant"], row.get("talker") or None)
                for name in names:
                    _add(sums.setdefault(place, {}), name, row[name], where)
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; correct `file` in [[scores]]") from None
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    except UnicodeDecodeError:
        raise InputError(f"{path}: not UTF-8 text; save it as CSV in UTF-8") from None
    return names


def _columns(fields: Sequence[str], path: Path, taken: Sequence[str]) -> list[str]:
    for key in ("scene", "variant"):
        if key not in fields:
            raise InputError(f"{path}: the first line names no column {key!r}; it needs scene, variant and the scores")
    names = [name for name in fields if name not in PLACE]
    if not names:
        raise InputError(f"{path}: holds no scores; add a column beside scene, variant and talker")
    for name in names:
        if not re.fullmatch("[a-z][a-z0-9_]*", name):
            raise InputError(f"{path}: column {name!r}: use small letters, digits and _, a letter first")
        if name in taken:
            raise InputError(f"{path}: column {name!r} is in the results already; call it something else")
    return names


def _add(row: dict[str, tuple[float, int]], name: str, text: str | None, where: str) -> None:
    if text is None or not text.strip():
        return
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(f"{where}: column {name!r}: {text!r} is no number; leave it empty when there is none")
    total, count = row.get(name, (0.0, 0))
    row[name] = (total + value, count + 1)


def _nearest(name: str, known: Sequence[str]) -> str:
    near = difflib.get_close_matches(name, known, n=1)
    return f"did you mean {near[0]!r}?" if near else f"it has {', '.join(known[:8])}{', ...' if len(known) > 8 else ''}"
