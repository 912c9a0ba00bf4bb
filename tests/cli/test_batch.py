"""`unmix batch`: tables for people, one object for scripts, exit status."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.batch.conftest import PLAN, inline, write_plan
from tests.cli.conftest import Run

__all__ = ["inline"]

pytestmark = pytest.mark.usefixtures("inline")


def test_from_plan_to_ranking(run: Run, tmp_path: Path) -> None:
    plan, out = write_plan(tmp_path), tmp_path / "out"
    dry = run("batch", plan, "--dry-run")
    assert dry.status == 0 and not out.exists()
    assert "2 scenes x 3 variants: 6 items, 0 of them done" in dry.out
    assert run("batch", plan, "--dry-run", "--json", "--out", out).json["todo"] == 6
    done = run("batch", plan, "--out", out)
    assert done.status == 0, done.err
    lines = [line.split() for line in done.out.splitlines()]
    ranks = [line[:2] for line in lines if line and line[0] == "1" and line[1] != "item"]
    assert [name for _, name in ranks] == ["model", "delay-and-sum", "reference-mic"]
    assert "model and delay-and-sum cannot be told apart on 2 scenes" in done.out
    assert "intervals hold the true mean in" in done.out
    again = run("batch", plan, "--out", out, "--json")
    assert (again.status, again.err) == (0, "")
    tree = again.json
    assert (tree["items"], tree["ran"], tree["done"], tree["failures"]) == (6, 0, 6, 0)
    assert tree["rankings"]["sir_db"]["variants"][0]["name"] == "model"
    assert "0 items" not in again.out and run("batch", plan, "--dry-run", "--out", out).out.count("6 of them done") == 1
    sql = "SELECT variant, count(*) AS rows, max(stoi) AS best FROM results GROUP BY variant ORDER BY best DESC"
    asked = run("batch", plan, "--out", out, "--query", sql, "--json").json
    assert asked["columns"] == ["variant", "rows", "best"] and asked["rows"][0][:2] == ["model", 4]
    assert "delay-and-sum" in run("batch", plan, "--out", out, "--query", sql).out
    compared = run("batch", plan, "--out", out, "--compare", out)
    assert compared.out.count("the same") == 6


def test_done_in_part(run: Run, tmp_path: Path) -> None:
    (tmp_path / "bad.toml").write_text('base = "model"\n[solver]\nconstraint = "free"\n')
    plan = write_plan(tmp_path, PLAN.replace('"delay-and-sum", "model"', '"bad.toml"').replace("[3, 4]", "[3]"))
    ran = run("batch", plan, "--out", tmp_path / "out")
    assert ran.status == 3
    assert "Failed: spec/seed 3 x bad: " in ran.out
    assert "One scene cannot tell variants apart" in ran.out
    tree = run("batch", plan, "--out", tmp_path / "out", "--json")
    assert tree.status == 3 and list(tree.json["failed"]) == ["spec/seed 3 x bad"]


def test_mistakes(run: Run, tmp_path: Path) -> None:
    plan = write_plan(tmp_path, PLAN.replace("metrics", "metrix"))
    wrong = run("batch", plan, "--out", tmp_path / "out", "--json")
    assert (wrong.status, wrong.out) == (1, "")
    assert "unknown key `metrix`" in wrong.err and "did you mean `metric" in wrong.err
    assert wrong.err.count("\n") == 1
    write_plan(tmp_path)
    many = write_plan(tmp_path, PLAN.replace("[3, 4]", "1000000"))
    refused = run("batch", many, "--out", tmp_path / "out")
    assert refused.status == 1 and "--yes" in refused.err and "3,000,000 items" in refused.err
    readonly = run("batch", write_plan(tmp_path), "--out", "/proc/unmix")
    assert readonly.status == 1 and "cannot be written" in readonly.err
    assert run("batch", plan).status == 2
    assert run("batch").status == 2
    assert run("batch", plan, "--out", tmp_path, "--workers", "2", "--cluster", "tcp://x:1").status == 2
    assert run("batch", plan, "--out", tmp_path, "--query", "SELECT 1").status == 1


def test_fields_are_explained(run: Run) -> None:
    fields = {field["key"]: field for field in run("batch", "--explain", "--json").json["fields"]}
    assert fields["render[].random_seats.least_apart_deg"]["unit"] == "deg"
    assert fields["metrics"]["meaning"] and fields["vary[].how"]["default"] == "'grid'"
    assert all(field["meaning"] for field in fields.values())
    assert "render[].snr_db" in run("batch", "--explain").out


def test_the_ranking_fits_a_terminal_of_80_columns(tmp_path: Path) -> None:
    from rich.console import Console

    from unmix.batch.run import run_batch
    from unmix.cli.batch_tables import ranking_table

    plan = write_plan(tmp_path, PLAN.replace('"sir_db", "stoi"', '"stoi", "sir_db", "sdr_db"'))
    analysis = run_batch(plan, tmp_path / "out").analysis
    console = Console(width=80, record=True, highlight=False)
    with console.capture() as captured:
        console.print(ranking_table(analysis, narrow=True))
    lines = captured.get().splitlines()
    assert max(map(len, lines)) <= 80
    [best] = [line for line in lines if "model" in line]
    assert best.count("[") == 1 and "…" not in best and best.split()[:2] == ["1", "model"]


def test_who_is_ahead_is_said_with_the_interval_and_its_certainty(tmp_path: Path) -> None:
    from tests.batch.test_results import make_results
    from unmix.batch.ranking import Metric, analyse
    from unmix.cli.batch_tables import ranking_lines

    rng = np.random.default_rng(8)
    gains = {"good": 0.3, "as good": 0.3, "bad": 0.1}
    scenes = [f"s{s}" for s in range(30)]
    noise = rng.normal(0.0, 0.02, (30, 3))
    rows = [
        f"('{scene}', '{name}', 'x', NULL, {gain + noise[s, v]})"
        for s, scene in enumerate(scenes)
        for v, (name, gain) in enumerate(gains.items())
    ]
    folder = make_results(tmp_path / "made-up", ", ".join(rows))
    lines = list(
        ranking_lines(analyse(folder, [Metric("stoi", "stoi_gain")], scenes=scenes, variants=list(gains), seed=0))
    )
    [ahead] = [line for line in lines if "is ahead of bad by" in line]
    assert "+0.20 [" in ahead or "+0.21 [" in ahead
    assert "(p < 0.001, effect size" in ahead
    assert any("cannot be told apart on 30 scenes" in line for line in lines)
