"""Results, rankings, comparisons and scores from outside."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.batch.conftest import PLAN, rows_of, write_plan
from unmix.batch.compare import compare
from unmix.batch.items import plan_items
from unmix.batch.plan import Plan
from unmix.batch.ranking import Metric, analyse, table_of
from unmix.batch.results import open_results, query, write_results
from unmix.batch.run import BatchResult, run_batch
from unmix.batch.scores import Scores
from unmix.batch.store import Store
from unmix.errors import FileError, InputError

SIR = Metric("sir_db", "sir_db_gain")


def test_parquet_and_csv_hold_the_same_and_answer_sql(batch: tuple[Path, BatchResult]) -> None:
    folder = batch[0].parent / "out"
    columns, rows = query(folder, "SELECT scene, variant, talker, stoi FROM results")
    assert columns == ["scene", "variant", "talker", "stoi"]
    csv = rows_of(folder)
    assert [(r["scene"], r["variant"], r["talker"], float(r["stoi"])) for r in csv] == rows
    assert query(folder, "SELECT DISTINCT model_order FROM results WHERE variant = 'model'")[1] == [(8,)]
    with pytest.raises(InputError, match=r"the query does not work: .*nonsense"):
        query(folder, "SELECT nonsense FROM results")
    with pytest.raises(FileError, match="run the batch first"):
        query(folder / "nowhere", "SELECT 1")


def make_results(folder: Path, rows: str) -> Path:
    """A results table of made-up figures: scene, variant, talker, error, stoi_gain."""
    import duckdb

    folder.mkdir(exist_ok=True)
    duckdb.sql(
        f"COPY (SELECT *, 1.0 AS real_time_factor, 0.0 AS latency_ms, 1.0 AS peak_memory_mb FROM (VALUES {rows}) "
        f"t(scene, variant, talker, error, stoi_gain)) TO '{folder}/results.parquet'"
    )
    return folder


def test_talkers_are_averaged_within_scenes_and_never_half(tmp_path: Path) -> None:
    folder = make_results(
        tmp_path,
        """
        ('s1', 'a', 'x', NULL, 0.1), ('s1', 'a', 'y', NULL, 0.3),
        ('s1', 'b', 'x', NULL, 0.5), ('s1', 'b', 'y', NULL, NULL),
        ('s2', 'a', 'x', NULL, 0.2), ('s2', 'a', 'y', NULL, NULL),
        ('s2', 'b', 'x', NULL, 0.4), ('s2', 'b', 'y', NULL, NULL),
        ('s3', 'a', NULL, 'failed', NULL),
        ('s3', 'b', 'x', NULL, 0.7), ('s3', 'b', 'y', NULL, 0.1)
        """,
    )
    with open_results(folder) as connection:
        table = table_of(connection, "stoi_gain", ["s1", "s2", "s3"], ["a", "b"])
    # y of s1 is known under a only, so b's mean there would be of other talkers; y of s2 is known nowhere.
    np.testing.assert_allclose(table, [[0.2, np.nan], [0.2, 0.4], [np.nan, 0.4]])


def test_rankings_group_what_cannot_be_told_apart(tmp_path: Path) -> None:
    rng = np.random.default_rng(8)
    scene = rng.normal(0.0, 0.1, 30)
    gains = {"good": 0.3, "as good": 0.3, "bad": 0.1}
    rows = [
        f"('s{s:02}', '{name}', 'x', NULL, {gain + scene[s] + rng.normal(0.0, 0.02)})"
        for name, gain in gains.items()
        for s in range(30)
    ]
    folder = make_results(tmp_path, ", ".join(rows))
    scenes = [f"s{s:02}" for s in range(30)]
    metric = Metric("stoi", "stoi_gain")
    analysis = analyse(folder, [metric], scenes=scenes, variants=list(gains), seed=0)
    ranked = {v.name: v.group for v in analysis.rankings["stoi"].variants}
    assert ranked == {"good": 1, "as good": 1, "bad": 2}
    assert analysis.coverage_percent is None and analysis.scenes == 30
    assert analysis.to_dict() == analyse(folder, [metric], scenes=scenes, variants=list(gains), seed=0).to_dict()
    few = analyse(folder, [metric], scenes=scenes[:4], variants=list(gains), seed=0)
    assert few.coverage_percent is not None and few.coverage_percent["normal"] == pytest.approx(95.0, abs=2.0)


def test_a_batch_against_an_earlier_one(tmp_path: Path) -> None:
    rng = np.random.default_rng(9)
    noise = rng.normal(0.0, 0.01, (2, 30))

    def rows(variants: dict[str, float], which: int, scenes: range) -> str:
        return ", ".join(
            f"('s{s}', '{name}', 'x', NULL, {gain + noise[which, s]})"
            for name, gain in variants.items()
            for s in scenes
        )

    then = make_results(tmp_path / "then", rows({"up": 0.1, "down": 0.2, "still": 0.3, "gone": 0.1}, 0, range(28)))
    now = make_results(tmp_path / "now", rows({"up": 0.2, "down": 0.1, "still": 0.3, "new": 0.4}, 1, range(2, 30)))
    found = compare(now, then, [Metric("stoi", "stoi_gain"), SIR], seed=0)
    assert {c.variant: c.verdict for c in found.changes} == {
        "up": "better",
        "down": "worse",
        "still": "no difference shown",
    }
    assert all(c.interval.scenes == 26 for c in found.changes)
    assert (found.new_variants, found.gone_variants) == (("new",), ("gone",))
    assert (found.new_scenes, found.gone_scenes) == (("s28", "s29"), ("s0", "s1"))
    assert found.not_compared == ("sir_db",)
    same = compare(now, now, [Metric("stoi", "stoi_gain", higher_is_better=False)], seed=0)
    assert {c.verdict for c in same.changes} == {"the same"}
    with pytest.raises(FileError, match="run the batch first"):
        compare(now, tmp_path / "nowhere", [SIR], seed=0)


SCORES = '\n[[scores]]\nfile = "words.csv"\nlower_is_better = ["errors"]\n'
CSV = """scene,variant,talker,words,errors
spec/seed 3,model,mate,90,1
spec/seed 3,model,mate,80,
spec/seed 3,model,pilot,70,2
spec/seed 3,reference-mic,,20,9
"""


def test_scores_from_outside_stand_in_the_results(batch: tuple[Path, BatchResult], tmp_path: Path) -> None:
    plan = write_plan(tmp_path, PLAN.replace('"sir_db", "stoi"', '"words", "errors"') + SCORES)
    (tmp_path / "words.csv").write_text(CSV)
    out = batch[0].parent / "out"
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "parts").symlink_to(out / "parts")
    result = run_batch(plan, tmp_path / "out", workers=1)
    assert result.ran == 0  # scores change nothing about the items
    _, rows = query(tmp_path / "out", "SELECT variant, talker, words, errors FROM results WHERE words IS NOT NULL")
    assert rows == [
        ("reference-mic", "mate", 20.0, 9.0),
        ("reference-mic", "pilot", 20.0, 9.0),
        ("model", "mate", 85.0, 1.0),
        ("model", "pilot", 70.0, 2.0),
    ]
    assert [v.interval.mean for v in result.analysis.rankings["words"].variants] == [77.5, 20.0, None]
    assert [v.name for v in result.analysis.rankings["errors"].variants][:2] == ["model", "reference-mic"]


@pytest.mark.parametrize(
    ("csv", "message"),
    [
        (
            CSV.replace("seed 3,model,mate,90", "seed 5,model,mate,90"),
            "line 2: the plan has no scene 'spec/seed 5'; did you",
        ),
        (CSV.replace("model,pilot", "modell,pilot"), "line 4: the plan has no variant 'modell'; did you mean 'model'"),
        (CSV.replace("90", "many"), "line 2: column 'words': 'many' is no number"),
        (CSV.replace("words", "stoi"), "column 'stoi' is in the results already"),
        (CSV.replace("words", "Words %"), "column 'Words %': use small letters"),
        (CSV.replace("variant", "kind"), "names no column 'variant'"),
        (CSV.replace("errors", "mistakes"), "there is no column 'errors', only words, mistakes"),
    ],
)
def test_scores_that_are_wrong(tmp_path: Path, csv: str, message: str) -> None:
    plan = write_plan(tmp_path, PLAN + SCORES)
    (tmp_path / "words.csv").write_text(csv)
    with pytest.raises(InputError, match=message):
        run_batch(plan, tmp_path / "out")
    (tmp_path / "words.csv").unlink()
    with pytest.raises(FileError, match=r"words\.csv: no such file"):
        run_batch(plan, tmp_path / "out")


def test_a_table_made_block_by_block_is_the_same(
    tmp_path: Path, batch: tuple[Path, BatchResult], monkeypatch: pytest.MonkeyPatch
) -> None:
    plan, _ = batch
    (tmp_path / "parts").symlink_to(plan.parent / "out" / "parts")
    monkeypatch.setattr("unmix.batch.results.BLOCK", 1)
    written = write_results(plan_items(Plan.load(plan), plan), Store(tmp_path), Scores({}, {}))
    assert (written.done, written.failures, written.missing) == (6, 0, 0)
    assert rows_of(tmp_path, without=()) == rows_of(plan.parent / "out", without=())
