"""The same batch on a dask scheduler: the same results, also when a worker dies in the middle of an item."""

from __future__ import annotations

import os
import signal
import threading
import time
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.batch.conftest import PLAN, rows_of, write_plan
from tests.batch.test_run import OWN, SLOW
from unmix.batch import cluster
from unmix.batch.run import BatchResult, Progress, run_batch
from unmix.errors import FileError, InputError, UnmixWarning

# What the library says of ports in use and of workers that are gone is no matter here.
pytestmark = pytest.mark.filterwarnings("ignore")


@pytest.fixture(scope="module")
def scheduler() -> Iterator[Any]:
    """A scheduler in this process and two worker processes of one thread each."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from distributed import LocalCluster

        with LocalCluster(n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None) as started:
            yield started


def test_the_same_results_with_a_worker_killed_in_the_middle(
    batch: tuple[Path, BatchResult], scheduler: Any, tmp_path: Path
) -> None:
    plan = write_plan(tmp_path, PLAN + OWN, own=SLOW.replace("0.1", "0.3"))
    scheduler.scheduler.allowed_failures = 0  # so that one death is one too many, unless it is raised
    killed: list[int] = []

    def kill_one(progress: Progress) -> None:
        if progress.done == 1 and not killed:
            [pid, _] = [worker.pid for worker in scheduler.workers.values()]
            killed.append(pid)
            threading.Timer(0.1, os.kill, (pid, signal.SIGKILL)).start()

    result = run_batch(plan, tmp_path / "out", cluster=scheduler.scheduler_address, progress=kill_one)
    assert killed and scheduler.scheduler.allowed_failures >= 100
    assert (result.ran, result.written.done, result.in_part) == (6, 6, False)
    others = ("item", "slow", "slow_before", "slow_gain")
    here = rows_of(batch[0].parent / "out")
    there = rows_of(tmp_path / "out")
    assert [{k: v for k, v in row.items() if k not in others} for row in there] == [
        {k: v for k, v in row.items() if k not in others} for row in here
    ]
    # No worker has seen the folder: it holds parts and tables, no scenes.
    assert not (tmp_path / "out" / "scenes").exists()
    assert run_batch(plan, tmp_path / "out", workers=1).ran == 0  # the same keys here and there


def test_failures_come_back_and_other_versions_are_refused(
    scheduler: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "bad.toml").write_text('base = "model"\n[solver]\nconstraint = "free"\n')
    plan = write_plan(tmp_path, PLAN.replace("[3, 4]", "[3]").replace('"delay-and-sum", "model"', '"bad.toml"'))
    result = run_batch(plan, tmp_path / "out", cluster=scheduler.scheduler_address)
    assert (result.written.done, list(result.written.failed)) == (1, ["spec/seed 3 x bad"])
    monkeypatch.setattr(cluster, "numerics_version", lambda: str(os.getpid()))  # another one in each process
    with pytest.raises(InputError, match="has another version of unmix; install the same there"):
        run_batch(plan, tmp_path / "again", cluster=scheduler.scheduler_address)


def test_a_scheduler_that_goes_away_and_has_no_workers(tmp_path: Path) -> None:
    from distributed import LocalCluster

    plan = write_plan(tmp_path)
    with LocalCluster(n_workers=0, processes=False, dashboard_address=None) as started:
        closing = threading.Timer(3.0, started.close)
        closing.start()
        with (
            pytest.warns(UnmixWarning, match="no worker is connected yet; waiting"),
            pytest.raises(
                FileError, match=r"the scheduler is gone .*; what was finished is kept: start it and run again"
            ),
        ):
            run_batch(plan, tmp_path / "out", cluster=started.scheduler_address)
        closing.join()  # two closings at once end in an error of the library's own
    assert run_batch(plan, tmp_path / "out", workers=1).ran == 6


def test_a_scheduler_that_does_not_answer(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cluster, "ANSWER_S", 0.5)
    plan = write_plan(tmp_path)
    began = time.monotonic()
    with pytest.raises(InputError, match=r"tcp://127\.0\.0\.1:9: no scheduler answers.*dask scheduler"):
        run_batch(plan, tmp_path / "out", cluster="tcp://127.0.0.1:9")
    assert time.monotonic() - began < 30.0
    with pytest.raises(InputError, match="no scheduler answers"):
        run_batch(plan, tmp_path / "out", cluster="nonsense")
