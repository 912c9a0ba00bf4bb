"""`unmix check` as a shell sees it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from tests.cli.conftest import Run

Rewrite = Callable[[Callable[[np.ndarray], np.ndarray]], Path]


def test_a_fit_scene_and_its_picture(run: Run, scene: Path) -> None:
    ran = run("check", scene, "--plot", scene.parent / "array.svg")
    assert ran.status == 0, ran.out + ran.err
    assert "Fit to separate." in ran.out and "times faster" in ran.out
    picture = (scene.parent / "array.svg").read_text()
    for word in ("from above", "from the right", "Chief Pilot", "reference"):
        assert word in picture


def test_an_unfit_scene_has_status_4(run: Run, rewrite: Rewrite) -> None:
    def turned(y: np.ndarray) -> np.ndarray:
        y[2] *= -1.0
        y[4] = 0.0
        return y

    path = rewrite(turned)
    ran = run("check", path, "--json")
    assert ran.status == 4
    assert ran.json["fit"] is False
    kinds = {f["kind"]: f["channels"] for f in ran.json["findings"] if f["severity"] == "unfit"}
    assert kinds == {"dead": [4], "polarity": [2]}
    plain = run("check", path)
    assert plain.status == 4 and "Not fit" in plain.out and "swap the connection" in plain.out


def test_a_picture_is_not_replaced_unasked(run: Run, scene: Path) -> None:
    (scene.parent / "array.svg").write_text("mine")
    ran = run("check", scene, "--plot", scene.parent / "array.svg")
    assert ran.status == 1 and "--overwrite" in ran.err
    assert (scene.parent / "array.svg").read_text() == "mine"
