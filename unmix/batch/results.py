"""Results: one row per talker, scene and variant, with every figure and setting, as Parquet and CSV, asked in SQL."""

from __future__ import annotations

import contextlib
import re
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, Any

import msgspec

from unmix.batch.items import Items
from unmix.batch.rows import PARTS_OF_A_GRADE
from unmix.batch.scores import Scores
from unmix.batch.store import Part, Store
from unmix.errors import FileError, InputError
from unmix.files import write_aside
from unmix.metrics.grades import FIGURES
from unmix.metrics.speech_figures import SPEECH_FIGURES
from unmix.variant import Variant, describe_fields

__all__ = ["MEASURED_COLUMNS", "Written", "figure_columns", "open_results", "query", "write_results"]

PARQUET, CSV = "results.parquet", "results.csv"
MEMORY = "512MB"
"""What DuckDB may hold; the rest of a large table it keeps on disk for the while."""
BLOCK = 20_000
"""Items whose rows are put in order at a time. Items come in the plan's order, so blocks need only follow each other:
a whole table of a million would be sorted on disk."""
MEASURED_COLUMNS = ("solve_time_s", "grade_time_s", "real_time_factor", "peak_memory_mb")
"""Columns that differ from run to run; all others are determined by the plan and the data."""

_LABELS = {"spec": "VARCHAR", "room": "VARCHAR", "seats": "VARCHAR", "snr_db": "DOUBLE", "seed": "BIGINT"}
_ITEM = {
    "against": "VARCHAR",
    "duration_s": "DOUBLE",
    "sample_rate": "BIGINT",
    "channels": "BIGINT",
    "talkers": "BIGINT",
    "method": "VARCHAR",
    "latency_ms": "DOUBLE",
    "margin_s": "DOUBLE",
    "fallbacks": "VARCHAR",
    "warnings": "VARCHAR",
    **dict.fromkeys(MEASURED_COLUMNS, "DOUBLE"),
}
_TALKER = {
    "leakage_db": "DOUBLE",
    "leakage_alone_db": "DOUBLE",
    "offset_s": "DOUBLE",
    "drift_ppm": "DOUBLE",
    "azimuth_deg": "DOUBLE",
    "t20_s": "DOUBLE",
    "drr_db": "DOUBLE",
    "undefined": "VARCHAR",
}
_SETTING = {"integer": "BIGINT", "number": "DOUBLE", "yes/no": "BOOLEAN"}


@dataclass(frozen=True)
class Written:
    """What went into the results: items that are done, those that failed with their errors, those still missing."""

    done: int
    failed: dict[str, str]
    failures: int
    missing: int
    files: tuple[Path, ...]


MOST_FAILURES_NAMED = 1000


def figure_columns(items: Items, scores: Scores) -> dict[str, str]:
    """Columns of figures with their types."""
    own = [f"{m.name}{ending}" for m in items.metrics for ending in ("", "_before", "_gain")]
    figures = [f"{figure}{ending}" for figure in FIGURES for ending in PARTS_OF_A_GRADE]
    figures += [f"{figure}{ending}" for figure in SPEECH_FIGURES for ending in PARTS_OF_A_GRADE[:3]]
    return dict.fromkeys([*figures, *own, *scores.columns], "DOUBLE")


def write_results(items: Items, store: Store, scores: Scores) -> Written:
    """Gather the parts into `results.parquet` and `results.csv`, in the plan's order.

    Raises FileError when the folder cannot be written.
    """
    import duckdb

    folder = store.folder
    with tempfile.TemporaryDirectory(prefix=".tables-", dir=folder) as name:
        aside = Path(name)
        try:
            _write_lines(
                aside / "scenes.json", [s.labels | {"s": i, "scene": s.name} for i, s in enumerate(items.scenes)]
            )
            settings = [_flat(v) | {"v": i, "variant": v.name} for i, v in enumerate(items.variants)]
            _write_lines(aside / "variants.json", settings)
        except OSError as error:
            raise FileError(f"{folder}: cannot be written ({error.strerror}); is the disk full?") from None
        parquet, csv = folder / PARQUET, folder / CSV
        connection = duckdb.connect()
        try:
            connection.execute("SET enable_progress_bar = false")
            connection.execute("SET threads = 1")
            connection.execute(f"SET memory_limit = '{MEMORY}'")
            connection.execute(f"SET temp_directory = {_quoted(aside / 'spill')}")
            tally = _write_blocks(connection, aside, items, store, scores)
            with write_aside(parquet, overwrite=True) as made:
                blocks = f"SELECT * FROM read_parquet({_quoted(aside / 'block-*.parquet')})"
                connection.execute(f"COPY ({blocks}) TO {_quoted(made)} (FORMAT parquet, ROW_GROUP_SIZE {BLOCK})")
            with write_aside(csv, overwrite=True) as made:
                connection.execute(
                    f"COPY (SELECT * FROM read_parquet({_quoted(parquet)})) TO {_quoted(made)} (FORMAT csv, HEADER)"
                )
        except duckdb.IOException as error:
            line = str(error).splitlines()[0]
            raise FileError(f"{folder}: tables cannot be written ({line}); is the disk full?") from None
        finally:
            connection.close()
    return Written(tally.done, tally.failed, tally.failures, tally.missing, (parquet, csv))


@dataclass
class _Tally:
    """Items seen so far."""

    done: int = 0
    failures: int = 0
    missing: int = 0
    failed: dict[str, str] = field(default_factory=dict)


def _write_blocks(connection: Any, aside: Path, items: Items, store: Store, scores: Scores) -> _Tally:
    """The rows as Parquet files, whose names sort as the items do; one without rows when there are no items."""
    tally, present = _Tally(), store.keys()
    select = _select(aside, figure_columns(items, scores))
    for number, first in enumerate(range(0, max(1, len(items)), BLOCK)):
        indices = range(first, min(first + BLOCK, len(items)))
        try:
            with (aside / "rows.json").open("wb") as stream:
                _write_rows(stream, indices, present, items, store, scores, tally)
        except OSError as error:
            raise FileError(f"{store.folder}: cannot be written ({error.strerror}); is the disk full?") from None
        made = aside / f"block-{number:08d}.parquet"
        connection.execute(f"COPY ({select}) TO {_quoted(made)} (FORMAT parquet)")
    return tally


def _write_rows(
    stream: IO[bytes], indices: range, present: set[str], items: Items, store: Store, scores: Scores, tally: _Tally
) -> None:
    encoder = msgspec.json.Encoder()
    for index in indices:
        key = items.key(index)
        part = store.read(key) if key in present else None
        if part is None:
            tally.missing += 1
            continue
        if part.error is None:
            tally.done += 1
        else:
            tally.failures += 1
            if len(tally.failed) < MOST_FAILURES_NAMED:
                tally.failed[items.name(index)] = part.error
        stream.write(encoder.encode_lines(list(_rows(items, index, key, part, scores))))


def _rows(items: Items, index: int, key: str, part: Part, scores: Scores) -> Iterator[dict[str, Any]]:
    s, v = items.place(index)
    scene, variant = items.scenes[s].name, items.variants[v].name
    for row, talker in enumerate(part.talkers or [{"talker": None}]):
        place = {"s": s, "v": v, "row": row, "item": key, "error": part.error}
        yield place | part.item | talker | scores.of(scene, variant, talker["talker"])


def _write_lines(path: Path, rows: list[dict[str, Any]]) -> None:
    path.write_bytes(msgspec.json.Encoder().encode_lines(rows))


def _setting_columns() -> dict[str, str]:
    fields = [field for field in describe_fields() if field.key not in ("name", "summary", "base")]
    return {field.key.replace(".", "_"): _SETTING.get(field.type, "VARCHAR") for field in fields}


def _flat(variant: Variant) -> dict[str, Any]:
    """Every setting under its key, dots made underscores; those of parts that are left out are missing."""
    flat: dict[str, Any] = {}

    def walk(tree: dict[str, Any], prefix: str) -> None:
        for key, value in tree.items():
            if isinstance(value, dict):
                walk(value, f"{prefix}{key}_")
            elif value is not None:
                flat[prefix + key] = value

    walk(variant.to_dict(), "")
    return flat


def _select(folder: Path, figures: dict[str, str]) -> str:
    settings = _setting_columns()
    rows = {"s": "BIGINT", "v": "BIGINT", "row": "BIGINT", "item": "VARCHAR", "error": "VARCHAR", "talker": "VARCHAR"}
    rows |= figures | _TALKER | _ITEM
    scenes = {"s": "BIGINT", "scene": "VARCHAR", **_LABELS}
    variants = {"v": "BIGINT", "variant": "VARCHAR", **settings}
    chosen = [
        "scene", "variant", "r.talker", "r.error",
        *(f"r.{_name(c)}" for c in (*figures, *_TALKER, *_ITEM)),
        *(f"c.{_name(c)}" for c in _LABELS),
        *(f"w.{_name(c)}" for c in settings),
        "r.item",
    ]  # fmt: skip
    return (
        f"SELECT {', '.join(chosen)} FROM {_json(folder / 'rows.json', rows)} r "
        f"JOIN {_json(folder / 'scenes.json', scenes)} c USING (s) "
        f"JOIN {_json(folder / 'variants.json', variants)} w USING (v) ORDER BY s, v, row"
    )


def _json(path: Path, columns: dict[str, str]) -> str:
    typed = ", ".join(f"{_quoted(name)}: '{kind}'" for name, kind in columns.items())
    return f"read_json({_quoted(path)}, format = 'newline_delimited', columns = {{{typed}}})"


def _name(column: str) -> str:
    return f'"{column}"'


def _quoted(text: str | Path) -> str:
    escaped = str(text).replace("'", "''")
    return f"'{escaped}'"


@contextlib.contextmanager
def open_results(folder: str | Path) -> Iterator[Any]:
    """A DuckDB connection in which the folder's rows are the table `results`.

    Raises FileError when there are none, InputError for SQL that does not work.
    """
    import duckdb

    path = Path(folder) / PARQUET
    if not path.is_file():
        raise FileError(f"{path}: no such file; run the batch first, or name its folder with --out")
    connection = duckdb.connect()
    try:
        connection.execute("SET enable_progress_bar = false")
        connection.execute(f"CREATE VIEW results AS SELECT * FROM read_parquet({_quoted(path)})")
        yield connection
    except duckdb.Error as error:
        raise InputError(_plainly(str(error))) from None
    finally:
        connection.close()


def _plainly(message: str) -> str:
    lines = [line for line in message.splitlines() if line.strip() and not re.match(r"^(LINE \d+:| *\^)", line)]
    return f"the query does not work: {' '.join(lines)}"


def query(folder: str | Path, sql: str) -> tuple[list[str], list[tuple[Any, ...]]]:
    """Column names and rows that answer `sql` over the table `results`.

    Raises FileError when the folder holds no results, InputError when the query does not work.
    """
    with open_results(folder) as connection:
        answer = connection.execute(sql)
        columns = [column[0] for column in answer.description or []]
        return columns, list(answer.fetchall())
