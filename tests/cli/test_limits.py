"""`unmix limits` as a shell sees it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.cli.conftest import Run
from tests.conftest import circle


@pytest.fixture
def array(tmp_path: Path) -> Path:
    circle(4).save(tmp_path / "array.toml")
    return tmp_path / "array.toml"


def test_tables_and_picture(run: Run, array: Path) -> None:
    ran = run("limits", array, "--sweep", "--plot", array.parent / "limits.svg")
    assert ran.status == 0, ran.err
    for word in ("usable", "own anchor", "nearest anchor", "head pairs", "How many microphones"):
        assert word in ran.out
    picture = (array.parent / "limits.svg").read_text()
    assert "noise gain, dB" in picture and "12 microphones" in picture
    again = run("limits", array, "--plot", array.parent / "limits.svg")
    assert again.status == 1 and "--overwrite" in again.err


def test_json_is_one_object(run: Run, array: Path) -> None:
    tree = run("limits", array, "--json", "--snr", 40).json
    assert tree["snr_db"] == 40 and tree["microphones"] == 5
    assert tree["sweep"] == []


def test_a_missing_array_is_one_line(run: Run, tmp_path: Path) -> None:
    ran = run("limits", tmp_path / "nothing.toml")
    assert ran.status == 1
    assert ran.err.count("\n") == 1 and "no such file" in ran.err


def test_trade_offs_of_the_presets(run: Run, array: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from unmix.export import tradeoffs

    whole, asked = tradeoffs.measure_tradeoffs, {}

    def measured(array, talkers, **options):  # type: ignore[no-untyped-def]
        asked.update(options, azimuth_deg=[float(np.degrees(t.azimuth)) for t in talkers])
        return whole(array, talkers, ["delay-and-sum"], seconds=1.0, **options)

    monkeypatch.setattr(tradeoffs, "measure_tradeoffs", measured)
    picture = array.parent / "t.svg"
    given = ("limits", array, "--tradeoffs", picture, "--room", 0.4, 75.6, 1.0, "--snr", 25)
    ran = run(*given, "--sweep-separation", 60)
    assert ran.status == 0, ran.err
    assert "Presets for a device" in ran.out and "T20 0.4 s" in ran.out and f"Written: {picture}" in ran.out
    assert "latency of the filters" in picture.read_text()
    assert asked["azimuth_deg"] == pytest.approx([30.0, -30.0])
    assert asked["size_m"] == pytest.approx([6.0, 4.5, 2.8]) and asked["snr_db"] == 25.0
    tree = run(*given, "--overwrite", "--json").json
    assert {p["variant"] for p in tree["tradeoffs"]["points"]} == {"delay-and-sum"}
    again = run(*given)
    assert again.status == 1 and "exists already" in again.err
    crowded = run("limits", array, "--tradeoffs", array.parent / "u.svg", "--talkers", 4, "--sweep-separation", 120)
    assert crowded.status == 1 and "do not fit around the array" in crowded.err
