"""The grading job: arrays, files and scenes in, figures out, and what bad input gets."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.conftest import speech
from unmix.audio import resample, write_audio
from unmix.errors import FileError, InputError
from unmix.jobs.grade import grade, grade_files, grade_scene, read_grades
from unmix.jobs.grade_inputs import read_signal, recording_of_file
from unmix.scene import Scene

Floats = NDArray[np.float64]
RATE = 16000


@pytest.fixture(scope="module")
def truth() -> Floats:
    return np.array([speech("novel-reader", 4.0), speech("robot-commands", 4.0)])


@pytest.fixture(scope="module")
def estimates(truth: Floats) -> Floats:
    noise = np.random.default_rng(5).standard_normal(truth.shape)
    return truth + 0.05 * truth[::-1] + 3e-4 * noise


SCENE = """
[recording]
file = "mix.wav"
{excerpt}
[array]
positions_m = [[0.0, 0.0, 0.0], [0.05, 0.0, 0.0]]
reference_channel = 1
[[talker]]
name = "First Mate"
references = {{ {first} }}
[[talker]]
name = "bosun"
references = {{ {second} }}
"""


def _scene(folder: Path, truth: Floats, *, first: str = "", second: str = "", excerpt: str = "") -> Scene:
    """A scene whose recording is the sum of the talkers at microphone 1, and late by 3 samples at microphone 0."""
    mixture = truth.sum(axis=0)
    write_audio(folder / "mix.wav", np.array([np.roll(mixture, 3), mixture]), RATE, overwrite=True)
    for name, signal in zip(("mate", "bosun"), truth, strict=True):
        write_audio(folder / f"{name}-image.wav", signal[None], RATE, overwrite=True)
        write_audio(folder / f"{name}-early.wav", signal[None] * 0.5, RATE, overwrite=True)
    text = SCENE.format(
        first=first or 'early = "mate-early.wav", image = "mate-image.wav"',
        second=second or 'early = "bosun-early.wav", image = "bosun-image.wav"',
        excerpt=excerpt,
    )
    (folder / "scene.toml").write_text(text)
    return Scene.load(folder / "scene.toml")


def _estimates(folder: Path, estimates: Floats, names: tuple[str, ...] = ("First-Mate", "bosun")) -> Path:
    for name, signal in zip(names, estimates, strict=True):
        write_audio(folder / f"{name}.wav", signal[None], RATE)
    return folder


def test_the_contract_of_the_json(truth: Floats, estimates: Floats) -> None:
    tree = grade(estimates, {"early": truth, "dry": truth}, sample_rate=RATE, unprocessed=truth.sum(axis=0)).to_dict()
    json.dumps(tree, allow_nan=False)
    assert tree["against"] == "early"
    assert [talker["name"] for talker in tree["talkers"]] == ["talker-1", "talker-2"]
    for talker in tree["talkers"]:
        assert {"sdr_db", "sir_db", "sar_db", "si_sdr_db", "stoi", "estoi", "offset_s", "undefined"} <= set(talker)
        for part in ("unprocessed", "gain"):
            assert {"sdr_db", "sir_db", "sar_db", "si_sdr_db", "stoi", "estoi"} <= set(talker[part])
        assert talker["gain"]["sdr_db"] == talker["sdr_db"] - talker["unprocessed"]["sdr_db"]
        assert talker["undefined"] == {}


def test_kinds_of_reference(truth: Floats, estimates: Floats) -> None:
    kinds = {"image": truth, "dry": truth[::-1]}
    assert grade(estimates, kinds, sample_rate=RATE).against == "image"
    swapped = grade(estimates, kinds, sample_rate=RATE, against="dry")
    assert swapped.against == "dry"
    assert swapped.talkers[0].sir_db < 0.0
    assert grade(estimates, truth, sample_rate=RATE).against == "plain"
    with pytest.raises(InputError, match="no early reference, only dry, image"):
        grade(estimates, kinds, sample_rate=RATE, against="early")
    with pytest.raises(InputError, match="no reference kind 'erly'"):
        grade(estimates, kinds, sample_rate=RATE, against="erly")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"estimates": np.zeros(100)}, "estimates: shape"),
        ({"estimates": np.zeros((2, 0))}, "estimates: shape"),
        ({"references": np.zeros((2, 64000), dtype=int)}, "references: type"),
        ({"references": np.zeros((3, 64000))}, "2 estimates for 3 references"),
        ({"references": np.ones((2, 10000))}, "references: 0.625 s long where 4.000 s are graded"),
        ({"unprocessed": np.ones(200000)}, "unprocessed: 12.500 s long"),
        ({"sample_rate": 16}, "sample_rate 16"),
        ({"filter_length": 0}, "filter_length 0"),
        ({"names": ["a"]}, "names: 1 for 2"),
        ({"microphones": np.ones((2, 64000)), "reference_channel": 2}, "reference_channel 2"),
    ],
)
def test_arrays_that_do_not_fit_are_refused(
    truth: Floats, estimates: Floats, change: dict[str, object], message: str
) -> None:
    given: dict[str, object] = {"estimates": estimates, "references": truth, "sample_rate": RATE} | change
    with pytest.raises(InputError, match=message):
        grade(**given)  # type: ignore[arg-type]


def test_lengths_that_differ_are_made_equal_with_a_warning(truth: Floats, estimates: Floats) -> None:
    short = grade(estimates, truth[:, :-1600], sample_rate=RATE)
    assert "references: 3.900 s long where 4.000 s are graded; padded with silence" in short.warnings
    long = grade(estimates[:, :-1600], truth, sample_rate=RATE)
    assert "references: 4.000 s long where 3.900 s are graded; trimmed" in long.warnings


def test_arrays_are_not_changed(truth: Floats, estimates: Floats) -> None:
    kept = truth.copy(), estimates.copy()
    grade(estimates, truth, sample_rate=RATE, microphones=truth, images=truth)
    np.testing.assert_array_equal(truth, kept[0])
    np.testing.assert_array_equal(estimates, kept[1])


def test_a_scene_is_graded_as_its_arrays_are(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    scene = _scene(tmp_path, truth)
    (tmp_path / "out").mkdir()
    grades = grade_scene(scene, _estimates(tmp_path / "out", estimates), out_dir=tmp_path / "out")
    mixture = truth.sum(axis=0)
    expected = grade(
        estimates,
        0.5 * truth,
        sample_rate=RATE,
        microphones=np.array([np.roll(mixture, 3), mixture]),
        reference_channel=1,
        images=truth,
    )
    assert grades.against == "early"
    assert [talker.name for talker in grades.talkers] == ["First Mate", "bosun"]
    for a, b in zip(grades.talkers, expected.talkers, strict=True):
        # Files hold single precision.
        assert a.sdr_db == pytest.approx(b.sdr_db, abs=1e-4)
        assert a.unprocessed.sir_db == pytest.approx(b.unprocessed.sir_db, abs=1e-4)
        assert list(a.leakage_db or {}) == (["bosun"] if a.name == "First Mate" else ["First Mate"])
    assert read_grades(tmp_path / "out") == grades
    assert grade_scene(scene, tmp_path / "out", against="image").against == "image"


def test_solution_json_says_which_file_is_whose(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    scene = _scene(tmp_path, truth)
    (tmp_path / "out").mkdir()
    _estimates(tmp_path / "out", estimates[::-1], ("one", "two"))
    talkers = [{"name": "First Mate", "file": "two.wav"}, {"name": "bosun", "file": "one.wav"}]
    record = tmp_path / "out" / "solution.json"
    record.write_text(json.dumps({"talkers": talkers}))
    grades = grade_scene(scene, tmp_path / "out")
    assert [round(talker.sir_db or 0.0) for talker in grades.talkers] == [26, 26]
    assert grades.warnings == ()
    for text in ("{", "[]", '{"talkers": [{"name": "x"}]}'):
        record.write_text(text)
        with pytest.raises(FileError, match=r"solution\.json: does not say which file is whose"):
            grade_scene(scene, tmp_path / "out")


def test_talkers_without_names_are_matched_by_assignment(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    scene = _scene(tmp_path, truth)
    (tmp_path / "out").mkdir()
    _estimates(tmp_path / "out", estimates[::-1], ("talker-1", "talker-2"))
    grades = grade_scene(scene, tmp_path / "out")
    assert [talker.estimate for talker in grades.talkers] == [1, 0]
    assert any("best assignment" in warning for warning in grades.warnings)
    with pytest.raises(InputError, match="no signal is called 'First Mate'"):
        grade_scene(scene, tmp_path / "out", match="name")


def test_references_of_another_rate_and_length(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    write_audio(tmp_path / "fine.wav", resample(truth[:1], RATE, 44100), 44100)
    write_audio(tmp_path / "short.wav", truth[1:, :-800], RATE)
    scene = _scene(tmp_path, truth, first='early = "fine.wav"', second='early = "short.wav"')
    (tmp_path / "out").mkdir()
    grades = grade_scene(scene, _estimates(tmp_path / "out", estimates))
    assert any("fine.wav: resampled from 44100 to 16000 Hz" in warning for warning in grades.warnings)
    assert any("short.wav" in warning and "padded" in warning for warning in grades.warnings)
    assert grades.talkers[0].si_sdr_db == pytest.approx(26.0 - _level_db(truth), abs=0.2)


def _level_db(truth: Floats) -> float:
    return float(20.0 * np.log10(np.linalg.norm(truth[1]) / np.linalg.norm(truth[0])))


def test_an_excerpt_is_graded_against_the_same_stretch(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    scene = _scene(tmp_path, truth, excerpt="start_s = 1.0\nstop_s = 3.5")
    (tmp_path / "out").mkdir()
    grades = grade_scene(scene, _estimates(tmp_path / "out", estimates[:, 16000:56000]))
    assert grades.warnings == ()
    assert abs(grades.talkers[0].offset_s or 0.0) < 1e-5
    assert grades.span_s == (0.0, 2.5)


def test_scenes_that_cannot_be_graded(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    scene = _scene(tmp_path, truth, second='dry = "bosun-early.wav"')
    with pytest.raises(InputError, match="no kind of reference in common"):
        grade_scene(scene, tmp_path)
    with pytest.raises(InputError, match="'bosun' has no image reference, only dry"):
        grade_scene(scene, tmp_path, against="image")
    scene = _scene(tmp_path, truth)
    with pytest.raises(FileError, match="no such folder"):
        grade_scene(scene, tmp_path / "nowhere")
    (tmp_path / "empty").mkdir()
    with pytest.raises(FileError, match="holds no audio files"):
        grade_scene(scene, tmp_path / "empty")
    write_audio(tmp_path / "mate-early.wav", truth[:1, :100], RATE, overwrite=True)
    with pytest.raises(InputError, match=r"mate-early\.wav: 0\.006 s long where 4\.000 s are graded"):
        grade_scene(scene, _estimates(tmp_path / "empty", estimates))


def test_grades_are_not_replaced_unasked(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    scene = _scene(tmp_path, truth)
    (tmp_path / "out").mkdir()
    _estimates(tmp_path / "out", estimates)
    grade_scene(scene, tmp_path / "out", out_dir=tmp_path / "out")
    first = (tmp_path / "out" / "grades.json").read_text()
    with pytest.raises(FileError, match="exists already"):
        grade_scene(scene, tmp_path / "out", out_dir=tmp_path / "out")
    grade_scene(scene, tmp_path / "out", out_dir=tmp_path / "out", against="image", overwrite=True)
    assert (tmp_path / "out" / "grades.json").read_text() != first
    assert sorted(path.name for path in (tmp_path / "out").iterdir()) == ["First-Mate.wav", "bosun.wav", "grades.json"]


def test_grades_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="no such file"):
        read_grades(tmp_path)
    for text in ("{", "[]", '{"talkers": []}'):
        (tmp_path / "grades.json").write_text(text)
        with pytest.raises(FileError, match="does not hold grades"):
            read_grades(tmp_path)


def test_files(tmp_path: Path, truth: Floats, estimates: Floats) -> None:
    references = [tmp_path / "mate.wav", tmp_path / "bosun.wav"]
    for path, signal in zip(references, truth, strict=True):
        write_audio(path, signal[None], RATE)
    made = [tmp_path / "out" / "x.wav", tmp_path / "out" / "y.wav"]
    for path, signal in zip(made, estimates[::-1], strict=True):
        path.parent.mkdir(exist_ok=True)
        write_audio(path, signal[None], RATE)
    mixture = truth.sum(axis=0)
    write_audio(tmp_path / "mix.wav", np.array([truth[0], mixture]), RATE)
    grades = grade_files(made, references, unprocessed=tmp_path / "mix.wav", unprocessed_channel=1, out_dir=tmp_path)
    assert [(talker.name, talker.estimate) for talker in grades.talkers] == [("mate", 1), ("bosun", 0)]
    assert grades.talkers[0].best_channel == 0
    assert grades.talkers[0].gain.si_sdr_db == pytest.approx(26.0, abs=0.3)
    assert read_grades(tmp_path / "grades.json") == grades
    with pytest.raises(InputError, match=r"mix\.wav: there is no channel 2"):
        grade_files(made, references, unprocessed=tmp_path / "mix.wav", unprocessed_channel=2)
    with pytest.raises(InputError, match=r"mix\.wav: has 2 channels"):
        grade_files([tmp_path / "mix.wav", made[0]], references)
    with pytest.raises(FileError, match=r"none\.wav: no such file"):
        grade_files(made, [tmp_path / "none.wav", references[0]])


@pytest.mark.parametrize(
    ("subtype", "precision"), [("PCM_24", np.float32), ("FLOAT", np.float32), ("DOUBLE", np.float64)]
)
def test_long_files_are_read_in_single_precision_where_that_loses_nothing(
    tmp_path: Path, truth: Floats, monkeypatch: pytest.MonkeyPatch, subtype: str, precision: type
) -> None:
    write_audio(tmp_path / "a.wav", truth[:1], RATE, subtype=subtype)
    short, _ = read_signal(tmp_path / "a.wav", RATE)
    monkeypatch.setattr("unmix.jobs.grade_inputs.LONG_S", 1.0)
    long, _ = read_signal(tmp_path / "a.wav", RATE)
    assert (short.dtype, long.dtype) == (np.float64, precision)
    assert np.array_equal(short, long)


def test_only_one_microphone_of_a_long_recording_is_read(
    tmp_path: Path, truth: Floats, monkeypatch: pytest.MonkeyPatch
) -> None:
    write_audio(tmp_path / "mix.wav", truth, RATE)
    one, every, said = recording_of_file(tmp_path / "mix.wav", RATE, truth.shape[1], 1)
    assert every.shape == truth.shape and np.array_equal(one, every[1]) and not said
    monkeypatch.setattr("unmix.jobs.grade_inputs.ALL_MICROPHONES_S", 1.0)
    alone, only, said = recording_of_file(tmp_path / "mix.wav", RATE, truth.shape[1], 1)
    assert only.shape == (1, truth.shape[1]) and np.array_equal(alone, one)
    assert "best single microphone is not looked for" in said[0]
