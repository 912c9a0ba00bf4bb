"""The report on exported filters."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from tests.conftest import circle
from tests.report.conftest import Open, accessibility_findings
from unmix.errors import FileError, InputError
from unmix.export.job import export_bank
from unmix.export.tradeoffs import measure_tradeoffs
from unmix.report.export_page import is_export, material_of_export
from unmix.report.page import kind_of_page
from unmix.report.write import write_report
from unmix.scene import Talker

RATE = 16000
SEATS = [Talker.at("mate", 20.0, distance_m=1.2), Talker.at("Chief <Pilot>", 95.0)]


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("bank")
    export_bank(circle(4), SEATS, folder, sample_rate=RATE, loss_db=3.0, words=["float32", "s16"])
    return folder


@pytest.fixture(scope="module")
def measured(made: Path) -> Path:
    found = measure_tradeoffs(circle(4), SEATS, ["delay-and-sum", "model"], sample_rate=RATE, t20_s=None, seconds=1.5)
    (made / "tradeoffs.json").write_text(json.dumps(found.to_dict()))
    return made


def page(folder: Path, out: Path, **options: bool) -> str:
    return write_report(folder, out, **options).path.read_text()  # type: ignore[arg-type]


def test_it_says_what_export_json_says(measured: Path, tmp_path: Path) -> None:
    assert is_export(measured) and not is_export(tmp_path)
    text = page(measured, tmp_path / "r.html")
    tree = json.loads((measured / "export.json").read_text())
    assert f"2 × 5 filters of {tree['taps']} taps, {tree['delay_ms']:.1f} ms late" in text
    for cost in tree["costs"]:
        assert f"<td>{1e-6 * cost['mac_per_s']:.1f}</td>" in text and f"<td>{cost['latency_ms']:.1f}</td>" in text
    assert "32-bit float" in text and "16 bits" in text and f"<td>{tree['words'][1]['headroom_bits']}</td>" in text
    summary = material_of_export(measured).tradeoffs
    assert summary is not None
    assert f"<td>{summary.summary('model').best_db:.1f}</td>" in text
    assert '<svg class="figure"' in text and "latency of the filters, ms" in text and "delay-and-sum" in text
    assert kind_of_page(tmp_path / "r.html") == "export"


def test_names_are_text_and_can_be_left_out(measured: Path, tmp_path: Path) -> None:
    text = page(measured, tmp_path / "r.html")
    assert "Chief &lt;Pilot&gt;" in text and "<Pilot>" not in text
    hidden = page(measured, tmp_path / "h.html", hide_names=True)
    assert "Pilot" not in hidden and "Talker A, Talker B" in hidden


def test_without_a_comparison_it_says_why(made: Path, tmp_path: Path) -> None:
    folder = tmp_path / "bank"
    folder.mkdir()
    (folder / "export.json").write_text((made / "export.json").read_text())
    assert "The presets were not measured on this array." in page(folder, tmp_path / "a.html")
    (folder / "tradeoffs.json").write_text(json.dumps({"not_measured": "1 talkers"}))
    text = page(folder, tmp_path / "b.html")
    assert "The presets were not compared: 1 talkers." in text and "<svg" not in text


@pytest.mark.parametrize(
    ("name", "content", "said"),
    [
        ("export.json", "{", "export.json: is no JSON"),
        ("export.json", "[]", "export.json: holds no object"),
        ("export.json", '{"variant": "model"}', "export.json: no 'talkers'"),
        ("tradeoffs.json", '{"points": 3}', "tradeoffs.json: trade-offs: "),
    ],
)
def test_damaged_files_are_named(made: Path, tmp_path: Path, name: str, content: str, said: str) -> None:
    (tmp_path / "export.json").write_text((made / "export.json").read_text())
    (tmp_path / name).write_text(content)
    with pytest.raises(InputError, match=said):
        write_report(tmp_path)
    assert not (tmp_path / "report.html").exists()


def test_a_report_there_is_not_replaced_unasked(made: Path, tmp_path: Path) -> None:
    page(made, tmp_path / "r.html")
    with pytest.raises(FileError, match="exists already"):
        page(made, tmp_path / "r.html")


@pytest.mark.parametrize(("width", "dark"), [(1200, False), (390, True)])
def test_a_browser_shows_it(measured: Path, tmp_path: Path, open_page: Open, width: int, dark: bool) -> None:
    page(measured, tmp_path / "r.html")
    shown = open_page(tmp_path / "r.html", width=width, dark=dark, bypass_csp=True)
    assert shown.evaluate("document.documentElement.scrollWidth") <= width
    assert accessibility_findings(shown) == []
    picture = shown.locator("svg.figure").bounding_box()
    assert picture["width"] >= min(60 * 15, 0.85 * width)  # as wide as the text, up to 60 rem
