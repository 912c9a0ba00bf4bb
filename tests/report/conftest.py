"""A small scene whose talkers have awkward names, solved and graded once; and a browser without a network."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from unmix.audio import write_audio
from unmix.files import write_toml
from unmix.jobs.grade import grade_scene
from unmix.jobs.solve import solve_to_folder
from unmix.model.delays import paths_from_bearings
from unmix.report.material import SceneMaterial, material_of_scene
from unmix.scene import Scene

RATE = 16000
SECONDS = 4.0
NAMES = ('Ann "<b onload=alert(1)>" & <script>alert(1)</script>', "أحمد \u202eغفر", "O'Neil ${7*7} {{7*7}}")
AXE = Path(__file__).parents[1] / "data" / "axe-core" / "axe.min.js"


def write_scene(folder: Path, names: tuple[str, ...] = NAMES, seconds: float = SECONDS) -> Path:
    """A scene file with recording and references, talkers level with a seven-microphone array."""
    array = circle()
    azimuth_deg = np.array([20.0, 130.0, 250.0])[: len(names)]
    paths = paths_from_bearings(array, np.radians(azimuth_deg), 0.0, 1.2)
    clips = ("novel-reader", "card-reader", "arctic-a0007")
    talkers = np.stack([speech(clip, seconds) for clip in clips[: len(names)]])
    mixture = delayed(talkers, paths, RATE).sum(axis=0)
    mixture += 1e-4 * np.random.default_rng(4).standard_normal(mixture.shape)
    array.save(folder / "array.toml")
    write_audio(folder / "mix.wav", mixture, RATE)
    tables = []
    for k, name in enumerate(names):
        write_audio(folder / f"clean-{k}.wav", talkers[k : k + 1], RATE)
        place = {"azimuth_deg": float(azimuth_deg[k]), "distance_m": 1.2}
        tables.append({"name": name, **place, "reference": f"clean-{k}.wav"})
    tree = {"title": "Watch <handover>", "recording": {"file": "mix.wav"}, "array": {"file": "array.toml"}}
    write_toml(folder / "scene.toml", tree | {"talker": tables})
    return folder / "scene.toml"


@pytest.fixture(scope="session")
def solved(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with scene.toml and, in `out`, the talkers, solution.json and grades.json."""
    folder = tmp_path_factory.mktemp("solved")
    scene = Scene.load(write_scene(folder))
    solve_to_folder(scene, folder / "out", "model")
    grade_scene(scene, folder / "out", out_dir=folder / "out")
    return folder


@pytest.fixture(scope="session")
def material(solved: Path) -> SceneMaterial:
    """What the folder holds, as a report is made of it."""
    from unmix.report.material import material_of_folder

    found = material_of_folder(solved / "out")
    assert isinstance(found.scene, Scene)
    assert material_of_scene(found.scene, solved / "out").names == NAMES
    return found


def chromium() -> str | None:
    """The system's Chromium, where there is one."""
    return next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    """A headless browser; the test is skipped where none is installed."""
    program = chromium()
    if program is None:
        pytest.skip("no Chromium on this machine; .ci/run installs it")
    sync_api = pytest.importorskip("playwright.sync_api", reason="playwright is not installed")
    with sync_api.sync_playwright() as playwright:
        options = ["--no-sandbox", "--autoplay-policy=no-user-gesture-required"]
        opened = playwright.chromium.launch(executable_path=program, args=options)
        yield opened
        opened.close()


Open = Callable[..., Any]


@pytest.fixture
def open_page(browser: Any) -> Iterator[Open]:
    """Open a file with the network off; at the end the page must have said nothing on the console."""
    contexts: list[Any] = []
    said: list[str] = []

    def open_(path: Path, *, width: int = 1200, dark: bool = False, bypass_csp: bool = False) -> Any:
        context = browser.new_context(
            viewport={"width": width, "height": 900},
            color_scheme="dark" if dark else "light",
            offline=True,
            bypass_csp=bypass_csp,
            accept_downloads=True,
        )
        contexts.append(context)
        page = context.new_page()
        page.on("console", lambda message: said.append(message.text))
        page.on("pageerror", lambda error: said.append(str(error)))
        page.on("dialog", lambda dialog: said.append(f"dialog: {dialog.message}"))
        page.on("request", lambda r: said.append(r.url) if not r.url.startswith(("file:", "data:", "blob:")) else None)
        page.goto(path.as_uri())
        return page

    yield open_
    for context in contexts:
        context.close()
    assert said == []


def accessibility_findings(page: Any) -> list[str]:
    """What axe-core finds wrong, one line each."""
    page.evaluate(AXE.read_text(encoding="utf-8"))
    found = page.evaluate("axe.run(document, {resultTypes: ['violations']})")
    return [f"{v['id']}: {n['html'][:200]} {n['failureSummary']}" for v in found["violations"] for n in v["nodes"][:3]]


def wait_until(page: Any, condition: str, *, seconds: float = 10.0) -> None:
    """Wait for a condition in the page; the page's own policy forbids playwright's way of doing this."""
    for _ in range(round(seconds / 0.05)):
        if page.evaluate(f"() => Boolean({condition})"):
            return
        page.wait_for_timeout(50)
    raise AssertionError(f"never true: {condition}")
