"""Who speaks when, as RTTM: out and in again."""

from __future__ import annotations

from pathlib import Path

import pytest

from unmix.errors import FileError, InputError
from unmix.rttm import read_rttm, write_rttm


def test_what_is_written_comes_back(tmp_path: Path) -> None:
    activity = {"mate": [(0.5, 2.25), (4.0, 4.5)], "Chief Pilot": [(1.0, 3.0)]}
    write_rttm(tmp_path / "a.rttm", activity, file_id="mix")
    lines = (tmp_path / "a.rttm").read_text().splitlines()
    assert lines[0] == "SPEAKER mix 1 0.500 1.750 <NA> <NA> mate <NA> <NA>"
    assert [line.split()[7] for line in lines] == ["mate", "Chief_Pilot", "mate"]
    assert read_rttm(tmp_path / "a.rttm") == {"mate": [(0.5, 2.25), (4.0, 4.5)], "Chief_Pilot": [(1.0, 3.0)]}


def test_other_lines_are_left_alone(tmp_path: Path) -> None:
    (tmp_path / "a.rttm").write_text(
        ";; a remark\nSPKR-INFO mix 1 <NA> <NA> <NA> unknown mate <NA> <NA>\n\n"
        "SPEAKER mix 1 1.0 2.0 <NA> <NA> mate <NA> <NA>\n"
    )
    assert read_rttm(tmp_path / "a.rttm") == {"mate": [(1.0, 3.0)]}


@pytest.mark.parametrize(
    ("line", "message"),
    [
        ("SPEAKER mix 1 1.0", "line 1: not an RTTM SPEAKER line"),
        ("SPEAKER mix 1 x 2.0 <NA> <NA> mate", "line 1: not an RTTM SPEAKER line"),
        ("SPEAKER mix 1 -1.0 2.0 <NA> <NA> mate", "start -1.0 s and duration 2.0 s are no stretch"),
        ("SPEAKER mix 1 1.0 nan <NA> <NA> mate", "duration nan s are no stretch"),
    ],
)
def test_wrong_lines_are_named(tmp_path: Path, line: str, message: str) -> None:
    (tmp_path / "a.rttm").write_text(line + "\n")
    with pytest.raises(InputError, match=message):
        read_rttm(tmp_path / "a.rttm")


def test_missing_and_existing_files(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="no such file"):
        read_rttm(tmp_path / "no.rttm")
    (tmp_path / "a.rttm").write_text("keep me")
    with pytest.raises(FileError, match="overwrite"):
        write_rttm(tmp_path / "a.rttm", {"mate": [(0.0, 1.0)]}, file_id="mix")
    assert (tmp_path / "a.rttm").read_text() == "keep me"
