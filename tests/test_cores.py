"""Threads of one's own: bounded by the environment, one in every worker of a batch."""

from __future__ import annotations

import pytest

from unmix.batch.local import _one_thread
from unmix.cores import THREADS_VARIABLE, usable_cores, usable_threads
from unmix.room.bands import Bands


@pytest.mark.parametrize(("said", "threads"), [("1", 1), ("3", 3), ("0", None), ("", None), ("many", None)])
def test_the_environment_bounds_the_threads(monkeypatch: pytest.MonkeyPatch, said: str, threads: int | None) -> None:
    monkeypatch.setenv(THREADS_VARIABLE, said)
    assert usable_threads() == (threads or usable_cores())


def test_a_worker_of_a_batch_has_one_thread(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(THREADS_VARIABLE, "5")
    assert Bands(512).workers == 5
    with _one_thread():
        assert Bands(512).workers == 1
    assert Bands(512).workers == 5
