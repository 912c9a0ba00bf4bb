"""What a batch's report is made of: its rows, its rankings, and where its scenes lie."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.batch.ranking import Metric, analyse, table_of
from unmix.batch.results import PARQUET, open_results
from unmix.errors import FileError

__all__ = ["BatchMaterial", "RankedVariant", "is_batch", "material_of_batch"]

Floats = NDArray[np.float64]

RECORD = "batch.json"
USUAL = ("sir_db", "stoi", "sdr_db")
"""Figures a batch without a record is ranked by."""
MOST_ROWS = 25_000
"""Rows a page carries; of a larger batch those of its best variants."""
SCENE_COLUMNS = ("t20_s", "snr_db", "spacing_deg")


@dataclass(frozen=True)
class RankedVariant:
    """One line of a ranking; `low` and `high` are None where there are too few scenes."""

    name: str
    mean: float | None
    low: float | None
    high: float | None
    scenes: int
    group: int
    peers: tuple[str, ...]


@dataclass(frozen=True)
class BatchMaterial:
    """A batch as its report needs it.

    metrics      what it is ranked by, the first one first; columns are those of the results
    rankings     by metric: variants, the best first
    pairs        comparisons of the first metric: scenes still needed by the two names, None where unknown
    costs        by variant: items, failures, real_time_factor, latency_ms
    tables       by metric: (scenes, variants), talkers averaged, NaN where there is none
    of_scene     by column of `SCENE_COLUMNS`: (scenes,), NaN where not known
    rows         talker x scene x variant as plain values, of the `kept` best variants; `total` there are
    stoi         intelligibility of each talker in each scene, before and after, under the best variant
    talkers      everybody's name
    coverage_percent  what the intervals hold with so few scenes; None with enough
    scene_files  by scene, where its file lies; settings by variant
    """

    title: str
    folder: Path
    metrics: tuple[Metric, ...]
    scenes: tuple[str, ...]
    variants: tuple[str, ...]
    rankings: dict[str, tuple[RankedVariant, ...]]
    pairs: dict[frozenset[str], int | None]
    costs: dict[str, dict[str, Any]]
    tables: dict[str, Floats] = field(repr=False)
    of_scene: dict[str, Floats] = field(repr=False)
    rows: list[dict[str, Any]] = field(repr=False)
    total: int
    kept: int
    stoi: list[tuple[float, float]] = field(repr=False)
    talkers: tuple[str, ...]
    coverage_percent: dict[str, float] | None = None
    scene_files: dict[str, Path] = field(default_factory=dict)
    settings: dict[str, dict[str, Any]] = field(default_factory=dict)
    failed: dict[str, str] = field(default_factory=dict)
    missing: int = 0
    notes: tuple[str, ...] = ()

    @property
    def winner(self) -> RankedVariant | None:
        """The variant with the best mean of the first metric; None when nothing was graded."""
        best = self.rankings[self.metrics[0].name]
        return best[0] if best and best[0].mean is not None else None


def is_batch(folder: Path) -> bool:
    """Whether `batch` wrote this folder."""
    return (folder / PARQUET).is_file()


def material_of_batch(folder: Path) -> BatchMaterial:
    """Everything the folder of a batch holds. Raises FileError or InputError for results that cannot be read."""
    record = _record(folder / RECORD)
    with open_results(folder) as connection:
        scenes = _names(connection, "scene")
        variants = _names(connection, "variant")
        columns = [c[0] for c in connection.execute("DESCRIBE results").fetchall()]
        metrics = _metrics(record, columns)
        tables = {m.name: table_of(connection, m.column, scenes, variants) for m in metrics}
        of_scene = _of_scenes(connection, scenes, columns)
    tree = record or analyse(folder, metrics, scenes=scenes, variants=variants, seed=0).to_dict()
    first = tree["rankings"][metrics[0].name]
    best = [v["name"] for v in first["variants"]]
    with open_results(folder) as connection:
        total = int(connection.execute("SELECT count(*) FROM results").fetchone()[0])
        kept = best[: max(1, MOST_ROWS * len(best) // max(total, 1))]
        rows = _rows(connection, metrics, columns, kept)
        stoi = _stoi(connection, best[:1], columns)
        talkers = [name for name in _names(connection, "talker") if name != "None"]
    return BatchMaterial(
        title=str(tree.get("title") or folder.resolve().name),
        folder=folder,
        metrics=metrics,
        scenes=scenes,
        variants=variants,
        rankings={name: tuple(map(_ranked, ranking["variants"])) for name, ranking in tree["rankings"].items()},
        pairs={frozenset((p["a"], p["b"])): p["scenes_more"] for p in first["pairs"]},
        costs={cost["name"]: cost for cost in tree["costs"]},
        tables=tables,
        of_scene=of_scene,
        rows=rows,
        total=total,
        kept=len(kept),
        stoi=stoi,
        talkers=tuple(talkers),
        coverage_percent=tree["coverage_percent"],
        scene_files={name: folder / path for name, path in tree.get("scene_files", {}).items()},
        settings=tree.get("settings", {}),
        failed=tree.get("failed", {}),
        missing=int(tree.get("missing", 0)),
        notes=() if record else (f"{RECORD} is missing: the batch is ranked anew, and its scenes cannot be heard",),
    )


def _record(path: Path) -> dict[str, Any] | None:
    try:
        tree = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        return None
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    except (UnicodeDecodeError, json.JSONDecodeError):
        raise FileError(f"{path}: is damaged; run the batch again, which only writes its tables anew") from None
    needed = {"metrics", "rankings", "costs", "coverage_percent"}
    if not isinstance(tree, dict) or not needed <= set(tree) or not tree["metrics"]:
        raise FileError(f"{path}: is not a batch's record; run the batch again, which only writes its tables anew")
    return tree


def _names(connection: Any, column: str) -> tuple[str, ...]:
    """Distinct values in the order of the rows."""
    found = connection.execute(f"SELECT {column} FROM results").fetchall()
    return tuple(dict.fromkeys(str(row[0]) for row in found))


def _metrics(record: dict[str, Any] | None, columns: list[str]) -> tuple[Metric, ...]:
    if record is not None:
        better = {name: ranking["higher_is_better"] for name, ranking in record["rankings"].items()}
        return tuple(Metric(m["name"], m["column"], better[m["name"]]) for m in record["metrics"])
    return tuple(Metric(name, f"{name}_gain") for name in USUAL if f"{name}_gain" in columns)


def _ranked(tree: Mapping[str, Any]) -> RankedVariant:
    interval = tree["interval"]
    figures = (interval["mean"], interval["low"], interval["high"], interval["scenes"])
    return RankedVariant(tree["name"], *figures, tree["group"], tuple(tree["peers"]))


def _rows(
    connection: Any, metrics: tuple[Metric, ...], columns: list[str], variants: list[str]
) -> list[dict[str, Any]]:
    wanted = ["scene", "variant", "talker", "error", "sdr_db", "sir_db", "stoi", "stoi_before"]
    wanted += [m.column for m in metrics] + ["real_time_factor", "latency_ms", "azimuth_deg", "t20_s", "snr_db"]
    chosen = [c for c in dict.fromkeys(wanted) if c in columns]
    listed = ", ".join(f'"{c}"' for c in chosen)
    marks = ", ".join("?" for _ in variants)
    wanted_rows = f"SELECT {listed} FROM results WHERE variant IN ({marks}) LIMIT {MOST_ROWS}"
    found = connection.execute(wanted_rows, variants).fetchall()
    return [{c: _plain(v) for c, v in zip(chosen, row, strict=True)} for row in found]


def _stoi(connection: Any, variants: list[str], columns: list[str]) -> list[tuple[float, float]]:
    if not variants or "stoi_before" not in columns:
        return []
    found = connection.execute(
        "SELECT stoi_before, stoi FROM results WHERE variant = ? AND stoi_before IS NOT NULL AND stoi IS NOT NULL",
        variants,
    )
    return [(float(before), float(after)) for before, after in found.fetchall()]


def _plain(value: Any) -> Any:
    return None if isinstance(value, float) and not np.isfinite(value) else value


def _of_scenes(connection: Any, scenes: tuple[str, ...], columns: list[str]) -> dict[str, Floats]:
    """Reverberation time, level over the noise, and the smallest angle between two talkers of each scene."""
    index = {name: i for i, name in enumerate(scenes)}
    found = {column: np.full(len(scenes), np.nan) for column in SCENE_COLUMNS}
    for column in ("t20_s", "snr_db"):
        if column not in columns:
            continue
        for scene, value in connection.execute(f"SELECT scene, avg({column}) FROM results GROUP BY scene").fetchall():
            found[column][index[scene]] = np.nan if value is None else value
    if "azimuth_deg" in columns:
        listed = connection.execute(
            "SELECT scene, list(DISTINCT azimuth_deg) FROM (SELECT scene, talker, median(azimuth_deg) AS azimuth_deg "
            "FROM results WHERE azimuth_deg IS NOT NULL GROUP BY scene, talker) GROUP BY scene"
        ).fetchall()
        for scene, azimuths in listed:
            found["spacing_deg"][index[scene]] = _spacing(azimuths)
    return found


def _spacing(azimuth_deg: list[float]) -> float:
    """The smallest angle between neighbours around the array; NaN for one talker."""
    if len(azimuth_deg) < 2:
        return float("nan")
    around = np.sort(np.mod(azimuth_deg, 360.0))
    return float(np.diff(np.append(around, around[0] + 360.0)).min())
