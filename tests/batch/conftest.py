"""A small plan: two rendered scenes of two seconds, cheap variants, and a batch of it that nothing disturbed."""

from __future__ import annotations

import csv
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path

import pytest

from tests.conftest import SPEECH
from unmix.batch.feed import Feed, Outcome, Running
from unmix.batch.items import Items
from unmix.batch.local import _answer
from unmix.batch.results import MEASURED_COLUMNS
from unmix.batch.run import BatchResult, run_batch
from unmix.batch.store import Part, Store, encode_part

SPEC = f"""
duration_s = 2.0
[array]
positions_m = [[0, 0, 0], [0.04, 0, 0], [0, 0.04, 0], [-0.04, 0, 0], [0, -0.04, 0]]
[[talker]]
name = "mate"
clip = "{SPEECH / "novel-reader.flac"}"
azimuth_deg = 20.0
[[talker]]
name = "pilot"
clip = "{SPEECH / "card-reader.flac"}"
azimuth_deg = 110.0
[noise]
sensor_snr_db = 30.0
"""
PLAN = """
title = "Small"
variants = ["reference-mic", "delay-and-sum", "model"]
metrics = ["sir_db", "stoi"]
[[render]]
spec = "spec.toml"
seeds = [3, 4]
random_seats = {}
"""
Write = Callable[..., Path]
Rows = list[dict[str, str]]


def write_plan(folder: Path, plan: str = PLAN, **files: str) -> Path:
    """The plan in a folder of its own, with the spec and other files by stem (`own="..."` is own.py)."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "spec.toml").write_text(SPEC)
    for stem, text in files.items():
        (folder / f"{stem}.py").write_text(text)
    (folder / "plan.toml").write_text(plan)
    return folder / "plan.toml"


def rows_of(folder: Path, *, without: tuple[str, ...] = MEASURED_COLUMNS) -> Rows:
    """The results' rows, without the columns that differ from run to run."""
    with (folder / "results.csv").open(newline="") as stream:
        return [{k: v for k, v in row.items() if k not in without} for row in csv.DictReader(stream)]


@pytest.fixture(scope="session")
def batch(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, BatchResult]:
    """A plan and its batch, run once by one worker; not to be changed."""
    plan = write_plan(tmp_path_factory.mktemp("batch"))
    return plan, run_batch(plan, plan.parent / "out", workers=1)


class Inline:
    """An engine without processes, which take a second to start: for tests of what comes out."""

    def __init__(self, items: Items, store: Store) -> None:
        self._items, self._store = items, store

    def run(self, pending: Sequence[int]) -> Iterator[list[Outcome]]:
        """Do items one by one, each as a worker would."""
        from unmix.batch.feed import task_of

        feed = Feed(self._items, pending, self._store)
        while (job := feed.next(None, set())) is not None:
            if job.item is not None:
                kind, said = _answer(self._store, "item", task_of(self._items, job.item, feed.path(job.scene)))
                assert kind == "done"
                yield [Outcome(job.item, said)]
                continue
            _, said = _answer(self._store, "render", self._items.scenes[job.scene])
            if not isinstance(said, Part):
                feed.rendered(job.scene, said)
                continue
            lost = feed.unrendered(job.scene)
            for index in lost:
                self._store.write(self._items.key(index), encode_part(said))
            yield [Outcome(index, said.error) for index in lost]

    def running(self) -> list[Running]:
        """Nothing while somebody looks."""
        return []


@pytest.fixture
def inline(monkeypatch: pytest.MonkeyPatch) -> None:
    """Have batches run in this process."""
    monkeypatch.setattr("unmix.batch.run._engine", lambda items, store, workers, cluster: Inline(items, store))
