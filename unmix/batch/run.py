"""The batch: a plan in, parts and tables out.

read the plan -> scenes x variants -> what is missing -> an engine does it, part by part -> results -> ranking
"""

from __future__ import annotations

import difflib
import time
from array import array
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

from unmix.batch.compare import Comparison, compare
from unmix.batch.feed import Outcome, Running
from unmix.batch.forecast import Forecast, check_many, forecast
from unmix.batch.items import MANY, Items, count_items, plan_items
from unmix.batch.local import LocalEngine
from unmix.batch.plan import Plan
from unmix.batch.ranking import Analysis, Metric, analyse
from unmix.batch.results import Written, figure_columns, write_results
from unmix.batch.scores import Scores, read_scores
from unmix.batch.store import Store
from unmix.cores import usable_cores
from unmix.errors import InputError
from unmix.files import path_from, write_json
from unmix.metrics.grades import FIGURES
from unmix.metrics.speech_figures import SPEECH_FIGURES

__all__ = ["BatchResult", "Engine", "Progress", "forecast_batch", "missing", "run_batch"]

RATE_OVER_S = 120.0
"""The rate is that of the last two minutes."""


class Engine(Protocol):
    """What does the work."""

    def run(self, pending: Sequence[int]) -> Iterator[list[Outcome]]:
        """Do items; yield what has ended."""

    def running(self) -> list[Running]:
        """What is in the works, the longest first."""


@dataclass
class Progress:
    """How far a batch is; `rate` in items per second, None until it is known."""

    total: int
    done: int = 0
    failures: int = 0
    rate: float | None = None
    slowest: Running | None = None
    _times: list[tuple[float, int]] = field(default_factory=list)

    def take(self, outcomes: Sequence[Outcome], running: Sequence[Running]) -> None:
        """Count what has ended."""
        self.done += len(outcomes)
        self.failures += sum(1 for outcome in outcomes if outcome.error is not None)
        self.slowest = running[0] if running else None
        now = time.monotonic()
        if outcomes or not self._times:
            self._times.append((now, self.done))
            while len(self._times) > 2 and now - self._times[1][0] > RATE_OVER_S:
                self._times.pop(0)
        since, before = self._times[0]
        if self.done > before and now > since:
            self.rate = (self.done - before) / (now - since)


@dataclass(frozen=True)
class BatchResult:
    """What a batch came to; `scene_files` are seen from its folder, `settings` are the variants' by name."""

    plan: Plan
    folder: Path
    items: int
    ran: int
    written: Written
    analysis: Analysis
    comparison: Comparison | None
    seconds: float
    scene_files: dict[str, str] = field(default_factory=dict)
    settings: dict[str, dict[str, Any]] = field(default_factory=dict)

    @property
    def in_part(self) -> bool:
        """Whether an item failed or is missing."""
        return bool(self.written.failures or self.written.missing)

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return {
            "title": self.plan.title,
            "folder": str(self.folder),
            "items": self.items,
            "ran": self.ran,
            "done": self.written.done,
            "failures": self.written.failures,
            "failed": self.written.failed,
            "missing": self.written.missing,
            "files": [path.name for path in self.written.files],
            "metrics": [{"name": m.name, "column": m.column} for m in self.analysis.metrics],
            "scene_files": self.scene_files,
            "settings": self.settings,
            **self.analysis.to_dict(),
            "comparison": None if self.comparison is None else self.comparison.to_dict(),
        }


def run_batch(
    plan_file: str | Path,
    out: str | Path,
    *,
    workers: int | None = None,
    cluster: str | None = None,
    yes: bool = False,
    retry: bool = False,
    earlier: str | Path | None = None,
    progress: Callable[[Progress], None] | None = None,
) -> BatchResult:
    """Run a plan into a folder; what lies there already is not done again.

    Parameters
    ----------
    plan_file, out : path
        The plan (TOML), and the folder for parts, rendered scenes and tables.
    workers : int, optional
        Processes on this machine; as many as it has cores by default. One BLAS thread each.
    cluster : str, optional
        Address of a dask scheduler to run on instead.
    yes : bool
        Run a plan of more than 5,000 items.
    retry : bool
        Do items again that failed for reasons of their own.
    earlier : path, optional
        Folder of an earlier batch to compare with.
    progress : optional
        Called with a `Progress` as items end.

    Raises
    ------
    FileError, InputError
        Naming file, key and remedy. What was finished before is kept.
    """
    began = time.monotonic()
    plan, items, scores = _planned(Path(plan_file), yes)
    metrics = _metrics(plan, items, scores, Path(plan_file))
    store = Store(out)
    store.open()
    pending = missing(items, store, retry=retry)
    if len(pending):
        _run(_engine(items, store, workers, cluster), pending, progress)
    written = write_results(items, store, scores)
    analysis = analyse(
        out, metrics, scenes=[s.name for s in items.scenes], variants=[v.name for v in items.variants], seed=plan.seed
    )
    comparison = None if earlier is None else compare(out, earlier, metrics, seed=plan.seed)
    result = BatchResult(
        plan,
        Path(out),
        len(items),
        len(pending),
        written,
        analysis,
        comparison,
        time.monotonic() - began,
        scene_files=_scene_files(items, store),
        settings={variant.name: variant.to_dict() for variant in items.variants},
    )
    write_json(Path(out) / "batch.json", result.to_dict(), overwrite=True)
    return result


def _scene_files(items: Items, store: Store) -> dict[str, str]:
    """Where each scene's file lies, seen from the batch's folder; scenes that were not rendered are left out."""
    found = ((scene.name, store.scene_path(scene)) for scene in items.scenes)
    return {name: str(path_from(store.folder, path)) for name, path in found if path is not None}


def forecast_batch(plan_file: str | Path, out: str | Path | None, *, workers: int | None = None) -> Forecast:
    """What the plan would take; nothing is run or written. Raises InputError or FileError for a plan that is wrong."""
    path = Path(plan_file)
    plan, items, scores = _planned(path, yes=True)
    _metrics(plan, items, scores, path)
    store = Store(out if out is not None else path.parent / "nowhere")
    return forecast(items, store, missing(items, store, retry=False), workers=workers or usable_cores())


def _planned(path: Path, yes: bool) -> tuple[Plan, Items, Scores]:
    plan = Plan.load(path)
    if not yes:
        check_many(count_items(plan, path.parent), MANY, str(path))
    items = plan_items(plan, path)
    scores = read_scores(
        plan.scores,
        path.parent,
        scenes=[s.name for s in items.scenes],
        variants=[v.name for v in items.variants],
        taken=list(figure_columns(items, Scores({}, {}))),
    )
    return plan, items, scores


def _metrics(plan: Plan, items: Items, scores: Scores, path: Path) -> tuple[Metric, ...]:
    """The plan's metrics, by the columns they stand in."""
    known = {name: Metric(name, f"{name}_gain") for name in (*FIGURES, *SPEECH_FIGURES)}
    known["leakage_alone_db"] = Metric("leakage_alone_db", "leakage_alone_db", higher_is_better=False)
    known |= {m.name: Metric(m.name, f"{m.name}_gain", m.higher_is_better) for m in items.metrics}
    known |= {name: Metric(name, name, higher) for name, higher in scores.columns.items()}
    for name in plan.metrics:
        if name not in known:
            near = difflib.get_close_matches(name, known, n=1)
            remedy = f"did you mean {near[0]!r}?" if near else f"there are {', '.join(known)}"
            raise InputError(f"{path}: key `metrics`: no figure is called {name!r}; {remedy}")
    return tuple(known[name] for name in dict.fromkeys(plan.metrics))


def missing(items: Items, store: Store, *, retry: bool) -> array[int]:
    """Indices of the items that have no whole part, or one that failed and may do better this time."""
    present = store.keys()
    todo = array("q")
    for index in items.distinct():
        key = items.key(index)
        part = store.read(key) if key in present else None
        if part is None or (part.error is not None and (part.passing or retry)):
            todo.append(index)
    return todo


def _engine(items: Items, store: Store, workers: int | None, cluster: str | None) -> Engine:
    if cluster is None:
        return LocalEngine(items, store, workers or usable_cores())
    from unmix.batch.cluster import ClusterEngine

    return ClusterEngine(items, store, cluster)


def _run(engine: Engine, pending: Sequence[int], report: Callable[[Progress], None] | None) -> None:
    progress = Progress(len(pending))
    for outcomes in engine.run(pending):
        progress.take(outcomes, engine.running())
        if report is not None:
            report(progress)
