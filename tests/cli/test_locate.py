"""`unmix locate`: table, JSON, picture, RTTM, the scene written back; what bad input gets."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from tests.cli.conftest import Run
from unmix.rttm import read_rttm
from unmix.scene import Scene

Rewrite = Callable[[Callable[[np.ndarray], np.ndarray]], Path]


@pytest.fixture
def unplaced(scene: Path) -> Path:
    """The scene without bearings."""
    text = scene.read_text().replace("azimuth_deg = 20.0\n", "").replace("azimuth_deg = 110.0\n", "")
    scene.write_text(text)
    return scene


def test_json_is_one_object_with_every_talker(run: Run, unplaced: Path) -> None:
    ran = run("locate", unplaced, "--json")
    assert ran.status == 0
    first, second = ran.json["talkers"]
    assert (first["name"], second["name"]) == ("mate", "Chief Pilot")
    assert first["azimuth_deg"] == pytest.approx(20.0, abs=0.5)
    assert second["azimuth_deg"] == pytest.approx(110.0, abs=0.5)
    assert 0.0 < first["azimuth_std_deg"] < 2.0
    assert {"elevation_deg", "elevation_std_deg", "candidates", "active_s", "moving"} <= set(first)
    assert ran.json["count"]["estimated"] == 2
    assert any("flat array" in line for line in ran.json["warnings"])


def test_the_table_is_for_people(run: Run, unplaced: Path) -> None:
    ran = run("locate", unplaced)
    assert ran.status == 0
    assert ran.out.startswith("2 talkers in 1.5 s, bearings in the array's frame, found in")
    rows = {line.split()[0]: line for line in ran.out.splitlines() if line.strip()}
    assert "20." in rows["mate"] or "19." in rows["mate"]
    assert "at rest" in rows["mate"]
    assert "flat array: above and below look alike" in ran.out + ran.err


def test_everything_is_written_and_nothing_replaced(run: Run, unplaced: Path, tmp_path: Path) -> None:
    options = ["--out", tmp_path / "b.toml", "--rttm", tmp_path / "b.rttm", "--plot", tmp_path / "b.svg"]
    assert run("locate", unplaced, *options).status == 0
    back = Scene.load(tmp_path / "b.toml")
    assert [t.name for t in back.talkers] == ["mate", "Chief Pilot"]
    assert np.degrees(back.talkers[1].azimuth or 0.0) == pytest.approx(110.0, abs=0.5)
    assert back.talkers[1].distance_m == 1.2 and "plain" in back.talkers[0].references
    assert set(read_rttm(tmp_path / "b.rttm")) == {"mate", "Chief_Pilot"}
    assert (tmp_path / "b.svg").read_text().lstrip().startswith("<?xml")
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}
    again = run("locate", unplaced, *options)
    assert again.status == 1 and "--overwrite" in again.err
    assert {p.name: p.read_bytes() for p in tmp_path.iterdir()} == before
    assert run("locate", unplaced, *options, "--overwrite").status == 0
    assert (tmp_path / "b.svg").read_bytes() == before["b.svg"]


def test_the_scene_written_back_is_solved(run: Run, unplaced: Path, tmp_path: Path) -> None:
    """Locate, correct by hand, solve."""
    assert run("locate", unplaced, "--out", tmp_path / "b.toml").status == 0
    text = (tmp_path / "b.toml").read_text()
    assert "azimuth_deg" in text
    solved = run("solve", tmp_path / "b.toml", "--out", tmp_path / "out", "--variant", "model", "--json")
    assert solved.status == 0
    assert [t["name"] for t in solved.json["talkers"]] == ["mate", "Chief Pilot"]


def test_activity_written_is_read_back_by_the_scene(run: Run, unplaced: Path, tmp_path: Path) -> None:
    assert run("locate", unplaced, "--rttm", tmp_path / "who.rttm").status == 0
    unplaced.write_text('activity = "who.rttm"\n' + unplaced.read_text())
    talkers = Scene.load(unplaced).talkers
    assert all(t.active_s for t in talkers)


def test_silence_is_no_failure_and_is_said(run: Run, unplaced: Path, rewrite: Rewrite, tmp_path: Path) -> None:
    text = unplaced.read_text()
    rewrite(lambda mixture: 0.0 * mixture).write_text(text)
    ran = run("locate", unplaced, "--json", "--out", tmp_path / "b.toml", "--plot", tmp_path / "b.png")
    assert ran.status == 0 and ran.json["talkers"] == []
    assert any("silence" in line for line in ran.json["warnings"])
    assert [t.name for t in Scene.load(tmp_path / "b.toml").talkers] == ["mate", "Chief Pilot"]
    assert (tmp_path / "b.png").stat().st_size > 1000


@pytest.mark.parametrize(
    ("options", "status", "message"),
    [
        (["--talkers", "5"], 2, "0<=x<=4"),
        (["--method", "music"], 2, "is not one of"),
        (["--method", "srp", "--plot", "b.bmp"], 1, "pictures are written as"),
    ],
)
def test_wrong_options(run: Run, unplaced: Path, options: list[str], status: int, message: str) -> None:
    ran = run("locate", unplaced, *options, "--json")
    assert (ran.status, ran.out) == (status, "")
    assert message in ran.err


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ("0,1,0,0,0\n2,1,0,0,0\n1,1,0,0,0\n", "line 4: time_s does not increase"),
        ("0,1,0,0,0\n1,0,0,0,0\n", "line 3: quaternion of length zero"),
        ("0,1,0,0\n", "line 2: expected 5 numbers"),
    ],
)
def test_wrong_orientations_are_one_line(run: Run, unplaced: Path, rows: str, message: str) -> None:
    (unplaced.parent / "head.csv").write_text(f"time_s,qw,qx,qy,qz\n{rows}")
    unplaced.write_text(unplaced.read_text() + '\n[orientation]\nfile = "head.csv"\n')
    ran = run("locate", unplaced, "--json")
    assert (ran.status, ran.out) == (1, "")
    assert message in ran.err and len(ran.err.strip().splitlines()) == 1


def test_odd_orientations_are_warned_of(run: Run, unplaced: Path) -> None:
    """Quaternions of length three that end early: normalised, held, and both said."""
    rows = "".join(f"{0.01 * k},3,0,0,0\n" for k in range(20))
    (unplaced.parent / "head.csv").write_text(f"time_s,qw,qx,qy,qz\n{rows}")
    unplaced.write_text(unplaced.read_text() + '\n[orientation]\nfile = "head.csv"\n')
    ran = run("locate", unplaced, "--json")
    assert ran.status == 0 and ran.json["frame"] == "world"
    said = "\n".join(ran.json["warnings"])
    assert "not of unit length" in said and "normalised" in said
    assert "the orientation ends at 0.2 s of the 1.5 s recording" in said
    assert ran.json["talkers"][0]["azimuth_deg"] == pytest.approx(20.0, abs=1.0)
