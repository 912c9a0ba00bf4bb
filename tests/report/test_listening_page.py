"""Blind listening: the page gives nothing away, can be done by mouse and keyboard, and its answers come back."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.report.conftest import NAMES, RATE, Open, accessibility_findings, wait_until
from unmix.errors import FileError, InputError
from unmix.jobs.listening import KEY_NAME, analyse_answers, read_key
from unmix.report.listening_page import Take, listening_page, takes_of, write_listening_page
from unmix.report.material import SceneMaterial


def takes(count: int = 2) -> list[Take]:
    rng = np.random.default_rng(8)
    made = []
    for k in range(count):
        clean = 0.1 * rng.standard_normal(2 * RATE)
        noisy = {
            name: clean + level * rng.standard_normal(2 * RATE) for name, level in (("full", 0.02), ("model", 0.1))
        }
        conditions = {"reference": clean, **noisy, "microphone": clean + 0.3 * rng.standard_normal(2 * RATE)}
        made.append(Take(f"secret-scene-{k}", "secret-talker", RATE, conditions))
    return made


@pytest.fixture(params=["scale", "pairs"])
def written(request: pytest.FixtureRequest, tmp_path: Path) -> tuple[str, Path]:
    write_listening_page(takes(), tmp_path / "listening.html", procedure=request.param, seed=1)
    return request.param, tmp_path / "listening.html"


def test_the_page_gives_nothing_away() -> None:
    text, key = listening_page(takes(), seed=5)
    for word in ("secret-", "full", "model"):
        assert word not in text
    tokens = [token for trial in key.trials for token in trial.stimuli]
    assert len(set(tokens)) == 8
    assert all(text.count(f'id="audio-{token}"') == 1 for token in tokens)
    # Neither order nor names say what is what: sorted by token, conditions come in another order each time.
    orders = {
        tuple(c for _, c in sorted(listening_page(takes(1), seed=s)[1].trials[0].stimuli.items())) for s in range(9)
    }
    assert len(orders) > 4


def test_two_tests_cannot_be_confused() -> None:
    assert listening_page(takes(1))[1].test != listening_page(takes(1))[1].test


def test_takes_come_from_folders_of_one_scene(material: SceneMaterial) -> None:
    from dataclasses import replace

    found = takes_of([("full", material), ("model", material)], talkers=NAMES[:1])
    assert [t.talker for t in found] == [NAMES[0]]
    assert list(found[0].conditions) == ["reference", "full", "model", "microphone"]
    with pytest.raises(InputError, match="compare variants of one scene"):
        takes_of([("a", material), ("b", replace(material, title="other"))])
    with pytest.raises(InputError, match="has no reference in a"):
        takes_of([("a", replace(material, references={}))])
    with pytest.raises(InputError, match="there is no talker 'nobody'"):
        takes_of([("a", material)], talkers=["nobody"])
    with pytest.raises(InputError, match="its recording is out of reach"):
        takes_of([("a", replace(material, recording=None))])


def test_too_many_signals_are_refused() -> None:
    take = takes(1)[0]
    crowd = Take("s", "t", RATE, take.conditions | {f"v{k}": take.conditions["full"] for k in range(12)})
    with pytest.raises(InputError, match="more than people can compare"):
        listening_page([crowd])


def test_nothing_is_replaced(tmp_path: Path) -> None:
    (tmp_path / KEY_NAME).write_text("mine")
    with pytest.raises(FileError, match="exists already"):
        write_listening_page(takes(1), tmp_path / "listening.html")
    assert sorted(p.name for p in tmp_path.iterdir()) == [KEY_NAME]


@pytest.mark.parametrize("dark", [False, True])
def test_nobody_is_shut_out(open_page: Open, written: tuple[str, Path], dark: bool) -> None:
    page = open_page(written[1], dark=dark, bypass_csp=True)
    assert accessibility_findings(page) == []
    begin(page)
    assert accessibility_findings(page) == []
    assert page.evaluate("document.documentElement.scrollWidth") <= 1200


def begin(page: Any, code: str = "L7") -> None:
    page.locator("[data-listener]").fill(code)
    page.locator("[data-begin]").click()


def save(page: Any, folder: Path) -> Path:
    with page.expect_download() as download:
        page.locator("[data-save]").click()
    path = folder / download.value.suggested_filename
    download.value.save_as(path)
    return path


def score_of(tokens: dict[str, str], token: str) -> int:
    return {"reference": 100, "full": 80, "model": 50, "microphone": 10}[tokens[token]]


def test_the_scale_by_mouse_and_its_answers(open_page: Open, tmp_path: Path) -> None:
    write_listening_page(takes(), tmp_path / "listening.html", seed=2)
    tokens = {t: c for trial in read_key(tmp_path / KEY_NAME).trials for t, c in trial.stimuli.items()}
    page = open_page(tmp_path / "listening.html")
    page.locator("[data-begin]").click()
    assert "code first" in page.locator("[data-step=start] [data-complaint]").inner_text()
    begin(page)
    assert page.locator("[data-heading]").inner_text() == "Practice"
    for at in range(3):
        sliders = page.locator("[data-score]")
        assert sliders.count() == 4
        page.locator("[data-hear]").nth(1).click()
        wait_until(page, "player.playing && player.position() > 0.05")
        page.locator("[data-hear]").nth(2).click()
        assert page.locator("[data-hear][aria-pressed=true]").count() == 1
        page.locator("[data-step=trial] [data-next]").click()
        assert "has no score yet" in page.locator("[data-step=trial] [data-complaint]").inner_text()
        for k in range(4):
            token = sliders.nth(k).get_attribute("data-score")
            score = score_of(tokens, token)
            sliders.nth(k).fill(str(min(score, 99) if at == 0 else score))
        page.locator("[data-step=trial] [data-next]").click()
        if at == 0:
            assert "set it to 100" in page.locator("[data-step=trial] [data-complaint]").inner_text()
            sliders.nth(0).fill("100")
            page.locator("[data-step=trial] [data-next]").click()
    answers = save(page, tmp_path)
    assert answers.name == "answers-L7.json"
    found, rows = analyse_answers([answers])
    assert {c.name: c.interval.mean for c in found.conditions} == {
        "reference": 100.0, "full": 80.0, "model": 50.0, "microphone": 10.0
    }  # fmt: skip
    assert {row["scene"] for row in rows} == {"secret-scene-0", "secret-scene-1"}


def test_the_scale_by_keyboard(open_page: Open, tmp_path: Path) -> None:
    write_listening_page(takes(1), tmp_path / "listening.html", seed=2)
    page = open_page(tmp_path / "listening.html")
    page.locator("[data-listener]").focus()
    page.keyboard.type("kb")
    page.keyboard.press("Tab")
    page.keyboard.press("Enter")
    for _ in range(2):
        page.keyboard.press("2")
        wait_until(page, "player.playing")
        order = page.evaluate("test.pages[test.at].order")
        assert page.evaluate("player.current") == order[1]
        page.keyboard.press("0")
        assert page.evaluate("player.current") == page.evaluate("test.pages[test.at].trial.open")
        page.keyboard.press("Space")
        wait_until(page, "!player.playing")
        for k in range(4):
            page.locator("[data-score]").nth(k).focus()
            page.keyboard.press("End" if k == 0 else "PageUp")
        page.locator("[data-step=trial] [data-next]").focus()
        page.keyboard.press("Enter")
    assert page.locator("[data-step=end]").is_visible()
    assert page.evaluate("test.result().answers.length") == 2
    page.evaluate("test.saved = true")


def test_pairs_in_a_browser_and_their_answers(open_page: Open, tmp_path: Path) -> None:
    write_listening_page(takes(1), tmp_path / "listening.html", procedure="pairs", seed=3)
    tokens = read_key(tmp_path / KEY_NAME).trials[0].stimuli
    page = open_page(tmp_path / "listening.html")
    begin(page, "p/1")
    pages = page.evaluate("test.pages.length")
    assert pages == 1 + 6
    for _ in range(pages):
        a, b = page.evaluate("test.pages[test.at].order")
        better = 0 if score_of(tokens, a) > score_of(tokens, b) else 1
        page.locator("[name=choice]").nth(better).check()
        page.locator("[data-step=trial] [data-next]").click()
    answers = save(page, tmp_path)
    assert re.fullmatch(r"answers-p-1\.json", answers.name)
    assert json.loads(answers.read_text())["listener"] == "p/1"
    found, _ = analyse_answers([answers])
    assert [c.interval.mean for c in found.conditions] == pytest.approx([100.0, 200 / 3, 100 / 3, 0.0])
    assert [c.name for c in found.conditions] == ["reference", "full", "model", "microphone"]
