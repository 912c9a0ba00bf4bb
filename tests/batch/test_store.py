"""The store: whole or not there, whoever dies and whoever else is at work."""

from __future__ import annotations

import errno
import os
import threading
import time
from pathlib import Path

import numpy as np
import pytest

from tests.batch.conftest import write_plan
from unmix.batch.items import plan_items
from unmix.batch.plan import Plan
from unmix.batch.store import FORGOTTEN_S, Part, Store, encode_part
from unmix.errors import FileError

KEY = "ab" * 16


def test_parts_come_back_as_they_went(tmp_path: Path) -> None:
    store = Store(tmp_path)
    store.open()
    part = Part(item={"method": "x"}, talkers=[{"talker": "mate", "stoi": 0.1 + 0.2, "sdr_db": None}])
    assert store.read(KEY) is None
    store.write(KEY, encode_part(part))
    assert store.read(KEY) == part
    assert store.keys() == {KEY}
    store.write(KEY, encode_part(Part(talkers=[{"stoi": np.float64(0.5), "sdr_db": float("nan")}])))
    assert store.read(KEY) == Part(talkers=[{"stoi": 0.5, "sdr_db": None}])


@pytest.mark.parametrize("share", [0.0, 0.2, 0.5, 0.99])
def test_a_part_cut_short_is_not_there(tmp_path: Path, share: float) -> None:
    store = Store(tmp_path)
    store.write(KEY, encode_part(Part(talkers=[{"talker": "mate"}])))
    whole = store.path(KEY).read_bytes()
    store.path(KEY).write_bytes(whole[: int(share * len(whole))])
    assert store.read(KEY) is None
    store.path(KEY).write_bytes(whole[:-3] + b"xyz")
    assert store.read(KEY) is None


def test_many_writers_of_one_part(tmp_path: Path) -> None:
    store = Store(tmp_path)
    parts = [encode_part(Part(item={"n": n, "pad": "x" * 20000})) for n in range(4)]
    stop = time.monotonic() + 0.5
    torn: list[object] = []

    def write(part: bytes) -> None:
        while time.monotonic() < stop:
            store.write(KEY, part)

    store.write(KEY, parts[0])
    threads = [threading.Thread(target=write, args=(part,)) for part in parts]
    for thread in threads:
        thread.start()
    while time.monotonic() < stop:
        if store.read(KEY) is None:
            torn.append(1)
    for thread in threads:
        thread.join()
    assert not torn
    assert [p.name for p in store.path(KEY).parent.iterdir()] == [f"{KEY}.part"]


def test_what_killed_runs_left_is_cleared_when_old(tmp_path: Path) -> None:
    store = Store(tmp_path)
    store.write(KEY, encode_part(Part()))
    old, new = (store.path(KEY).parent / f".{name}" for name in ("old.part", "new.part"))
    for path in (old, new):
        path.write_bytes(b"half")
    past = time.time() - 2 * FORGOTTEN_S
    os.utime(old, (past, past))
    store.open()
    assert not old.exists() and new.exists()


def test_places_that_cannot_be_written(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(FileError, match=r"/proc/unmix: cannot be written"):
        Store("/proc/unmix").open()
    (tmp_path / "file").write_text("")
    with pytest.raises(FileError, match="file: cannot be written"):
        Store(tmp_path / "file").open()
    store = Store(tmp_path)
    store.write(KEY, encode_part(Part()))

    def full(self: Path, data: bytes) -> int:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(FileError, match=r"No space left on device.*is the disk full"):
        store.write(KEY, encode_part(Part(error="other")))
    assert store.read(KEY) == Part()


def test_a_rendered_scene_is_whole_or_not_there(tmp_path: Path) -> None:
    path = write_plan(tmp_path)
    source = plan_items(Plan.load(path), path).scenes[0]
    store = Store(tmp_path / "out")
    assert store.scene_path(source) is None
    scene = store.render(source)
    before = scene.stat().st_mtime_ns
    assert store.render(source) == scene == store.scene_path(source)
    assert scene.stat().st_mtime_ns == before  # rendered once
    mix = scene.parent / "mix.wav"
    mix.write_bytes(mix.read_bytes()[:1000])
    assert store.scene_path(source) is None
    assert store.render(source) == scene == store.scene_path(source)
    assert mix.stat().st_size > 1000
    assert [p.name for p in scene.parent.parent.iterdir()] == [source.digest]
