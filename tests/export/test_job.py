"""The exported files, read back and applied by other means."""

from __future__ import annotations

import csv
import json
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest
from scipy.signal import fftconvolve, lfilter

from tests.conftest import circle
from unmix.errors import FileError, InputError, UnsolvableError
from unmix.export.files import FIELDS, read_bank
from unmix.export.job import Exported, export_bank
from unmix.export.material import speech_material
from unmix.export.sir import images_of
from unmix.jobs.solve import solve
from unmix.live.design import Designer
from unmix.scene import Scene, Talker
from unmix.variant import PRESETS

RATE = 16000
SEATS = [Talker.at("mate", 20.0, distance_m=1.2), Talker.at("Chief */ Pilot", 95.0)]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("export")


@pytest.fixture(scope="module")
def exported(folder: Path) -> Exported:
    return export_bank(circle(), SEATS, folder, sample_rate=RATE, loss_db=3.0)


def recording() -> np.ndarray:
    paths = Designer(circle(), PRESETS["model"], RATE).paths(SEATS)
    sound = images_of(speech_material(2, RATE, 2.0), paths, RATE).sum(axis=0)
    return np.asarray(sound + 1e-5 * np.random.default_rng(93).standard_normal(sound.shape))


def test_read_back_and_applied_by_scipy_it_is_the_variant(exported: Exported, folder: Path) -> None:
    bank = read_bank(folder / "bank.npz")
    sound = recording()
    late = np.pad(sound, ((0, 0), (0, bank.delay)))
    out = np.stack([sum(lfilter(h, 1.0, y) for h, y in zip(rows, late, strict=True)) for rows in bank.taps])
    whole = solve(Scene.from_arrays(sound, circle(), SEATS, sample_rate=RATE), "model").signals
    assert whole is not None
    error = out[:, bank.delay :] - whole
    # Shortening changes the output by what it says, give or take what differs between this speech and the whole.
    assert 10 * np.log10((error**2).sum() / (whole**2).sum()) < exported.change_db + 3.0 < -37.0


def test_nothing_cut_is_the_variant_to_rounding(folder: Path) -> None:
    export_bank(circle(), SEATS, folder / "whole", sample_rate=RATE, loss_db=1e-6)
    bank = read_bank(folder / "whole" / "bank.npz")
    sound = recording()
    out = fftconvolve(np.pad(sound, ((0, 0), (0, bank.delay)))[None], bank.taps, axes=-1).sum(axis=1)
    whole = solve(Scene.from_arrays(sound, circle(), SEATS, sample_rate=RATE), "model").signals
    assert whole is not None
    found = out[:, bank.delay : bank.delay + whole.shape[1]]
    assert np.abs(found - whole).max() < 1e-5 * np.abs(whole).max()


def test_the_archive_documents_itself(exported: Exported, folder: Path) -> None:
    with np.load(folder / "bank.npz", allow_pickle=False) as archive:
        names = set(archive.files)
        told = json.loads(str(archive["fields"]))
    assert told == FIELDS
    documented = {name.strip() for key in FIELDS for name in key.split(",")} | {"fields"}
    assert names == documented - {"s8", "scale_s8"}
    bank = read_bank(folder / "bank.npz")
    assert bank.names == ("mate", "Chief */ Pilot")
    assert np.allclose(bank.bearings, [[20.0, 0.0, 1.2], [95.0, 0.0, np.nan]], equal_nan=True)
    for mine, theirs in zip(bank.words, exported.bank.words, strict=True):
        assert mine.word == theirs.word
        assert np.array_equal(mine.taps, theirs.taps)


def test_the_csv_holds_the_same(exported: Exported, folder: Path) -> None:
    lines = (folder / "bank.csv").read_text().splitlines()
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    shape = exported.bank.taps.shape
    assert np.array_equal(np.array([float(r["value"]) for r in rows]).reshape(shape), exported.bank.taps)
    s16 = np.array([int(r["s16"]) for r in rows]).reshape(shape)
    scale = next(json.loads(line.split(" = ")[1]) for line in lines if line.startswith("# scale_s16"))
    step = np.array(scale)
    assert np.abs(s16 * step[..., None] - exported.bank.taps).max() <= 1.01 * step.max()
    assert rows[exported.bank.delay]["lag"] == "0"


DEVICE = """
#include <stdio.h>
#include "bank.h"
int main(void) {
    static double y[UNMIX_CHANNELS][UNMIX_TAPS + 200];
    const int n = UNMIX_TAPS + 200;
    for (int t = 0; t < n; t++) for (int m = 0; m < UNMIX_CHANNELS; m++) scanf("%lf", &y[m][t]);
    for (int k = 0; k < UNMIX_TALKERS; k++) for (int t = UNMIX_TAPS; t < n; t++) {
        double f = 0, q = 0;
        for (int m = 0; m < UNMIX_CHANNELS; m++) {
            double sum = 0;
            for (int j = 0; j < UNMIX_TAPS; j++) {
                f += (double)unmix_float32[k][m][j] * y[m][t - j];
                sum += unmix_s16[k][m][j] * y[m][t - j];
            }
            q += sum * unmix_scale_s16[k][m];
        }
        printf("%.17g %.17g\\n", f, q);
    }
    return UNMIX_DELAY == %d ? 0 : 1;
}
"""


@pytest.mark.skipif(shutil.which("cc") is None, reason="needs a C compiler")
def test_the_header_compiles_and_filters_the_same(exported: Exported, folder: Path) -> None:
    bank = exported.bank
    (folder / "device.c").write_text(DEVICE.replace("== %d", f"== {bank.delay}"))
    command = ["cc", "-std=c99", "-O1", "-Wall", "-Werror", "-Wno-unused-result", "-Wno-unused-variable"]
    subprocess.run([*command, "-o", folder / "device", folder / "device.c"], check=True)
    length = bank.taps.shape[-1]
    sound = np.random.default_rng(94).standard_normal((7, length + 200))
    sent = "\n".join(map(repr, sound.T.ravel().tolist()))
    done = subprocess.run([folder / "device"], input=sent, capture_output=True, text=True, check=True)
    found = np.array([line.split() for line in done.stdout.splitlines()], float).reshape(2, 200, 2)
    for index, word in ((0, "float32"), (1, "s16")):
        taps = next(w.taps for w in bank.words if w.word == word)
        expected = fftconvolve(sound[None], taps, axes=-1).sum(axis=1)[:, length : length + 200]
        assert np.abs(found[..., index] - expected).max() < 1e-9


def test_the_report_says_what_was_measured(exported: Exported, folder: Path) -> None:
    tree = json.loads((folder / "export.json").read_text())
    assert tree == json.loads(json.dumps(exported.to_dict()))
    assert tree["taps"] == exported.bank.taps.shape[-1] < tree["whole_taps"]
    assert tree["delay_ms"] == pytest.approx(tree["delay_samples"] / 16)
    assert max(a - b for a, b in zip(tree["sir_whole_db"], tree["sir_db"], strict=True)) < 4.0
    assert [word["word"] for word in tree["words"]] == ["float32", "s24", "s16", "s12"]
    for word in tree["words"]:
        for kind in ("noise_gain", "peak_gain"):
            gap = np.subtract(word[f"{kind}_predicted_db"], word[f"{kind}_measured_db"])
            assert np.abs(gap).max() < 1.0
        assert np.abs(np.subtract(word["sir_predicted_db"], word["sir_measured_db"])).max() < 1.0
        assert 2.0 ** word["headroom_bits"] >= 10.0 ** (max(word["peak_gain_measured_db"]) / 20.0) * 0.99


def test_one_talker_and_a_latency_are_exported(folder: Path) -> None:
    done = export_bank(
        circle(), SEATS[:1], folder / "one", "minimum-variance", sample_rate=RATE, latency_s=0.002, words=["s16"]
    )
    assert done.bank.delay <= 32
    assert done.sir_db == [] and done.words[0].sir_measured_db == []


def test_a_grid_is_written(folder: Path) -> None:
    done = export_bank(circle(), SEATS, folder / "grid", sample_rate=RATE, loss_db=3.0, words=["s16"], grid_deg=30.0)
    assert done.grid is not None and done.grid.entries == 12
    with np.load(folder / "grid" / "grid.npz", allow_pickle=False) as archive:
        assert archive["taps"].shape == (12, *done.bank.taps.shape)
        assert set(json.loads(str(archive["fields"]))) == set(archive.files) - {"fields"}


def test_what_cannot_be_exported_says_why(folder: Path, exported: Exported) -> None:
    with pytest.raises(UnsolvableError, match="'full' cannot be exported as filters: its room stage"):
        export_bank(circle(), SEATS, folder / "no", "full", sample_rate=RATE)
    with pytest.raises(UnsolvableError, match="same delays"):
        export_bank(circle(), [SEATS[0], SEATS[0]], folder / "no", sample_rate=RATE)
    for options, said in (
        ({"loss_db": 0.0}, "loss of 0 dB"),
        ({"latency_s": -1.0}, "latency of -1 s"),
        ({"words": ["s7"]}, "no word length 's7'"),
        ({"grid_deg": 7.0}, "does not divide"),
        ({"signals": np.zeros((2, 100))}, "silent throughout"),
        ({"signals": np.zeros((3, 100))}, "2 talkers"),
    ):
        with pytest.raises(InputError, match=said):
            export_bank(circle(), SEATS, folder / "no", sample_rate=RATE, **options)  # type: ignore[arg-type]
    assert not (folder / "no").exists()
    with pytest.raises(FileError, match="exists already"):
        export_bank(circle(), SEATS, folder, sample_rate=RATE)


def test_what_is_no_bank_is_said(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="no such file"):
        read_bank(tmp_path / "bank.npz")
    (tmp_path / "bank.npz").write_bytes(b"PK nonsense")
    with pytest.raises(InputError, match="not a bank of filters"):
        read_bank(tmp_path / "bank.npz")
