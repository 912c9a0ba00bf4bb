"""Array files and what they refuse."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from unmix.array import Array, ArrayFile
from unmix.errors import FileError, InputError

SQUARE = [[0.0, 0.0, 0.0], [0.04, 0.0, 0.0], [0.0, 0.04, 0.0], [0.0, 0.0, 0.03]]


def write(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def test_an_array_file_comes_back_as_written(tmp_path: Path) -> None:
    array = Array.from_file(
        ArrayFile(
            positions_m=SQUARE,
            reference_channel=2,
            title="puck",
            gain_db=[0.0, 0.5, -0.25, 0.0],
            delay_s=[0.0, 1e-6, 0.0, -2e-6],
            polarity=[1, -1, 1, 1],
            gain_std_db=[0.1] * 4,
            full_scale_db_spl=114.0,
        ),
        where="here",
    )
    array.save(tmp_path / "array.toml")
    back = Array.load(tmp_path / "array.toml")
    for name in ("positions_m", "gain_db", "delay_s", "polarity", "gain_std_db"):
        np.testing.assert_array_equal(getattr(back, name), getattr(array, name))
    assert (back.reference_channel, back.title, back.full_scale_db_spl) == (2, "puck", 114.0)
    assert back.delay_std_s is None
    with pytest.raises(FileError, match="exists already"):
        array.save(tmp_path / "array.toml")


def test_corrections_are_neutral_when_unknown() -> None:
    array = Array.from_positions(SQUARE)
    np.testing.assert_array_equal(array.gain_db, np.zeros(4))
    np.testing.assert_array_equal(array.delay_s, np.zeros(4))
    np.testing.assert_array_equal(array.polarity, np.ones(4))
    assert array.channels == 4
    assert array.aperture_m == pytest.approx(0.04 * np.sqrt(2))


def test_positions_handed_in_stay_the_callers() -> None:
    positions = np.array(SQUARE)
    array = Array.from_positions(positions)
    positions[:] = 7.0
    np.testing.assert_array_equal(array.positions_m, SQUARE)


def test_taking_channels_keeps_the_reference_where_it_can() -> None:
    array = Array.from_file(
        ArrayFile(positions_m=SQUARE, reference_channel=2, gain_db=[0.0, 1.0, 2.0, 3.0]), where="here"
    )
    some = array.take([3, 2])
    assert some.reference_channel == 1
    np.testing.assert_array_equal(some.gain_db, [3.0, 2.0])
    np.testing.assert_array_equal(some.positions_m, np.array(SQUARE)[[3, 2]])
    assert array.take([0, 1]).reference_channel == 0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("positions_m = [[0.0, 0.0, 0.0], [0.0, 0.0, 0.0]]", "microphones 0 and 1 stand at the same place"),
        ("positions_m = [[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [1.0, 0.0, 1e-7]]", "microphones 1 and 2 stand"),
        ("positions_m = [[0, 0, 0], [40, 0, 0]]", r"40 m wide; are the positions in millimetres\?"),
        ("positions_m = [[0.0, 0.0], [0.1, 0.0]]", r"give \[x, y, z\] in metres for each microphone"),
        ("positions_m = []", "for each microphone"),
        ("positions_m = [[0, 0, 0], [nan, 0, 0]]", "positions must be finite"),
        ("positions_mm = [[0, 0, 0]]", r"unknown key `positions_mm` in the top level; did you mean `positions_m`\?"),
        ("positions_m = [[0, 0, 0]]\nreference_channel = 1", "`reference_channel`: 1 is not a channel; .* 0 to 0"),
        ("positions_m = [[0, 0, 0]]\ngain_db = [0.0, 1.0]", "`gain_db`: 2 values for 1 microphones"),
        ("positions_m = [[0, 0, 0]]\ndelay_s = [inf]", "`delay_s`: values must be finite"),
        ("positions_m = [[0, 0, 0]]\npolarity = [0]", "`polarity`: each value must be 1 or -1"),
        ("title = 'x'", "key `positions_m` is missing"),
    ],
)
def test_wrong_array_files(tmp_path: Path, text: str, message: str) -> None:
    path = write(tmp_path / "array.toml", text)
    with pytest.raises(InputError, match=message) as caught:
        Array.load(path)
    assert str(caught.value).startswith(f"{path}: ")
    assert "\n" not in str(caught.value)


def test_a_large_array_is_taken_when_it_is_meant(tmp_path: Path) -> None:
    text = "positions_m = [[0, 0, 0], [40, 0, 0]]\nallow_large = true"
    array = Array.load(write(tmp_path / "array.toml", text))
    assert array.aperture_m == 40.0
    array.save(tmp_path / "again.toml")
    assert Array.load(tmp_path / "again.toml").aperture_m == 40.0


def test_positions_of_another_shape() -> None:
    with pytest.raises(InputError, match=r"expected \(channels, 3\), got shape \(3,\)"):
        Array.from_positions([0.0, 0.0, 0.0])
