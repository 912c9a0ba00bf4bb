"""Bearings and orientations over time."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from unmix.errors import FileError, InputError
from unmix.track import Orientation, Track


def write(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def test_a_track_comes_back_as_written(tmp_path: Path) -> None:
    track = Track(np.array([0.0, 1.5]), np.radians([10.0, 350.0]), np.radians([0.0, 20.0]), np.array([1.0, 2.0]))
    track.save(tmp_path / "a.csv")
    back = Track.load(tmp_path / "a.csv")
    for name in ("time_s", "azimuth", "elevation", "distance_m"):
        np.testing.assert_allclose(getattr(back, name), getattr(track, name), atol=1e-5)


def test_elevation_and_distance_may_be_left_out(tmp_path: Path) -> None:
    track = Track.load(write(tmp_path / "a.csv", "time_s,azimuth_deg\n0,10\n# a remark\n1,20\n"))
    np.testing.assert_array_equal(track.elevation, [0.0, 0.0])
    assert np.isnan(track.distance_m).all()
    track.save(tmp_path / "b.csv")
    assert "distance_m" not in (tmp_path / "b.csv").read_text()


def test_bearings_go_the_short_way_round_and_are_held_beyond_the_ends(tmp_path: Path) -> None:
    track = Track.load(write(tmp_path / "a.csv", "time_s,azimuth_deg\n1,170\n2,-170\n"))
    azimuth, _, _ = track.at([0.0, 1.0, 1.5, 2.0, 9.0])
    np.testing.assert_allclose(np.degrees(azimuth) % 360.0, [170.0, 170.0, 180.0, 190.0, 190.0], atol=1e-9)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "column `time_s` is missing"),
        ("time_s,azimuth\n0,1\n", "column `azimuth_deg` is missing; the first line must name time_s, azimuth_deg"),
        ("time_s,azimuth_deg,range_m\n0,1,2\n", "unknown column `range_m`; known: time_s, azimuth_deg, elevation_deg"),
        ("time_s,azimuth_deg\n", "no rows below the header"),
        ("time_s,azimuth_deg\n0,1\n1,x\n", "line 3: expected 2 numbers, got '1,x'"),
        ("time_s,azimuth_deg\n0,1\n# remark\n2\n", "line 4: expected 2 numbers, got '2'"),
        ("time_s,azimuth_deg\n0,1,2\n", "line 2: expected 2 numbers"),
        ("time_s,azimuth_deg\n0,nan\n", "line 2: values must be finite"),
        ("time_s,azimuth_deg\n0,1\n# remark\n2,1\n1,1\n", "line 5: time_s does not increase"),
        ("time_s,azimuth_deg,distance_m\n0,1,0\n", "`distance_m`: 0; give metres above zero"),
    ],
)
def test_wrong_tracks_name_file_and_line(tmp_path: Path, text: str, message: str) -> None:
    path = write(tmp_path / "a.csv", text)
    with pytest.raises(InputError, match=message) as caught:
        Track.load(path)
    assert str(caught.value).startswith(f"{path}: ")


def test_tracks_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(FileError, match=r"no\.csv: no such file"):
        Track.load(tmp_path / "no.csv")
    (tmp_path / "bytes.csv").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(FileError, match=r"bytes\.csv: cannot be read as text"):
        Track.load(tmp_path / "bytes.csv")


def test_a_spreadsheets_byte_order_mark_is_no_part_of_the_first_name(tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_bytes(b"\xef\xbb\xbftime_s,azimuth_deg\r\n0,1\r\n")
    assert Track.load(tmp_path / "a.csv").time_s.tolist() == [0.0]


def test_an_orientation_turns_array_coordinates_into_the_worlds(tmp_path: Path) -> None:
    """A quarter turn about z: the array's front is the world's left. Quaternions of any length are taken."""
    text = "time_s,qw,qx,qy,qz\n0,1,0,0,0\n2,3,0,0,3\n"
    orientation = Orientation.load(write(tmp_path / "o.csv", text))
    turned = orientation.matrices([0.0, 1.0, 2.0, 5.0])
    assert turned.shape == (4, 3, 3)
    front = turned @ np.array([1.0, 0.0, 0.0])
    half = np.sqrt(0.5)
    np.testing.assert_allclose(front, [[1, 0, 0], [half, half, 0], [0, 1, 0], [0, 1, 0]], atol=1e-12)


def test_one_row_of_orientation_holds_for_ever(tmp_path: Path) -> None:
    orientation = Orientation.load(write(tmp_path / "o.csv", "time_s,qw,qx,qy,qz\n0,0,0,0,1\n"))
    np.testing.assert_allclose(orientation.matrices([0.0, 3.0])[1], np.diag([-1.0, -1.0, 1.0]), atol=1e-12)


def test_an_orientation_without_a_rotation_is_refused(tmp_path: Path) -> None:
    path = write(tmp_path / "o.csv", "time_s,qw,qx,qy,qz\n0,1,0,0,0\n1,0,0,0,0\n")
    with pytest.raises(InputError, match="line 3: quaternion of length zero"):
        Orientation.load(path)
