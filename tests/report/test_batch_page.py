"""The report on a batch: who won, from rows to the page, and the page in a browser."""

from __future__ import annotations

import json
import re
import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from tests.batch.conftest import SPEC, write_plan
from tests.report.conftest import Open, accessibility_findings, wait_until
from unmix.batch.run import run_batch
from unmix.errors import FileError, InputError
from unmix.report.batch_figures import unit_of
from unmix.report.batch_listening import takes_of_batch
from unmix.report.batch_material import BatchMaterial, _spacing, is_batch, material_of_batch
from unmix.report.batch_page import batch_report, write_batch_report
from unmix.report.page import kind_of_page

PLAN = """
title = "Small <batch>"
variants = ["reference-mic", "delay-and-sum", "model"]
metrics = ["sir_db", "stoi"]
[[render]]
spec = "spec.toml"
seeds = [3, 4, 5]
random_seats = {}
"""
NASTY = 'pilot "<img src=x onerror=alert(1)>"'


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A batch of three scenes and three variants; one talker has a name that would be markup."""
    base = tmp_path_factory.mktemp("batch")
    plan = write_plan(base, PLAN)
    (base / "spec.toml").write_text(SPEC.replace('name = "pilot"', f"name = '{NASTY}'"))
    run_batch(plan, base / "out", workers=1)
    return base / "out"


@pytest.fixture(scope="module")
def batch(folder: Path) -> BatchMaterial:
    return material_of_batch(folder)


@pytest.fixture(scope="module")
def report(batch: BatchMaterial, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_batch_report(batch, tmp_path_factory.mktemp("page") / "report.html").path


def test_rows_and_rankings_are_the_batchs(folder: Path, batch: BatchMaterial) -> None:
    record = json.loads((folder / "batch.json").read_text())
    assert is_batch(folder)
    assert batch.total == len(batch.rows) == 18
    assert [v.name for v in batch.rankings["sir_db"]] == [v["name"] for v in record["rankings"]["sir_db"]["variants"]]
    winner = batch.winner
    assert winner is not None and winner.name == "model"
    mean = np.mean([row["sir_db_gain"] for row in batch.rows if row["variant"] == "model"])
    assert winner.mean == pytest.approx(mean)
    assert len(batch.stoi) == 6
    assert all(path.is_file() for path in batch.scene_files.values())
    assert np.isfinite(batch.of_scene["spacing_deg"]).all()


def test_the_smallest_angle_goes_around() -> None:
    assert _spacing([170.0, -170.0]) == pytest.approx(20.0)
    assert _spacing([0.0, 100.0, 250.0]) == pytest.approx(100.0)
    assert np.isnan(_spacing([5.0]))


def test_the_first_screen_says_who_won(batch: BatchMaterial) -> None:
    text = batch_report(replace(batch, scene_files={}))
    assert re.search(r"<h2 id=\"verdict\">model (won|leads)", text)
    assert re.search(r"With it \d of 6 talkers can be understood, before (none|\d)", text)
    assert "Wilcoxon" in text and "cannot be heard" not in text


def test_a_failure_and_a_gap_are_warnings(batch: BatchMaterial) -> None:
    costs = {name: cost | {"failures": int(name == "model")} for name, cost in batch.costs.items()}
    broken = replace(batch, costs=costs, failed={"a x model": "out of <memory>"}, missing=2, scene_files={})
    text = batch_report(broken)
    assert "1 item of scenes x variants failed" in text
    assert "a x model: out of &lt;memory&gt;" in text
    assert "2 items missing" in text


def test_without_its_record_a_batch_is_ranked_anew(folder: Path, batch: BatchMaterial, tmp_path: Path) -> None:
    shutil.copy(folder / "results.parquet", tmp_path)
    found = material_of_batch(tmp_path)
    assert [v.name for v in found.rankings["sir_db"]] == [v.name for v in batch.rankings["sir_db"]]
    assert "batch.json is missing" in found.notes[0]
    assert "data-open" not in batch_report(found).split("<script>")[0]
    (tmp_path / "batch.json").write_text("{}")
    with pytest.raises(FileError, match=r"batch\.json: is not a batch's record"):
        material_of_batch(tmp_path)


def test_a_scene_that_is_gone_is_said_to_be(batch: BatchMaterial, tmp_path: Path) -> None:
    gone = replace(batch, scene_files=dict.fromkeys(batch.scenes, tmp_path / "gone.toml"))
    assert batch_report(gone).count("cannot be heard here") == 3


def test_pseudonyms_and_silence(batch: BatchMaterial, tmp_path: Path) -> None:
    page = write_batch_report(batch, tmp_path / "r.html", audio=False, hide_names=True)
    text = page.path.read_text(encoding="utf-8")
    assert str(kind_of_page(page.path)).startswith("batch, without sound, without names, of ")
    assert "onerror" not in text and "pilot" not in text
    assert '"Talker B"' in text and 'id="audio-' not in text


def test_takes_for_listening_come_from_the_telling_scenes(batch: BatchMaterial) -> None:
    takes = takes_of_batch(batch, variants=["model", "delay-and-sum"], talkers=["mate"])
    assert {take.talker for take in takes} == {"mate"}
    assert len({take.scene for take in takes}) == 3
    assert list(takes[0].conditions) == ["reference", "model", "delay-and-sum", "microphone"]
    one = takes_of_batch(batch, scenes=[batch.scenes[1]], variants=["model"])
    assert [(take.scene, take.talker) for take in one] == [(batch.scenes[1], "mate"), (batch.scenes[1], NASTY)]
    with pytest.raises(InputError, match="there is no variant 'full' to listen to"):
        takes_of_batch(batch, variants=["full"])
    with pytest.raises(InputError, match="none of the scenes has a talker called nobody"):
        takes_of_batch(batch, variants=["model"], talkers=["nobody"])


def test_names_of_figures() -> None:
    assert unit_of("si_sdr_db_gain") == "SI-SDR gain, dB"
    assert unit_of("stoi_gain") == "STOI gain"
    assert unit_of("words_right") == "words_right"


def test_the_page_loads_alone(open_page: Open, report: Path) -> None:
    page = open_page(report)
    assert page.title() == "Small <batch>"
    assert page.locator("[data-rows] tbody tr").count() == 18
    assert page.locator("[data-rows] tbody bdi", has_text="onerror").count() == 9
    assert page.locator("img").count() == 0


@pytest.mark.parametrize(("width", "dark"), [(1200, False), (1200, True), (360, False)])
def test_nobody_is_shut_out(open_page: Open, report: Path, width: int, dark: bool) -> None:
    page = open_page(report, width=width, dark=dark, bypass_csp=True)
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    assert accessibility_findings(page) == []


def test_sorted_and_filtered_by_mouse(open_page: Open, report: Path, batch: BatchMaterial) -> None:
    page = open_page(report)
    rows = page.locator("[data-rows]")
    page.locator("[data-rows] th button", has_text="SIR gain").click()
    shown = [float(t.replace("\u2212", "-")) for t in rows.locator("tbody tr td:nth-child(4)").all_inner_texts()]
    assert shown == sorted(shown, reverse=True)
    assert shown[0] == pytest.approx(max(row["sir_db_gain"] for row in batch.rows), abs=0.051)
    page.locator("[data-rows] th button", has_text="SIR gain").click()
    assert rows.locator("th[aria-sort=ascending]").count() == 1
    rows.locator("[data-choice=variant]").select_option("model")
    assert rows.locator("tbody tr").count() == 6
    assert "1 to 6 of 6 rows" in rows.locator("[data-count]").inner_text()
    rows.locator("[data-search]").fill("seed 4 pilot")
    assert rows.locator("tbody tr").count() == 1
    rows.locator("[data-clear]").click()
    assert rows.locator("tbody tr").count() == 18


def test_sorted_and_filtered_by_keyboard(open_page: Open, report: Path) -> None:
    page = open_page(report)
    rows = page.locator("[data-rows]")
    rows.locator("[data-search]").focus()
    page.keyboard.type("delay-and-sum")
    assert rows.locator("tbody tr").count() == 6
    rows.locator("th button").first.focus()
    page.keyboard.press("Enter")
    assert rows.locator("th").first.get_attribute("aria-sort") == "ascending"
    page.locator("table[data-sortable] th button").nth(1).focus()
    page.keyboard.press("Space")
    names = page.locator("table[data-sortable] tbody tr td:nth-child(2)").all_inner_texts()
    assert names == sorted(names, reverse=True)


def test_a_dot_leads_to_its_scene(open_page: Open, report: Path, batch: BatchMaterial) -> None:
    page = open_page(report)
    assert page.locator("[data-open]").count() == 3
    scene = page.locator("[data-open]").nth(2).locator("bdi").inner_text()
    index = batch.scenes.index(scene)
    dots = page.locator(f"svg a[*|href='#scene-{index}']")
    assert dots.count() >= 3
    dots.first.locator("use").click()
    assert page.evaluate("batch.details.key") == page.locator("[data-open]").nth(2).get_attribute("data-open")
    assert page.locator("[data-rows] tbody tr").count() == 6
    assert set(page.locator("[data-rows] tbody tr td:first-child").all_inner_texts()) == {scene}


def test_three_scenes_play_one_at_a_time(open_page: Open, report: Path) -> None:
    page = open_page(report)
    first = page.locator("[data-detail]").nth(0)
    first.get_by_role("button", name="Play").click()
    wait_until(page, "player.playing && player.position() > 0.1")
    page.locator("[data-open]").nth(1).click()
    assert page.evaluate("[...batch.details.players.values()].map((p) => p.playing)") == [False, False]
    page.locator("body").press("k")
    wait_until(page, "player.playing")
    page.keyboard.press("2")
    assert page.evaluate("player.current").startswith(page.evaluate("batch.details.key"))
    assert page.evaluate("[...batch.details.players.values()].map((p) => p.playing)") == [False, True]
