"""Real recordings: leakage where one is alone, close microphones with bleed, and what each may claim."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import msgspec
import numpy as np
import pytest
from numpy.typing import NDArray

from tests.conftest import circle, delayed
from tests.metrics.test_alone import NAMES, RATE, SPOKEN, bleeding, turns
from unmix.audio import write_audio
from unmix.errors import InputError
from unmix.jobs.grade import grade
from unmix.jobs.grade_real import grade_alone, grade_close
from unmix.jobs.solve import solve, solve_to_folder
from unmix.model.delays import paths_from_bearings
from unmix.scene import Scene, Talker
from unmix.variant import PRESETS

Floats = NDArray[np.float64]
__all__ = ["turns"]

SCENE = """
[recording]
file = "mix.wav"
noise_only_s = [[11.2, 12.0]]
[array]
positions_m = [[0, 0, 0], [0.05, 0, 0]]
"""


@pytest.fixture
def scene(tmp_path: Path, turns: Floats, rng: np.random.Generator) -> Path:
    """A recording with two close microphones, and signals with leakage of -26 dB in `out`."""
    close, clean = bleeding(turns, rng)
    write_audio(tmp_path / "mix.wav", 0.5 * np.array([clean.sum(axis=0)] * 2), RATE)
    text = SCENE
    (tmp_path / "out").mkdir()
    for k, name in enumerate(NAMES):
        write_audio(tmp_path / f"{name}.wav", close[k : k + 1], RATE)
        write_audio(tmp_path / "out" / f"{name}.wav", (clean[k] + 0.05 * clean[1 - k])[None], RATE)
        stretches = [list(stretch) for stretch in SPOKEN[name]]
        text += (
            f'[[talker]]\nname = "{name}"\nazimuth_deg = {60 * k}\nreference = "{name}.wav"\nactive_s = {stretches}\n'
        )
    (tmp_path / "scene.toml").write_text(text)
    return tmp_path / "scene.toml"


def test_leakage_where_one_is_alone(scene: Path) -> None:
    graded = grade_alone(Scene.load(scene), scene.parent / "out")
    assert (graded.stretches, graded.noise_taken_off) == ("given", True)
    assert {(i.source, i.target) for i in graded.leakage} == {("mate", "pilot"), ("pilot", "mate")}
    for item in graded.leakage:
        assert item.interval.mean == pytest.approx(20 * np.log10(0.05), abs=0.1)
    assert any("cannot say" in claim for claim in graded.claims)
    json.dumps(graded.to_dict(), allow_nan=False)


def test_a_file_that_was_scaled_down_counts_as_it_was(scene: Path, turns: Floats) -> None:
    out = scene.parent / "out"
    write_audio(out / "mate.wav", 0.25 * (turns[0] + 0.05 * turns[1])[None], RATE, overwrite=True)
    talkers = [{"name": n, "file": f"{n}.wav", "scale": 0.25 if n == "mate" else 1.0} for n in NAMES]
    (out / "solution.json").write_text(json.dumps({"talkers": talkers}))
    for item in grade_alone(Scene.load(scene), out).leakage:
        assert item.interval.mean == pytest.approx(20 * np.log10(0.05), abs=0.1)


def test_close_microphones_judge_as_if_they_had_no_bleed(scene: Path) -> None:
    graded = grade_close(Scene.load(scene), scene.parent / "out")
    assert graded.grades.against == "plain, bleed taken out"
    for talker in graded.grades.talkers:
        # Against the bleeding microphones the best that can be seen is their own 16 dB.
        assert talker.sir_db == pytest.approx(26.0, abs=1.5)
        assert talker.speech is not None
        unsure = graded.uncertainty[talker.name]["sir_db"]
        assert unsure is not None and 0.0 < unsure < 5.0
    assert len(graded.bleed) == 2
    json.dumps(graded.to_dict(), allow_nan=False)


def test_what_cannot_be_graded(scene: Path) -> None:
    text = scene.read_text()
    scene.write_text(text.split("[[talker]]")[0] + "[[talker]]" + text.split("[[talker]]")[1])
    with pytest.raises(InputError, match="with one, nothing can leak"):
        grade_alone(Scene.load(scene), scene.parent / "out")
    scene.write_text(text.replace("active_s = [[0.0, 4.0], [6.0, 8.0]]", "active_s = [[3.0, 7.0]]").replace(
        "active_s = [[3.0, 7.0], [8.5, 11.0]]", "active_s = [[3.0, 7.0]]"))  # fmt: skip
    with pytest.raises(InputError, match="no talker is ever alone for long enough"):
        grade_alone(Scene.load(scene), scene.parent / "out")
    with pytest.raises(InputError, match=r"'mate' is alone for 0\.0 s only"):
        grade_close(Scene.load(scene), scene.parent / "out")
    scene.write_text(text)
    (scene.parent / "out" / "pilot.wav").unlink()
    with pytest.raises(InputError, match="no signal is called 'pilot', only mate"):
        grade_alone(Scene.load(scene), scene.parent / "out")


def test_real_figures_order_variants_as_the_true_ones_do(
    tmp_path: Path, turns: Floats, rng: np.random.Generator
) -> None:
    """Anechoic, where the variants are far enough apart that any other order would be wrong."""
    array = circle(5)
    paths = paths_from_bearings(array, np.radians([20.0, 95.0]), 0.0, 1.2)
    mixture = delayed(turns, paths, RATE).sum(axis=0)
    mixture += 2e-4 * rng.standard_normal(mixture.shape)
    close, _ = bleeding(turns, rng)
    talkers = []
    for k, name in enumerate(NAMES):
        write_audio(tmp_path / f"{name}.wav", close[k : k + 1], RATE)
        azimuth = float(np.radians([20.0, 95.0][k]))
        talkers.append(Talker(name, azimuth, 0.0, 1.2, None, list(SPOKEN[name]), {"plain": tmp_path / f"{name}.wav"}))
    scene = replace(Scene.from_arrays(mixture, array, talkers, sample_rate=RATE), noise_only_s=[(11.2, 12.0)])
    weak, model = PRESETS["model"], PRESETS["model"]
    weak = msgspec.structs.replace(weak, name="weak", solver=msgspec.structs.replace(weak.solver, prior_weight=0.1))
    true, alone, judged = [], [], []
    for variant in (PRESETS["reference-mic"], PRESETS["delay-and-sum"], weak, model):
        solve_to_folder(scene, tmp_path / variant.name, variant)
        signals = solve(scene, variant).signals
        assert signals is not None
        grades = grade(signals, turns, sample_rate=RATE, unprocessed=mixture[0], speech=False)
        true.append(np.mean([t.sir_db for t in grades.talkers]))
        leakage = grade_alone(scene, tmp_path / variant.name).leakage
        alone.append(-np.mean([item.interval.mean for item in leakage]))
        against_close = grade_close(scene, tmp_path / variant.name).grades
        judged.append(np.mean([t.sir_db for t in against_close.talkers]))
    assert np.all(np.diff(true) > 0.5)
    assert np.all(np.diff(alone) > 0.0)
    assert np.all(np.diff(judged) > 0.0)
    np.testing.assert_allclose(alone[1:3], true[1:3], atol=2.0)  # not far from the figure itself, either
