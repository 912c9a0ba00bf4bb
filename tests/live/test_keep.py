"""The file in which a live separator's state is kept: whole after any end, and cheap to keep."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.live.test_separator import RATE, live, recording, seats
from unmix.errors import FileError, InputError
from unmix.live.keep import Keeper

CHUNK = 32


def run(path: Path, count: int, *, snapshot_s: float = 10.0, variant: str = "model") -> None:
    """Keep `count` chunks, and leave the file as a process that dies would."""
    separator = live(variant)
    keeper = Keeper(path, separator, snapshot_s=snapshot_s)
    for at in range(0, count * CHUNK, CHUNK):
        chunk = recording()[:, at : at + CHUNK]
        separator.push(chunk)
        keeper.took(chunk)
    keeper.close()  # which writes nothing


@pytest.mark.parametrize("variant", ["model", "low-latency"])
@pytest.mark.parametrize("snapshot_s", [10.0, 0.05])
def test_what_goes_on_is_the_same_to_the_last_bit(tmp_path: Path, snapshot_s: float, variant: str) -> None:
    run(tmp_path / "state", 120, snapshot_s=snapshot_s, variant=variant)
    calm, separator = live(variant), live(variant)
    for at in range(0, 120 * CHUNK, CHUNK):
        calm.push(recording()[:, at : at + CHUNK])
    assert Keeper(tmp_path / "state", separator).load()
    assert separator.position == 120 * CHUNK
    rest = recording()[:, 120 * CHUNK :]
    assert np.array_equal(separator.push(rest), calm.push(rest))


@pytest.mark.parametrize("cut", [1, 7 * 8 * CHUNK, 7 * 8 * CHUNK + 3])
def test_a_record_cut_short_costs_its_chunk_alone(tmp_path: Path, cut: int) -> None:
    path = tmp_path / "state"
    run(path, 10)
    path.write_bytes(path.read_bytes()[:-cut])
    separator = live()
    Keeper(path, separator).load()
    assert separator.position == 9 * CHUNK


def test_each_chunk_adds_its_input_and_a_snapshot_takes_it_off(tmp_path: Path) -> None:
    path = tmp_path / "state"
    run(path, 1)
    alone = path.stat().st_size
    run(path, 11)
    assert path.stat().st_size == alone + 10 * (4 + 7 * 8 * CHUNK)
    run(path, 450, snapshot_s=10 * CHUNK / RATE)
    assert path.stat().st_size <= alone + 10 * (4 + 7 * 8 * CHUNK) + 20  # its position has more digits


def test_bytes_of_save_state_are_a_file_too(tmp_path: Path) -> None:
    separator, other = live(), live()
    separator.push(recording()[:, :500])
    (tmp_path / "state").write_bytes(separator.save_state())
    assert Keeper(tmp_path / "state", other).load()
    assert other.position == 500


def test_files_that_will_not_do_are_named(tmp_path: Path) -> None:
    path = tmp_path / "state"
    run(path, 3)
    for damage in (lambda d: d[:8], lambda d: d[: len(d) // 2], lambda d: d[:30] + bytes(200) + d[230:]):
        (tmp_path / "bad").write_bytes(damage(path.read_bytes()))
        with pytest.raises(InputError, match=r"bad: these bytes are no state .* name another --state"):
            Keeper(tmp_path / "bad", live()).load()
    with pytest.raises(InputError, match="state: the state belongs to a separator of another array"):
        Keeper(path, live("linear-constraint")).load()
    (tmp_path / "file").write_text("")
    with pytest.raises(FileError, match="cannot be written"):
        Keeper(tmp_path / "file" / "state", live()).snapshot()
    assert not Keeper(None, live()).load()
    assert not Keeper(tmp_path / "none", live()).load()


def test_bearings_asked_for_are_kept_too(tmp_path: Path) -> None:
    separator = live(wait=False)
    separator.push(recording()[:, :500])
    separator.set_bearings(seats(30.0, 120.0))
    other = live()
    other.restore(separator.save_state())
    assert other.talkers == tuple(seats(30.0, 120.0))
