"""Batches: how long 24 scenes x 8 variants take, what kill -9 costs, two workers over one, a million items.

    python benchmarks/batch.py [--only night|kills|workers|million] [--seconds 10]

The million items, which fill a disk with as many small files, are simulated only when asked for.
Workers run with one BLAS thread each. Figures depend on what else the machine is doing.
"""

from __future__ import annotations

import argparse
import csv
import os
import random
import resource
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from common import SPEECH, print_table

from unmix.batch.results import MEASURED_COLUMNS

POSITIONS = "[[0, 0, 0], [0.04, 0, 0], [0.02, 0.0346, 0], [-0.02, 0.0346, 0], [-0.04, 0, 0], [-0.02, -0.0346, 0]]"
SPEC = """
duration_s = {seconds}
[room]
size_m = [6.0, 4.5, 2.8]
t20_s = 0.3
[array]
positions_m = {positions}
[noise]
sensor_snr_db = 30.0
{talkers}
"""
VOICES = ("novel-reader", "card-reader", "arctic-a0007")
PRESETS = (
    "reference-mic", "delay-and-sum", "minimum-variance", "linear-constraint", "model", "dereverb", "refined", "full"
)  # fmt: skip
PLAN = """
title = "24 scenes x 8 variants"
variants = {variants}
metrics = ["stoi", "sir_db", "sdr_db"]
[[render]]
spec = "two.toml"
seeds = {seeds}
random_seats = {{}}
rooms = [{{ name = "dry", t20_s = 0.2 }}, {{ name = "live", t20_s = 0.4 }}]
[[render]]
spec = "three.toml"
seeds = {seeds}
random_seats = {{}}
rooms = [{{ name = "dry", t20_s = 0.2 }}, {{ name = "live", t20_s = 0.4 }}]
"""


def write_plan(folder: Path, seconds: float, *, seeds: int = 6, variants: tuple[str, ...] = PRESETS) -> Path:
    """Scenes of two and of three talkers, in two rooms, with seats drawn from seeds."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, count in (("two", 2), ("three", 3)):
        talkers = "".join(
            f'[[talker]]\nname = "{voice}"\nclip = "{SPEECH / voice}.flac"\nloop = true\nazimuth_deg = {90 * i}\n'
            "distance_m = 1.2\n"
            for i, voice in enumerate(VOICES[:count])
        )
        (folder / f"{name}.toml").write_text(SPEC.format(seconds=seconds, positions=POSITIONS, talkers=talkers))
    names = "[" + ", ".join(f'"{variant}"' for variant in variants) + "]"
    (folder / "plan.toml").write_text(PLAN.format(seeds=list(range(4001, 4001 + seeds)), variants=names))
    return folder / "plan.toml"


def start(plan: Path, out: Path, workers: int) -> subprocess.Popen[bytes]:
    """The command, in a process group of its own."""
    code = "from unmix.cli import main; main()"
    command = [sys.executable, "-c", code, "batch", str(plan), "--out", str(out), "--workers", str(workers), "--json"]
    return subprocess.Popen(command, stdout=subprocess.DEVNULL, start_new_session=True)


def run(plan: Path, out: Path, workers: int) -> float:
    """Run to the end; seconds."""
    began = time.perf_counter()
    status = start(plan, out, workers).wait()
    if status not in (0, 3):
        raise SystemExit(f"the batch ended with {status}")
    return time.perf_counter() - began


def table(out: Path) -> list[dict[str, str]]:
    """The results' rows without times and memory."""
    with (out / "results.csv").open(newline="") as stream:
        return [{k: v for k, v in row.items() if k not in MEASURED_COLUMNS} for row in csv.DictReader(stream)]


def night(folder: Path, seconds: float) -> list[list[object]]:
    """The whole plan on two workers."""
    took = run(write_plan(folder / "night", seconds), folder / "night" / "out", 2)
    rows = table(folder / "night" / "out")
    failed = sum(bool(row["error"]) for row in rows)
    return [[f"24 scenes of {seconds:g} s x 8 variants, 2 workers", f"{took / 60:.1f} min", f"{failed} failed"]]


def kills(folder: Path, seconds: float) -> list[list[object]]:
    """Three kills at moments drawn from a seed; the table against that of an undisturbed run."""
    plan = write_plan(folder / "kills", min(seconds, 3.0))
    undisturbed = run(plan, folder / "kills" / "whole", 2)
    draw, out = random.Random(7), folder / "kills" / "out"
    lost = []
    for _ in range(3):
        process = start(plan, out, 2)
        time.sleep(draw.uniform(0.1, 0.3) * undisturbed)
        os.killpg(process.pid, signal.SIGKILL)
        process.wait()
        lost.append(len(list(out.glob("parts/*/[!.]*.part"))))
    rest = run(plan, out, 2)
    same = table(out) == table(folder / "kills" / "whole")
    return [
        ["24 x 8 at 3 s, undisturbed", f"{undisturbed:.0f} s", ""],
        ["the same killed three times, then finished", f"{rest:.0f} s for the rest", f"parts before each: {lost}"],
        ["its table against the undisturbed one", "identical" if same else "DIFFERENT", ""],
    ]


def workers(folder: Path, seconds: float) -> list[list[object]]:
    """One worker, then two, on the same plan, the scenes being rendered in both."""
    plan = write_plan(folder / "workers", seconds, seeds=2, variants=("model", "refined", "full"))
    one = run(plan, folder / "workers" / "one", 1)
    two = run(plan, folder / "workers" / "two", 2)
    return [
        [
            f"8 scenes x 3 variants at {seconds:g} s: 1 worker, 2 workers",
            f"{one:.0f} s, {two:.0f} s",
            f"{one / two:.2f} x",
        ]
    ]


_MILLION = """
import resource, sys, time
from pathlib import Path
import numpy as np
from unmix.batch.items import plan_items
from unmix.batch.plan import Plan
from unmix.batch.ranking import Metric, analyse
from unmix.batch.results import write_results
from unmix.batch.run import missing
from unmix.batch.scores import Scores
from unmix.batch.store import Part, Store, encode_part
from unmix.metrics.grades import FIGURES
from unmix.batch.rows import PARTS_OF_A_GRADE

path, out = Path(sys.argv[1]), Path(sys.argv[2])
clock = time.perf_counter()
def lap(what):
    global clock
    now = time.perf_counter()
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{what}\\t{now - clock:.1f}\\t{peak:.0f}", flush=True)
    clock = time.perf_counter()

items = plan_items(Plan.load(path), path)
store = Store(out)
store.open()
lap("plan")
pending = missing(items, store, retry=False)
assert len(pending) == len(items)
lap("what is missing, of nothing")
rng = np.random.default_rng(1)
columns = [f"{figure}{ending}" for figure in FIGURES for ending in PARTS_OF_A_GRADE]
gains = rng.normal(0.2, 0.05, len(items.variants))
scenes = rng.normal(0.0, 0.05, len(items.scenes))
for index in pending:
    s, v = items.place(index)
    noise = rng.normal(0, 0.02, (2, len(columns)))
    talkers = [
        {"talker": name} | {c: gains[v] + scenes[s] + x for c, x in zip(columns, row)} for name, row in zip("ab", noise)
    ]
    body = encode_part(Part(item={"solve_time_s": 1.0, "real_time_factor": 0.1, "latency_ms": 8.0}, talkers=talkers))
    # Written as the store lays them out, without the renaming that only a running batch needs.
    part = store.path(items.key(index))
    part.parent.mkdir(exist_ok=True)
    part.write_bytes(body)
lap("(writing made-up parts)")
assert len(missing(items, store, retry=False)) == 0
lap("what is missing, of all")
write_results(items, store, Scores({}, {}))
lap("tables")
analyse(out, [Metric("stoi", "stoi_gain"), Metric("sir_db", "sir_db_gain")], scenes=[s.name for s in items.scenes],
        variants=[v.name for v in items.variants], seed=0)
lap("ranking")
"""


def million(folder: Path, scenes: int, variants: int) -> list[list[object]]:
    """A simulated plan: made-up parts, everything else as it is."""
    place = folder / f"simulated-{scenes}-{variants}"
    plan = write_plan(place, 10.0)
    values = [f"{1e-6 * 1.01**k:.6e}" for k in range(variants)]
    plan.write_text(
        f'[[render]]\nspec = "two.toml"\nseeds = {scenes}\nrandom_seats = {{}}\n'
        f'[[vary]]\nbase = "model"\nfields = {{ "solver.prior_weight" = [{", ".join(values)}] }}\n'
    )
    done = subprocess.run(
        [sys.executable, "-c", _MILLION, str(plan), str(place / "out")], stdout=subprocess.PIPE, text=True, check=True
    )
    rows: list[list[object]] = []
    for line in done.stdout.splitlines():
        what, seconds, peak = line.split("\t")
        rows.append([f"{scenes * variants:,} items: {what}", f"{seconds} s", f"peak so far {int(peak):,} MB"])
    return rows


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--only", choices=["night", "kills", "workers", "million"])
    parser.add_argument("--seconds", type=float, default=10.0)
    parser.add_argument("--items", type=int, default=1000, help="scenes, and variants, of the simulated plan")
    given = parser.parse_args()
    rows: list[list[object]] = []
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for job in (night, kills, workers):
            if given.only in (None, job.__name__):
                rows += job(folder, given.seconds)
        if given.only == "million":
            rows += million(folder, given.items // 4, given.items)
            rows += million(folder, given.items, given.items)
    load = os.getloadavg()[1] if hasattr(os, "getloadavg") else float("nan")
    print_table(f"Batches ({os.cpu_count()} cores, load {load:.1f})", ["case", "time", "figure"], rows)


if __name__ == "__main__":
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    main()
