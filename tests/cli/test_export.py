"""`unmix export`: files, tables, one JSON object, and what it refuses."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.cli.conftest import Run

QUICK = ("--loss-db", 3, "--word", "s16", "--no-report")


def test_a_scenes_filters_are_written(run: Run, scene: Path, tmp_path: Path) -> None:
    ran = run("export", scene, "--out", tmp_path / "bank", *QUICK, "--json")
    assert ran.status == 0
    tree = ran.json
    assert sorted(p.name for p in (tmp_path / "bank").iterdir()) == sorted(tree["files"])
    assert tree["talkers"] == ["mate", "Chief Pilot"] and tree["channels"] == 5 and tree["sample_rate"] == 16000
    again = run("export", scene, "--out", tmp_path / "bank", *QUICK)
    assert again.status == 1 and "exists already" in again.err


def test_an_array_file_and_bearings_do_too(run: Run, scene: Path, tmp_path: Path) -> None:
    given = ("export", scene.parent / "array.toml", "--bearing", "20", "--bearing", "-100,10,1.5")
    ran = run(
        *given, "--rate", 16000, "--out", tmp_path / "bank", *QUICK, "--grid-deg", 60, "--grid-talker", "talker-2"
    )
    assert ran.status == 0
    assert "2 x 5 filters of variant model" in ran.out
    assert "million MAC/s" in ran.out and "partitioned FFT" in ran.out and "head-room" in ran.out
    assert "talker-2 in steps of 60 deg" in ran.out and "cubic" in ran.out
    assert (tmp_path / "bank" / "grid.npz").exists()


@pytest.mark.parametrize(
    ("arguments", "status", "said"),
    [
        (("--variant", "full"), 1, "cannot be exported as filters"),
        (("--rate", 8000), 1, "the scene's recording has 16000 Hz"),
        (("--grid-talker", "bosun"), 1, "nobody is called so; talkers are mate, Chief Pilot"),
        (("--grid-deg", 7), 1, "does not divide the circle"),
        (("--bearing", "20", "--bearing", "20"), 1, "same delays"),
        (("--word", "s7"), 2, "s7"),
        (("--loss-db", -1), 1, "loss of -1 dB"),
    ],
)
def test_what_does_not_fit_is_one_line(
    run: Run, scene: Path, tmp_path: Path, arguments: tuple[object, ...], status: int, said: str
) -> None:
    ran = run("export", scene, "--out", tmp_path / "bank", *arguments)
    assert ran.status == status
    assert said in ran.err and "Traceback" not in ran.err
    assert not (tmp_path / "bank").exists()


def test_an_array_says_no_rate_and_a_track_no_filters(run: Run, scene: Path, tmp_path: Path) -> None:
    ran = run("export", scene.parent / "array.toml", "--bearing", "20", "--out", tmp_path / "bank")
    assert ran.status == 2 and "give --rate" in ran.err
    (scene.parent / "walk.csv").write_text("time_s,azimuth_deg,elevation_deg,distance_m\n0,20,0,1.2\n1,60,0,1.2\n")
    scene.write_text(scene.read_text().replace("azimuth_deg = 20.0\ndistance_m = 1.2", 'track = "walk.csv"'))
    ran = run("export", scene, "--out", tmp_path / "bank")
    assert ran.status == 1 and "mate moves along a track" in ran.err


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    """Two presets on a second and a half of speech: the rest is tested where it is measured."""
    from unmix.export import tradeoffs

    whole = tradeoffs.measure_tradeoffs

    def measured(array, talkers, **options):  # type: ignore[no-untyped-def]
        return whole(array, talkers, ["delay-and-sum", "model"], seconds=1.5, **options)

    monkeypatch.setattr(tradeoffs, "measure_tradeoffs", measured)


@pytest.mark.usefixtures("quick")
def test_the_report_compares_the_presets(run: Run, scene: Path, tmp_path: Path) -> None:
    out, plot = tmp_path / "bank", tmp_path / "t.svg"
    ran = run("export", scene, "--out", out, "--loss-db", 3, "--word", "s16", "--plot", plot, "--plot-t20-s", 0)
    assert ran.status == 0, ran.err
    assert "rendered speech in no room" in ran.out and f"Report: {out / 'report.html'}" in ran.out
    assert {p.name for p in out.iterdir()} >= {"report.html", "tradeoffs.json", "export.json"}
    assert "delay-and-sum" in plot.read_text() and "Presets on this array" in (out / "report.html").read_text()
    again = run("report", out, "--overwrite", "--json")
    assert again.status == 0 and again.json["file"] == str(out / "report.html")
    refused = run("export", scene, "--out", out, "--loss-db", 3)
    assert refused.status == 1 and "report.html: exists already" in refused.err


def test_what_cannot_be_compared_is_exported_all_the_same(run: Run, scene: Path, tmp_path: Path) -> None:
    given = ("export", scene.parent / "array.toml", "--bearing", "20", "--rate", 16000, "--loss-db", 3, "--word", "s16")
    ran = run(*given, "--variant", "delay-and-sum", "--out", tmp_path / "bank")
    assert ran.status == 0, ran.err
    assert "The presets were not compared: 1 talkers" in ran.out
    assert "The presets were not compared" in (tmp_path / "bank" / "report.html").read_text()
    asked = run(*given, "--variant", "delay-and-sum", "--out", tmp_path / "other", "--plot", tmp_path / "t.svg")
    assert asked.status == 1 and "needs two" in asked.err and not (tmp_path / "other").exists()
    bad = run(*given, "--variant", "delay-and-sum", "--out", tmp_path / "third", "--plot", tmp_path / "t.bmp")
    assert bad.status == 1 and "choose one of these endings" in bad.err and not (tmp_path / "third").exists()
