"""The report on a scene in a real browser: it stays silent, plays, switches, loops, and can be used without a mouse."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.report.conftest import NAMES, RATE, Open, accessibility_findings, wait_until
from unmix.audio import Samples, write_audio
from unmix.report.material import SceneMaterial
from unmix.report.scene_page import write_scene_report


@pytest.fixture(scope="module")
def report(material: SceneMaterial, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_scene_report(material, tmp_path_factory.mktemp("page") / "report.html").path


def test_the_page_loads_alone_and_shows_every_name_as_it_is(open_page: Open, report: Path) -> None:
    page = open_page(report)
    assert page.title() == "Watch <handover>"
    assert page.locator(".verdicts bdi").all_inner_texts() == list(NAMES)
    assert page.locator(".verdicts li").count() == 3
    assert page.locator("b[onload]").count() == 0
    assert page.evaluate("document.documentElement.scrollWidth") <= 1200
    first_screen = page.locator(".verdicts li").last.bounding_box()
    assert first_screen["y"] + first_screen["height"] < 900


def test_it_fits_a_phone(open_page: Open, report: Path) -> None:
    page = open_page(report, width=360)
    assert page.evaluate("document.documentElement.scrollWidth") <= 360


@pytest.mark.parametrize("dark", [False, True])
def test_nobody_is_shut_out(open_page: Open, report: Path, dark: bool) -> None:
    page = open_page(report, dark=dark, bypass_csp=True)
    assert accessibility_findings(page) == []


def test_the_page_may_not_reach_out(open_page: Open, report: Path) -> None:
    page = open_page(report)
    policy = page.locator("meta[http-equiv=Content-Security-Policy]").get_attribute("content")
    assert policy.startswith("default-src 'none'")
    assert "http" not in policy


def test_played_switched_and_looped_by_mouse(open_page: Open, report: Path) -> None:
    page = open_page(report)
    page.get_by_role("button", name="Play").click()
    wait_until(page, "player.playing && player.position() > 0.2")
    page.locator("[data-signal]").nth(1).check()
    assert page.evaluate("player.current") == "after-0"
    assert page.locator("[data-pick][aria-pressed=true]").count() == 1
    page.locator("[data-pick='reference-1']").click()
    assert page.evaluate("player.current") == "reference-1"
    lane = page.locator(".spectrograms .lane").first
    box = lane.bounding_box()
    page.mouse.move(box["x"] + 0.25 * box["width"], box["y"] + 20)
    page.mouse.down()
    page.mouse.move(box["x"] + 0.5 * box["width"], box["y"] + 20, steps=4)
    page.mouse.up()
    start, stop = page.evaluate("player.loop")
    assert (start, stop) == pytest.approx((1.0, 2.0), abs=0.02)
    assert page.locator("[data-loop]").is_checked()
    page.mouse.click(box["x"] + 0.75 * box["width"], box["y"] + 20)  # beyond the loop: it goes back to its start
    seen = [page.evaluate("player.position()") for _ in range(20) if page.wait_for_timeout(60) is None]
    assert all(start <= position <= stop for position in seen[2:])
    page.get_by_role("button", name="Pause").click()
    assert page.evaluate("player.playing") is False


def test_played_switched_and_looped_by_keyboard(open_page: Open, report: Path) -> None:
    page = open_page(report)
    page.keyboard.press("Space")
    wait_until(page, "player.playing && player.position() > 0.3")
    page.keyboard.press("2")
    assert page.evaluate("player.current") == "after-0"
    page.keyboard.press("[")
    wait_until(page, "player.position() > 0.8")
    page.keyboard.press("]")
    start, stop = page.evaluate("player.loop")
    assert 0.3 <= start < stop < 1.5
    assert page.evaluate("player.looping")
    page.keyboard.press("l")
    assert not page.evaluate("player.looping")
    page.keyboard.press("k")
    assert not page.evaluate("player.playing")
    page.keyboard.press("Home")
    page.keyboard.press("ArrowRight")
    assert page.evaluate("player.position()") == pytest.approx(1.0)
    page.keyboard.press("m")
    assert not page.evaluate("player.matched")


def test_the_cursor_moves_in_every_picture(open_page: Open, report: Path) -> None:
    page = open_page(report)
    page.evaluate("player.seek(player.seconds / 2)")
    places = page.locator(".spectrograms .lane").evaluate_all("all => all.map((l) => l.style.getPropertyValue('--at'))")
    assert len(places) == 9
    assert {round(float(place.removesuffix("%"))) for place in places} == {50}


TAP = """async () => {
    await player.ready();
    const code = `registerProcessor("tap", class extends AudioWorkletProcessor {
        process(inputs) { if (inputs[0].length) this.port.postMessage(inputs[0][0].slice()); return true; } })`;
    await player.context.audioWorklet.addModule("data:text/javascript," + encodeURIComponent(code));
    const tap = new AudioWorkletNode(player.context, "tap");
    window.heard = [];
    tap.port.onmessage = (message) => window.heard.push(...message.data);
    player.master.connect(tap);
    player.volume(0);
}"""


@pytest.fixture
def ramps(tmp_path: Path) -> Path:
    """A report whose every signal is the same straight line over time, so that what is heard tells its own time."""
    line = np.linspace(0.0, 0.5, 4 * RATE)[None]
    for name in ("a", "b"):
        write_audio(tmp_path / f"{name}.wav", line, RATE)
    material = SceneMaterial(
        title="Lines",
        names=("a", "b"),
        recording=Samples(line, RATE),
        outputs={name: tmp_path / f"{name}.wav" for name in ("a", "b")},
    )
    return write_scene_report(material, tmp_path / "report.html").path


def heard_between(page: Any, first_s: float, last_s: float) -> np.ndarray:
    samples = np.array(page.evaluate("window.heard"))
    begin = int(np.flatnonzero(samples > 1e-3)[0])
    return samples[begin + round(first_s * RATE) : begin + round(last_s * RATE)]


def test_time_does_not_jump_when_switching(open_page: Open, ramps: Path) -> None:
    page = open_page(ramps, bypass_csp=True)
    page.evaluate(TAP)
    page.evaluate("player.play()")
    for key in "231321":
        page.wait_for_timeout(230)
        page.keyboard.press(key)
    page.wait_for_timeout(300)
    samples = heard_between(page, 0.1, 1.5)
    time = np.arange(len(samples))
    slope, start = np.polyfit(time, samples, 1)
    off = np.abs(samples - (slope * time + start)) / slope
    # Sixteen bits resolve this line to about four samples; a jump of a millisecond is sixteen.
    assert off.max() < 6.0
    assert slope == pytest.approx(float(np.diff(samples).mean()), rel=1e-2)


def test_a_loop_jumps_back_exactly_and_without_a_click(open_page: Open, ramps: Path) -> None:
    page = open_page(ramps, bypass_csp=True)
    page.evaluate(TAP)
    page.evaluate("player.setLoop(1, 1.5)")
    page.evaluate("player.play()")
    page.wait_for_timeout(1900)
    samples = heard_between(page, 0.0, 1.7)
    quiet = np.flatnonzero(samples < 0.05 * samples.max())
    seams = quiet[np.flatnonzero(np.diff(quiet, prepend=-1000) > 100)]
    assert list(np.round(np.diff(seams[seams > 100]) / RATE, 2)) == [0.5, 0.5]
    step = np.abs(np.diff(samples)).max()
    assert step < 0.05 * samples.max()


def test_going_elsewhere_and_pausing_do_not_click(open_page: Open, ramps: Path) -> None:
    page = open_page(ramps, bypass_csp=True)
    page.evaluate(TAP)
    page.evaluate("player.seek(3)")
    page.evaluate("player.play()")
    for seconds in (3.2, 3.4, 3.1):
        page.wait_for_timeout(200)
        page.evaluate(f"player.seek({seconds})")
    page.wait_for_timeout(200)
    page.evaluate("player.stop()")
    page.wait_for_timeout(200)
    samples = np.array(page.evaluate("window.heard"))
    assert samples.max() > 0.1 and np.abs(samples[-500:]).max() == 0.0
    # A fade of 6 ms at this rate changes by about a hundredth of the signal per sample; a click is all of it.
    assert np.abs(np.diff(samples)).max() < 0.05 * samples.max()
