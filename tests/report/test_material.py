"""What a report is made of: folders, pseudonyms, stretches, loudness, and what goes wrong."""

from __future__ import annotations

import base64
import io
import json
import re
import shutil
from pathlib import Path

import numpy as np
import pytest
import soundfile
from markupsafe import escape

import unmix
from tests.conftest import speech
from tests.report.conftest import NAMES, RATE
from unmix.audio import Samples, read_audio, write_audio
from unmix.errors import FileError, InputError
from unmix.jobs.grade import read_grades
from unmix.report.health import health_of
from unmix.report.levels import STEP_S, frame_powers, spoken, telling_stretch
from unmix.report.loudness import loudness
from unmix.report.material import SceneMaterial, material_of_folder, pseudonyms
from unmix.report.page import kind_of_page
from unmix.report.scene_page import UNGRADED, scene_report, write_scene_report
from unmix.report.scene_sound import scene_sound
from unmix.report.sound import encode, matched_levels
from unmix.report.spectrogram import palette, spectrogram_db, spectrogram_png
from unmix.report.words import talker_verdict, words_right_percent


def test_a_folder_tells_scene_and_figures(material: SceneMaterial) -> None:
    assert material.names == NAMES
    assert set(material.outputs) == set(material.references) == set(NAMES)
    assert material.recording is not None and len(material.recording.channels) == 7
    assert material.notes == ()


def test_a_folder_that_moved_says_what_is_missing(solved: Path, tmp_path: Path) -> None:
    shutil.copytree(solved / "out", tmp_path / "far" / "out")
    found = material_of_folder(tmp_path / "far" / "out")
    assert found.scene is None and found.grades is not None
    assert "no sound before separation" in found.notes[0]
    text = scene_report(found)
    assert "audio-after-0" in text and "audio-mic" not in text
    again = material_of_folder(tmp_path / "far" / "out", scene=solved / "scene.toml")
    assert again.scene is not None and again.notes == ()


def test_a_scene_nobody_has_separated_is_shown(solved: Path) -> None:
    found = material_of_folder(solved)
    assert found.outputs == {} and set(found.references) == set(NAMES)
    text = scene_report(found)
    assert "Not separated yet" in text and 'id="audio-mic"' in text and 'id="audio-after' not in text


def test_the_same_from_python(solved: Path, tmp_path: Path) -> None:
    page = unmix.write_report(solved / "out", tmp_path / "r.html", audio=False, hide_names=True)
    assert isinstance(page, unmix.PageFile) and page.bytes == page.path.stat().st_size
    assert kind_of_page(page.path) == "scene, graded, without sound, without names"
    with pytest.raises(unmix.FileError, match="exists already"):
        unmix.write_report(solved / "out", page.path)
    unmix.save_figure(unmix.verdict_figure(read_grades(solved / "out")), tmp_path / "v.svg")
    assert "intelligibility" in (tmp_path / "v.svg").read_text(encoding="utf-8")


def test_stale_grades_are_pointed_out(solved: Path, tmp_path: Path) -> None:
    import os

    shutil.copytree(solved / "out", tmp_path / "out")
    os.utime(tmp_path / "out" / "grades.json", (1e9, 1e9))
    assert "grades.json is older" in material_of_folder(tmp_path / "out").notes[0]


@pytest.mark.parametrize(
    ("content", "error"), [("{", FileError), ('{"talkers": []}', FileError), ('{"talkers": 3}', FileError)]
)
def test_a_damaged_solution_is_named(tmp_path: Path, content: str, error: type[Exception]) -> None:
    (tmp_path / "solution.json").write_text(content)
    with pytest.raises(error, match=r"solution\.json: is not a solution"):
        material_of_folder(tmp_path)


def test_a_folder_without_results_is_an_error(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"neither solution\.json nor grades\.json"):
        material_of_folder(tmp_path)
    with pytest.raises(FileError, match="no such folder"):
        material_of_folder(tmp_path / "nowhere")


def test_pseudonyms_leave_no_name_behind(material: SceneMaterial) -> None:
    from dataclasses import replace

    tree = dict(material.solution or {}) | {"warnings": [f"{NAMES[0]} went beyond full scale", "the o'neil side"]}
    text = scene_report(pseudonyms(replace(material, solution=tree, title=f"{NAMES[1]} talks")), audio=False)
    for name in NAMES:
        assert name not in text and json.dumps(name)[1:-1] not in text
    assert "onload" not in text and "أحمد" not in text and "Neil" not in text.replace("the o'neil side", "")
    assert "Talker A went beyond full scale" in text
    assert "Talker B talks" in text


def test_pseudonyms_replace_whole_words_in_one_pass() -> None:
    material = SceneMaterial("A met B; Band and a", names=("A", "B"), notes=("B then A",))
    found = pseudonyms(material)
    assert found.title == "Talker A met Talker B; Band and Talker A"
    assert found.notes == ("Talker B then Talker A",)


def test_without_sound_no_voice_is_inside(material: SceneMaterial, tmp_path: Path) -> None:
    page = write_scene_report(material, tmp_path / "r.html", audio=False)
    text = page.path.read_text(encoding="utf-8")
    assert "audio-" not in text and "data-transport" not in text and "fLaC" not in text
    assert page.bytes < 1_500_000
    assert kind_of_page(page.path) == "scene, graded, without sound, with names"
    with pytest.raises(FileError, match="exists already"):
        write_scene_report(material, tmp_path / "r.html", audio=False)


def test_kinds_of_page_are_told_apart(material: SceneMaterial, tmp_path: Path) -> None:
    from dataclasses import replace

    page = write_scene_report(replace(material, grades=None), tmp_path / "r.html")
    assert kind_of_page(page.path) == UNGRADED
    (tmp_path / "mine.html").write_text("<p>mine</p>")
    assert kind_of_page(tmp_path / "mine.html") is None


def test_the_sound_inside_is_the_sound_outside(material: SceneMaterial) -> None:
    sound = scene_sound(material, megabytes=5.0)
    assert sound is not None and sound.seconds == pytest.approx(4.0)
    assert [h.id for h in sound.heard] == ["mic", *(f"{kind}-{k}" for k in range(3) for kind in ("after", "reference"))]
    coded = sound.encoded()[1]
    decoded, rate = soundfile.read(io.BytesIO(base64.b64decode(coded.data)))
    assert rate == RATE
    given, _ = soundfile.read(material.outputs[NAMES[0]])
    np.testing.assert_allclose(coded.as_it_was * decoded, given, atol=2e-5)


def test_everything_is_equally_loud_and_nothing_clips() -> None:
    loud, quiet = speech("novel-reader", 3.0), 0.01 * speech("card-reader", 3.0)
    gains = matched_levels([loud, quiet], RATE)
    levels = [loudness(20.0 * g * s, RATE) for g, s in zip(gains, (loud, quiet), strict=True)]
    assert levels[0] == pytest.approx(levels[1], abs=0.01)
    assert max(np.abs(gains[0] * loud).max(), np.abs(gains[1] * quiet).max()) <= 10 ** (-1 / 20) + 1e-9
    stored = encode(quiet, RATE, gains[1])
    assert stored.matched * 10 ** (-1 / 20) / np.abs(quiet).max() == pytest.approx(gains[1])


def test_silence_has_no_loudness_and_no_speech() -> None:
    assert loudness(np.zeros(RATE), RATE) is None
    assert spoken(frame_powers(Samples(np.zeros((1, RATE)), RATE))) == []
    assert matched_levels([np.zeros(RATE)], RATE) == [1.0]
    assert encode(np.zeros(RATE), RATE, 1.0).matched == 1.0


def test_speech_is_found_where_it_is() -> None:
    signal = np.zeros((1, 6 * RATE))
    signal[0, 2 * RATE : 4 * RATE] = speech("novel-reader", 2.0)
    stretches = spoken(frame_powers(Samples(signal, RATE)))
    assert stretches[0][0] == pytest.approx(2.0, abs=0.3)
    assert stretches[-1][1] == pytest.approx(4.0, abs=0.3)


def test_the_stretch_is_where_both_speak() -> None:
    powers = np.full((2, round(60 / STEP_S)), 1e-9)
    powers[0, : round(40 / STEP_S)] = 1e-2
    powers[1, round(30 / STEP_S) :] = 1e-2
    start, stop = telling_stretch(powers, 8.0)
    assert stop - start == pytest.approx(8.0)
    assert start + 1e-9 >= 30.0 and stop <= 40.0 + 1e-9


def test_a_long_recording_is_cut_to_what_fits(tmp_path: Path) -> None:
    rng = np.random.default_rng(5)
    noise = 0.1 * rng.standard_normal((1, 90 * 8000))
    write_audio(tmp_path / "a.wav", noise, 8000)
    material = SceneMaterial("long", ("a",), recording=Samples(noise, 8000), outputs={"a": tmp_path / "a.wav"})
    page = write_scene_report(material, tmp_path / "r.html", sound_mb=0.5)
    assert 0.5e6 < page.bytes < 1.0e6
    text = page.path.read_text(encoding="utf-8")
    assert re.search(r"Shown and played: \d+:\d\d\.\d to \d+:\d\d\.\d of 1:30\.0", text)


def test_late_references_are_moved_to_the_talkers(solved: Path, tmp_path: Path) -> None:
    from dataclasses import replace

    found = material_of_folder(solved / "out")
    assert found.grades is not None
    late = replace(found.grades, talkers=tuple(replace(t, offset_s=0.25) for t in found.grades.talkers))
    plain, moved = scene_sound(found, megabytes=5.0), scene_sound(replace(found, grades=late), megabytes=5.0)
    assert plain is not None and moved is not None
    shift = round(0.25 * RATE)
    np.testing.assert_array_equal(moved.heard[2].signal[:shift], 0.0)
    np.testing.assert_allclose(moved.heard[2].signal[shift:], plain.heard[2].signal[:-shift], atol=1e-12)


def test_a_missing_file_is_left_out_with_a_note(solved: Path, tmp_path: Path) -> None:
    shutil.copytree(solved, tmp_path / "s")
    (tmp_path / "s" / "clean-0.wav").write_bytes(b"RIFF")
    found = material_of_folder(tmp_path / "s" / "out")
    assert "not in this report:" in scene_report(found)


def test_a_tone_stands_at_its_frequency() -> None:
    t = np.arange(2 * RATE) / RATE
    levels = spectrogram_db(0.5 * np.sin(2 * np.pi * 3000.0 * t), RATE)
    row = int(levels.mean(axis=1).argmax())
    assert (row + 0.5) / len(levels) * RATE / 2 == pytest.approx(3000.0, abs=80.0)
    assert levels.max() == pytest.approx(20 * np.log10(0.5), abs=0.3)
    png = spectrogram_png(levels, float(levels.max()), palette())
    assert png.startswith(b"\x89PNG") and len(png) < 200_000


def test_words_follow_the_figures(solved: Path) -> None:
    low, high = words_right_percent(0.7)
    # Taal et al. 2011, the two fits at 0.7.
    assert (low, high) == pytest.approx((92.77, 95.69), abs=0.01)
    talker = read_grades(solved / "out").talkers[0]
    from dataclasses import replace

    assert talker_verdict(replace(talker, stoi=0.95)).level == "good"
    assert talker_verdict(replace(talker, stoi=0.65)).level == "fair"
    worse = replace(talker, stoi=0.3, unprocessed=replace(talker.unprocessed, stoi=0.6))
    assert talker_verdict(worse).headline == "cannot be understood, worse than before"
    unknown = talker_verdict(replace(talker, stoi=None, undefined={"stoi": "silent"}))
    assert unknown.level == "unknown" and "silent" in unknown.sentence


def test_the_health_check_is_in_the_report(material: SceneMaterial) -> None:
    from dataclasses import replace

    sound = scene_sound(material, megabytes=5.0)
    found = health_of(material, sound)
    assert found is not None and found.of == "the whole recording"
    text = scene_report(material, audio=False)
    assert "Health of the recording" in text
    for finding, _ in found.findings:
        assert str(escape(finding.remedy)) in text
    assert health_of(replace(material, scene=None), sound) is None


def test_a_damaged_channel_is_a_warning_at_the_top(solved: Path, tmp_path: Path) -> None:
    shutil.copytree(solved, tmp_path / "s")
    rows, rate = read_audio(tmp_path / "s" / "mix.wav")
    rows[3] = 0.0
    write_audio(tmp_path / "s" / "mix.wav", rows, rate, overwrite=True)
    text = scene_report(material_of_folder(tmp_path / "s" / "out"), audio=False)
    top = text[: text.index("Look and listen")]
    assert re.search(r"\d+ warnings?</strong>", top) and "silent" in top


def test_a_long_recording_is_checked_where_it_is_shown(
    material: SceneMaterial, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("unmix.report.health.LONGEST_S", 3.0)
    found = health_of(material, scene_sound(material, megabytes=1.0))
    assert found is not None and found.of == "the stretch shown above"
