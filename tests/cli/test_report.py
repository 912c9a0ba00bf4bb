"""`unmix report`, and the report that the other commands write by themselves."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.batch.conftest import PLAN, write_plan
from tests.cli.conftest import Run
from tests.conftest import speech
from unmix.audio import write_audio
from unmix.jobs.listening import read_key
from unmix.report.page import kind_of_page
from unmix.report.scene_page import UNGRADED

GRADED = UNGRADED.replace("not graded", "graded")


@pytest.fixture
def solved(run: Run, scene: Path) -> Path:
    """The folder `solve` wrote beside the scene."""
    assert run("solve", scene, "--out", scene.parent / "out", "--variant", "model").status == 0
    return scene.parent / "out"


def test_solve_writes_a_report_and_grading_adds_to_it(run: Run, scene: Path, solved: Path) -> None:
    assert kind_of_page(solved / "report.html") == UNGRADED
    assert "Not graded yet" in (solved / "report.html").read_text(encoding="utf-8")
    ran = run("grade", scene, "--estimates", solved, "--out", solved)
    assert ran.status == 0
    assert "grades.json and report.html" in ran.out
    assert kind_of_page(solved / "report.html") == GRADED
    assert "can be understood" in (solved / "report.html").read_text(encoding="utf-8")


def test_no_report_is_written_when_none_is_wanted(run: Run, scene: Path) -> None:
    out = scene.parent / "out"
    assert run("solve", scene, "--out", out, "--variant", "model", "--no-report").status == 0
    assert run("grade", scene, "--estimates", out, "--out", out, "--no-report").status == 0
    assert not (out / "report.html").exists()


def test_a_report_of_other_making_is_left_alone(run: Run, scene: Path, solved: Path) -> None:
    (solved / "report.html").write_text("mine")
    ran = run("grade", scene, "--estimates", solved, "--out", solved)
    assert (ran.status, ran.out) == (1, "")
    assert "report.html: exists already" in ran.err and "--no-report" in ran.err
    assert not (solved / "grades.json").exists()
    assert (solved / "report.html").read_text() == "mine"
    assert run("grade", scene, "--estimates", solved, "--out", solved, "--overwrite").status == 0
    assert kind_of_page(solved / "report.html") == GRADED


def test_a_report_without_voices_is_not_renewed_with_them(run: Run, scene: Path, solved: Path) -> None:
    assert run("report", solved, "--no-audio", "--overwrite").status == 0
    before = (solved / "report.html").read_bytes()
    assert run("grade", scene, "--estimates", solved, "--out", solved).status == 1
    assert (solved / "report.html").read_bytes() == before


def test_files_without_a_scene_get_a_report(run: Run, scene: Path, solved: Path) -> None:
    folder = scene.parent
    pairs = [("--reference", "mate.wav"), ("--reference", "pilot.wav")]
    options = [part for name, file in pairs for part in (name, folder / file)]
    estimates = ["--estimate", solved / "mate.wav", "--estimate", solved / "Chief-Pilot.wav"]
    ran = run("grade", *options, *estimates, "--unprocessed", folder / "mix.wav", "--out", folder / "graded")
    assert ran.status == 0
    text = (folder / "graded" / "report.html").read_text(encoding="utf-8")
    assert "Graded: mate, pilot" in text
    assert all(f'id="audio-{name}"' in text for name in ("mic", "after-0", "after-1", "reference-0"))


def test_a_grading_folder_of_its_own_finds_its_way_back(run: Run, scene: Path, solved: Path) -> None:
    there = scene.parent / "graded"
    assert run("grade", scene, "--estimates", solved, "--out", there, "--no-report").status == 0
    ran = run("report", there, "--json")
    assert (ran.status, ran.err) == (0, "")
    assert ran.json == {"file": str(there / "report.html"), "bytes": (there / "report.html").stat().st_size}
    text = (there / "report.html").read_text(encoding="utf-8")
    assert 'id="audio-mic"' in text and 'id="audio-after-1"' in text and "Solved by" in text


def test_report_hides_what_it_is_told_to(run: Run, solved: Path, tmp_path: Path) -> None:
    page = tmp_path / "quiet.html"
    ran = run("report", solved, "--out", page, "--no-audio", "--pseudonyms")
    assert ran.status == 0
    text = page.read_text(encoding="utf-8")
    assert "Talker B" in text and "Chief" not in text and "mate" not in text.replace("estimate", "")
    assert "audio-" not in text


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["nowhere"], "nowhere: no such folder"),
        (["."], "holds neither solution.json nor grades.json"),
    ],
)
def test_a_folder_that_holds_nothing_is_one_line(
    run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, arguments: list[str], said: str
) -> None:
    monkeypatch.chdir(tmp_path)
    ran = run("report", *arguments)
    assert (ran.status, ran.out) == (1, "")
    assert said in ran.err and ran.err.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


def test_a_report_is_replaced_only_when_told(run: Run, solved: Path) -> None:
    assert run("report", solved).status == 1
    assert run("report", solved, "--overwrite").status == 0


@pytest.fixture
def real(tmp_path: Path) -> Path:
    """A scene whose talkers are alone at times; its references are close microphones, its estimates leak at -30 dB."""
    talkers = np.array([speech("novel-reader", 6.0), speech("card-reader", 6.0)])
    talkers[0, 3 * 16000 :] = 0.0
    talkers[1, : 2 * 16000] = 0.0
    write_audio(tmp_path / "mix.wav", np.repeat(talkers.sum(axis=0)[None], 2, axis=0), 16000)
    text = '[recording]\nfile = "mix.wav"\n[array]\npositions_m = [[0, 0, 0], [0.05, 0, 0]]\n'
    for k, (name, active) in enumerate((("mate", [[0.0, 3.0]]), ("pilot", [[2.0, 6.0]]))):
        write_audio(tmp_path / f"{name}.wav", (talkers[k] + 0.1 * talkers[1 - k])[None], 16000)
        write_audio(tmp_path / "out" / f"{name}.wav", (talkers[k] + 0.03 * talkers[1 - k])[None], 16000)
        text += f'[[talker]]\nname = "{name}"\nazimuth_deg = {60 * k}\nreference = "{name}.wav"\nactive_s = {active}\n'
    (tmp_path / "scene.toml").write_text(text)
    return tmp_path


def test_a_recording_without_references_has_its_leakage_told(run: Run, real: Path) -> None:
    common = ("grade", real / "scene.toml", "--estimates", real / "out", "--alone")
    ran = run(*common, "--out", real / "alone")
    assert (ran.status, "grades.json and report.html" in ran.out) == (0, True)
    text = (real / "alone" / "report.html").read_text(encoding="utf-8")
    assert "Leakage where one talker is alone</h2>" in text
    assert "pilot, speaking alone, comes out of mate’s file 30 dB below the own file" in text
    assert "cannot say how good a talker&#39;s own voice sounds" in text
    again = run("report", real / "alone", "--out", real / "again.html", "--pseudonyms")
    assert again.status == 0
    text = (real / "again.html").read_text(encoding="utf-8")
    assert "Talker B, speaking alone" in text and "pilot" not in text
    assert 'id="audio-after-1"' in text
    assert run(*common, "--out", real / "none", "--no-report").status == 0
    assert not (real / "none" / "report.html").exists()


def test_close_microphones_stand_with_what_they_claim(run: Run, real: Path) -> None:
    ran = run("grade", real / "scene.toml", "--estimates", real / "out", "--close", "--out", real / "close")
    assert ran.status == 0
    text = (real / "close" / "report.html").read_text(encoding="utf-8")
    assert "Bleed of the close microphones</h2>" in text and "whose bleed was estimated" in text
    assert "can be understood" in text


def test_a_picture_of_before_and_after(run: Run, scene: Path, solved: Path) -> None:
    common = ("grade", scene, "--estimates", solved, "--no-report")
    assert run(*common, "--plot", scene.parent / "p.svg").status == 0
    picture = (scene.parent / "p.svg").read_text(encoding="utf-8")
    assert "Chief Pilot" in picture and "intelligibility (STOI)" in picture
    assert run(*common, "--plot", scene.parent / "p.svg").status == 1
    ran = run(*common, "--plot", scene.parent / "p.doc")
    assert ran.status == 1 and "pictures are written as" in ran.err


def test_a_batch_renews_its_report_when_it_has_more_to_say(run: Run, tmp_path: Path) -> None:
    plan = write_plan(tmp_path, PLAN)
    out = tmp_path / "out"
    assert run("batch", plan, "--out", out, "--workers", "1", "--no-report").status == 0
    assert not (out / "report.html").exists()
    assert "report.html" in run("batch", plan, "--out", out, "--workers", "1").out
    first = (out / "report.html").stat().st_mtime_ns
    assert run("batch", plan, "--out", out, "--workers", "1").status == 0
    assert (out / "report.html").stat().st_mtime_ns == first
    assert run("report", out, "--no-audio", "--overwrite").status == 0
    plan.write_text(PLAN.replace('"sir_db", "stoi"', '"stoi", "sir_db"'))
    assert run("batch", plan, "--out", out, "--workers", "1").status == 0
    text = (out / "report.html").read_text(encoding="utf-8")
    assert "STOI gain: mean over scenes" in text and 'id="audio-best' not in text
    (out / "report.html").write_text("mine")
    ran = run("batch", plan, "--out", out, "--workers", "1")
    assert ran.status == 0 and "no report was written" in ran.err
    assert (out / "report.html").read_text() == "mine"


def test_a_listening_test_and_its_key(run: Run, scene: Path, solved: Path) -> None:
    other = scene.parent / "other"
    assert run("solve", scene, "--out", other, "--variant", "delay-and-sum", "--no-report").status == 0
    page = scene.parent / "test" / "page.html"
    common = ("report", solved, "--with", other, "--listening", "scale", "--talker", "mate", "--out", page)
    ran = run(*common, "--json")
    assert ran.status == 0, ran.err
    assert ran.json["key"] == str(page.parent / "listening-key.json")
    (trial,) = read_key(page.parent / "listening-key.json").trials
    assert sorted(trial.stimuli.values()) == ["delay-and-sum", "microphone", "model", "reference"]
    text = page.read_text(encoding="utf-8")
    assert not any(word in text for word in ("delay-and-sum", "Chief", "scene.toml"))
    again = run(*common)
    assert again.status == 1 and "exists already" in again.err
    assert run("report", solved, "--with", other).status == 2
    assert run("report", solved, "--listening", "pairs", "--variant", "model").status == 2


def test_two_folders_of_one_variant_are_told_apart(run: Run, scene: Path, solved: Path) -> None:
    again = scene.parent / "again"
    assert run("solve", scene, "--out", again, "--variant", "model", "--no-report").status == 0
    page = scene.parent / "test" / "page.html"
    ran = run("report", solved, "--with", again, "--listening", "pairs", "--out", page)
    assert ran.status == 0
    names = set(read_key(page.parent / "listening-key.json").trials[0].stimuli.values())
    assert names == {f"model ({solved})", f"model ({again})", "microphone", "reference"}
