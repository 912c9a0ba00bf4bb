"""Running: killed, resumed, twice at once, with items that fail; the table at the end is the same."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from tests.batch.conftest import PLAN, SPEC, Inline, rows_of, write_plan
from tests.conftest import SPEECH, delayed, speech
from unmix.array import Array
from unmix.audio import write_audio
from unmix.batch.feed import task_of
from unmix.batch.items import plan_items
from unmix.batch.local import _answer
from unmix.batch.plan import Plan
from unmix.batch.results import MEASURED_COLUMNS, query
from unmix.batch.run import BatchResult, Progress, run_batch
from unmix.batch.store import Part, Store
from unmix.errors import FileError, InputError
from unmix.model.delays import paths_from_bearings

SLOW = """
import time
def slow(estimate, reference, sample_rate):
    time.sleep(0.1)
    return float(abs(estimate).max())
"""
OWN = '\n[[metric]]\nname = "slow"\nfile = "own.py"\n'


def start(plan: Path, out: Path, workers: int = 1) -> subprocess.Popen[bytes]:
    """The command in a process group of its own."""
    code = "from unmix.cli import main; main()"
    command = [sys.executable, "-c", code, "batch", str(plan), "--out", str(out), "--workers", str(workers), "--json"]
    return subprocess.Popen(
        command,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        start_new_session=True,
        # Where the tests run in the background, the interrupt is ignored, and so it would be in what they start.
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
    )


def parts(out: Path) -> int:
    return len(list(out.glob("parts/*/[!.]*.part")))


def wait_for_parts(process: subprocess.Popen[bytes], out: Path, count: int) -> None:
    until = time.monotonic() + 60.0
    while parts(out) < count:
        assert process.poll() is None, process.communicate()[1].decode()
        assert time.monotonic() < until
        time.sleep(0.01)


def test_a_batch_has_a_row_for_every_talker_scene_and_variant(batch: tuple[Path, BatchResult]) -> None:
    plan, result = batch
    assert (result.items, result.ran, result.written.done, result.in_part) == (6, 6, 6, False)
    rows = rows_of(plan.parent / "out", without=())
    assert [(r["scene"], r["variant"], r["talker"]) for r in rows] == [
        (f"spec/seed {seed}", variant, talker)
        for seed in (3, 4)
        for variant in ("reference-mic", "delay-and-sum", "model")
        for talker in ("mate", "pilot")
    ]
    for row in rows:
        assert row["error"] == "" and row["seed"] in ("3", "4") and row["separator"]
        assert float(row["solve_time_s"]) > 0.0 and float(row["peak_memory_mb"]) > 50.0
        assert float(row["stoi"]) - float(row["stoi_before"]) == pytest.approx(float(row["stoi_gain"]), abs=1e-12)
        assert (row["variant"] == "model") == (float(row["sir_db_gain"]) > 20.0)
    ranking = result.analysis.rankings["sir_db"].variants
    assert [v.name for v in ranking] == ["model", "delay-and-sum", "reference-mic"]
    assert ranking[0].interval.scenes == 2


def test_running_again_does_nothing_and_a_half_part_only_itself(
    batch: tuple[Path, BatchResult], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    plan, _ = batch
    expected = rows_of(plan.parent / "out")
    out = tmp_path / "out"
    assert run_batch(plan, out, workers=2).ran == 6
    assert rows_of(out) == expected  # whatever the number of workers
    monkeypatch.setattr("unmix.batch.run._engine", lambda items, store, workers, cluster: Inline(items, store))
    [victim, *_] = sorted(out.glob("parts/*/*.part"))
    victim.write_bytes(victim.read_bytes()[:100])
    assert run_batch(plan, out).ran == 1
    assert rows_of(out) == expected
    assert run_batch(plan, out).ran == 0


REAL = """
[recording]
file = "mix.wav"
[array]
positions_m = [[0, 0, 0], [0.04, 0, 0], [0, 0.04, 0]]
[[talker]]
name = "mate"
azimuth_deg = 20.0
active_s = [[0.0, 2.0]]
[[talker]]
name = "pilot"
azimuth_deg = 110.0
active_s = [[1.0, 4.0]]
"""


@pytest.mark.usefixtures("inline")
def test_recordings_without_references_are_ranked_by_leakage_alone(tmp_path: Path) -> None:
    plan = write_plan(
        tmp_path, 'scenes = ["take.toml"]\nvariants = ["reference-mic", "model"]\nmetrics = ["leakage_alone_db"]\n'
    )
    (tmp_path / "take.toml").write_text(REAL)
    paths = paths_from_bearings(Array.from_positions([[0, 0, 0], [0.04, 0, 0], [0, 0.04, 0]]), np.radians([20, 110]))
    talkers = np.array([speech("novel-reader", 4.0), speech("card-reader", 4.0)])
    talkers[0, 2 * 16000 :] = talkers[1, :16000] = 0.0
    write_audio(tmp_path / "mix.wav", delayed(talkers, paths, 16000).sum(axis=0), 16000)
    result = run_batch(plan, tmp_path / "out")
    assert not result.in_part
    rows = rows_of(tmp_path / "out")
    assert [(r["talker"], r["sdr_db"], r["undefined"]) for r in rows[:2]] == [
        ("mate", "", "the talkers have no references"),
        ("pilot", "", "the talkers have no references"),
    ]
    assert [float(r["leakage_alone_db"]) for r in rows[:2]] == [0.0, 0.0]  # the same microphone for both
    assert [v.name for v in result.analysis.rankings["leakage_alone_db"].variants] == ["model", "reference-mic"]
    assert max(float(r["leakage_alone_db"]) for r in rows[2:]) < -20.0


def test_killed_and_run_again(batch: tuple[Path, BatchResult], tmp_path: Path) -> None:
    plan = write_plan(tmp_path, PLAN + OWN, own=SLOW)
    out = tmp_path / "out"
    process = start(plan, out, workers=2)
    wait_for_parts(process, out, 3)
    os.killpg(process.pid, signal.SIGKILL)
    process.communicate()
    # With the group its workers are dead, too; what each was at is lost, no more.
    assert parts(out) >= 3
    left = 6 - parts(out)
    result = run_batch(plan, out, workers=1)
    assert result.ran == left and not result.in_part
    own = (*MEASURED_COLUMNS, "item", "slow", "slow_before", "slow_gain")
    assert rows_of(out, without=own) == rows_of(batch[0].parent / "out", without=own)


def test_two_runs_in_one_folder_and_an_interrupted_one(tmp_path: Path) -> None:
    plan = write_plan(tmp_path, PLAN + OWN, own=SLOW)
    out = tmp_path / "out"
    interrupted = start(plan, out)
    wait_for_parts(interrupted, out, 1)
    os.killpg(interrupted.pid, signal.SIGINT)  # as the terminal does it: to all at once
    said = interrupted.communicate()[1].decode()
    assert interrupted.returncode == 130 and "Traceback" not in said
    both = [start(plan, out) for _ in range(2)]
    for process in both:
        said = process.communicate()[1].decode()
        assert process.returncode == 0, said
    rows = rows_of(out)
    assert len(rows) == 12 and not any(row["error"] for row in rows)
    assert parts(out) == 6
    assert run_batch(plan, out, workers=1).ran == 0


DEADLY = """
import os, pathlib, signal
def own(estimate, reference, sample_rate):
    mark = pathlib.Path(__file__).with_name("mark")
    if not mark.exists():
        mark.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return 1.0
"""


def test_a_killed_worker_is_replaced(tmp_path: Path) -> None:
    plan = write_plan(tmp_path, PLAN + OWN.replace("slow", "own"), own=DEADLY)
    result = run_batch(plan, tmp_path / "out", workers=2)
    assert result.written.done == 6 and (tmp_path / "mark").exists()


ALWAYS = """
import os, signal
def own(estimate, reference, sample_rate):
    os.kill(os.getpid(), signal.SIGKILL)
"""


def test_an_item_that_kills_its_workers_is_given_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("unmix.batch.local.MOST_DEATHS", 2)
    one = PLAN.replace("[3, 4]", "[3]").replace('"reference-mic", "delay-and-sum", ', "")
    plan = write_plan(tmp_path, one + OWN.replace("slow", "own"), own=ALWAYS)
    result = run_batch(plan, tmp_path / "out", workers=1)
    assert result.in_part
    assert "died 2 times" in result.written.failed["spec/seed 3 x model"]


@pytest.mark.usefixtures("inline")
def test_a_failing_item_is_a_row_with_its_error(tmp_path: Path) -> None:
    (tmp_path / "bad.toml").write_text('base = "model"\n[solver]\nconstraint = "free"\n')
    plan = write_plan(tmp_path, PLAN.replace('"delay-and-sum"', '"bad.toml"'))
    seen: list[Progress] = []
    result = run_batch(plan, tmp_path / "out", workers=1, progress=seen.append)
    assert result.in_part and (result.written.done, result.written.failures) == (4, 2)
    assert seen[-1].done == 6 and seen[-1].failures == 2 and seen[-1].rate is not None
    failed = [row for row in rows_of(tmp_path / "out") if row["error"]]
    assert [(row["scene"], row["variant"], row["talker"]) for row in failed] == [
        ("spec/seed 3", "bad", ""),
        ("spec/seed 4", "bad", ""),
    ]
    assert failed[0]["error"] == result.written.failed["spec/seed 3 x bad"]
    assert result.analysis.costs["bad"].failures == 2
    assert [v.name for v in result.analysis.rankings["sir_db"].variants] == ["model", "reference-mic", "bad"]
    # It would fail again, so it is done again only when asked for.
    assert run_batch(plan, tmp_path / "out", workers=1).ran == 0
    assert run_batch(plan, tmp_path / "out", workers=1, retry=True).ran == 2


@pytest.mark.usefixtures("inline")
def test_a_scene_that_cannot_be_rendered_fails_its_items(tmp_path: Path) -> None:
    rooms = 'rooms = [{ name = "tiny", size_m = [1.0, 1.0, 1.0], t20_s = 0.2 }]'
    rooms += '\nseats = [{ name = "far", azimuth_deg = [0, 90], distance_m = [9, 9] }]'
    plan = write_plan(tmp_path, PLAN.replace("random_seats = {}", rooms).replace("[3, 4]", "[3]"))
    result = run_batch(plan, tmp_path / "out", workers=1)
    assert result.written.failures == 3
    assert all("outside the room" in why for why in result.written.failed.values())


def test_a_full_disk_ends_the_batch_with_nothing_lost(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The answer of a worker whose scene cannot be written, and a part that cannot be: the same, in its words."""
    plan = write_plan(tmp_path)
    items = plan_items(Plan.load(plan), plan)
    store = Store(tmp_path / "out")
    store.open()

    def full(*_: object, **__: object) -> None:
        raise FileError("mix.wav: cannot be written (No space left on device); is the disk full?")

    monkeypatch.setattr("unmix.batch.store.render_source", full)
    kind, said = _answer(store, "render", items.scenes[0])
    assert kind == "rendered" and isinstance(said, Part) and said.passing
    monkeypatch.setattr("shutil.disk_usage", lambda path: SimpleNamespace(free=1e6))
    kind, said = _answer(store, "render", items.scenes[0])
    assert kind == "unwritable" and "the disk is full (1 MB left)" in said
    assert not list((tmp_path / "out" / "scenes").iterdir())
    monkeypatch.undo()
    task = task_of(items, 0, str(store.render(items.scenes[0])))
    monkeypatch.setattr(Store, "write", full)
    kind, said = _answer(store, "item", task)
    assert kind == "unwritable" and "is the disk full" in said


TOUCHING = """
import os, pathlib
def own(estimate, reference, sample_rate):
    clip = pathlib.Path(__file__).with_name("clip.flac")
    ACT
    return 1.0
"""


@pytest.mark.usefixtures("inline")
def test_a_file_that_changes_under_the_run(tmp_path: Path) -> None:
    one = PLAN.replace("[3, 4]", "[3]").replace('"reference-mic", "delay-and-sum", ', "")
    plan = write_plan(tmp_path, one + OWN.replace("slow", "own"), own=TOUCHING.replace("ACT", "clip.write_bytes(b'')"))
    (tmp_path / "clip.flac").write_bytes((SPEECH / "novel-reader.flac").read_bytes())
    (tmp_path / "spec.toml").write_text(SPEC.replace(str(SPEECH / "novel-reader.flac"), "clip.flac"))
    result = run_batch(plan, tmp_path / "out", workers=1)
    assert "clip.flac: changed while the batch was running" in result.written.failed["spec/seed 3 x model"]
    # A file that was only touched, as a copy on another machine is, has not changed.
    (tmp_path / "clip.flac").write_bytes((SPEECH / "novel-reader.flac").read_bytes())
    (tmp_path / "own.py").write_text(TOUCHING.replace("ACT", "os.utime(clip)"))
    assert not run_batch(plan, tmp_path / "out", workers=1).in_part


RAISING = "def own(estimate, reference, sample_rate):\n    raise KeyError('no such word')\n"


@pytest.mark.usefixtures("inline")
def test_own_metrics_that_are_wrong(tmp_path: Path) -> None:
    own = OWN.replace("slow", "own")
    plan = write_plan(tmp_path, PLAN + own, own="def other(): pass")
    with pytest.raises(InputError, match=r"own\.py: holds no function 'own'"):
        run_batch(plan, tmp_path / "out")
    (tmp_path / "own.py").write_text("import no_such_module")
    with pytest.raises(InputError, match=r"own\.py: cannot be loaded: ModuleNotFoundError"):
        run_batch(plan, tmp_path / "out")
    one = PLAN.replace("[3, 4]", "[3]").replace('"reference-mic", "delay-and-sum", ', "")
    plan = write_plan(tmp_path, one + own, own=RAISING)
    result = run_batch(plan, tmp_path / "out", workers=1)
    assert result.written.failed["spec/seed 3 x model"] == "KeyError: 'no such word'"


@pytest.mark.usefixtures("inline")
def test_own_metrics_rank(tmp_path: Path) -> None:
    text = (
        "import numpy as np\ndef distance(e, r, rate):\n    return float(np.linalg.norm(e - r) / np.linalg.norm(r))\n"
    )
    table = '\n[[metric]]\nname = "distance"\nfile = "own.py"\nhigher_is_better = false\n'
    plan = write_plan(tmp_path, PLAN.replace('["sir_db", "stoi"]', '["distance"]') + table, own=text)
    result = run_batch(plan, tmp_path / "out", workers=1)
    ranking = result.analysis.rankings["distance"]
    assert not ranking.higher_is_better
    assert ranking.variants[0].name == "model" and ranking.variants[-1].name == "reference-mic"
    columns, [row] = query(
        tmp_path / "out", "SELECT avg(distance), avg(distance_before) FROM results WHERE variant = 'model'"
    )
    assert len(columns) == 2 and row[0] < 0.1 * row[1]
