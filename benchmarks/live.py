"""Running live and exported filters: cost, latency, memory over an hour, changes of bearings, word lengths."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import threading
from pathlib import Path

import numpy as np
from common import PUCK, TABLE_SEEDS, Floats, clip, print_table

from unmix.export.material import speech_material
from unmix.export.shorten import shorten
from unmix.export.sir import images_of, measured_sir_db, predicted_sir_db, spectra_of
from unmix.export.words import WORDS, quantise, sir_after_rounding_db
from unmix.live.bank import fitted
from unmix.live.design import Designer
from unmix.live.meter import Meter
from unmix.live.separator import LiveSeparator
from unmix.scene import Talker
from unmix.variant import PRESETS

RATE = 16000
CHUNK = 32
SEATS = [Talker.at("a", 20.0, distance_m=1.2), Talker.at("b", 95.0, distance_m=1.2)]
VARIANTS = [v for v in ("delay-and-sum", "linear-constraint", "model", "low-latency") if v in PRESETS]
HOUR_S = 3600


def recording(seconds: float) -> Floats:
    """Two voices at seven microphones; only the size matters here."""
    rng = np.random.default_rng(5)
    voices = clip("novel-reader", seconds, RATE) + clip("card-reader", seconds, RATE)
    return np.asarray(0.1 * voices + 1e-3 * rng.standard_normal((7, len(voices))))


def cost(variant: str) -> list[object]:
    """Twenty seconds in chunks of 2 ms."""
    separator = LiveSeparator(PUCK, SEATS, variant, sample_rate=RATE)
    measured = separator.measure_latency()
    sound, meter = recording(20.0), Meter(RATE)
    for at in range(0, sound.shape[1], CHUNK):
        piece = sound[:, at : at + CHUNK]
        with meter.chunk(piece.shape[1]):
            separator.push(piece)
    late = 1e3 * separator.latency_s
    return [
        f"`{variant}`",
        f"{100 * meter.cpu_share:.1f} %",
        f"{100 * meter.cost:.1f} %",
        f"{1e3 * meter.longest_s:.1f} ms",
        f"{meter.under_runs} of {meter.chunks}",
        f"{separator.latency_samples} samples ({late:.1f} ms)",
        f"{min(measured)} to {max(measured)}",
    ]


def hour(variant: str) -> list[object]:
    """An hour through the command's pipe; resident memory after a minute of audio, at its highest, and at the end."""
    minute = recording(60.0).T.astype("<f4").tobytes()
    with tempfile.TemporaryDirectory() as folder:
        array = Path(folder) / "array.toml"
        PUCK.save(array)
        command = [sys.executable, "-m", "unmix", "live", str(array), "--variant", variant, "--format", "f32le"]
        command += ["--rate", str(RATE), "--channels", "7", "--bearing", "20,0,1.2", "--bearing", "95,0,1.2"]
        environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}
        process = subprocess.Popen(
            command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=environment
        )
        assert process.stdin is not None and process.stdout is not None and process.stderr is not None
        drain = threading.Thread(target=_drain, args=(process.stdout,))
        drain.start()
        resident = []
        for _ in range(HOUR_S // 60):
            process.stdin.write(minute)
            resident.append(_resident_kb(process.pid))
        process.stdin.close()
        drain.join()
        said = process.stderr.read().decode().splitlines()
        process.wait()
    grown = max(resident[1:]) - resident[1]
    return [f"`{variant}`", f"{resident[1] / 1024:.1f} MB", f"{grown / 1024:+.2f} MB", said[-1]]


def _drain(stream) -> None:  # type: ignore[no-untyped-def]
    while stream.read(1 << 16):
        pass


def _resident_kb(process: int) -> int:
    status = Path(f"/proc/{process}/status").read_text().split()
    return int(status[status.index("VmRSS:") + 1])


def reach() -> list[list[object]]:
    """Less look-ahead: tails cut off, and filters made anew; the worst talker of eight draws."""
    rng = np.random.default_rng(TABLE_SEEDS[0])
    speech = speech_material(2, RATE)
    spectra = spectra_of(speech)
    found: dict[float, list[tuple[float, float, float, float]]] = {}
    for _ in range(8):
        first = rng.uniform(-180.0, 180.0)
        bearings = (first, first + rng.uniform(40.0, 180.0))
        seats = [Talker.at(str(i), float(b), distance_m=1.2) for i, b in enumerate(bearings)]
        design = Designer(PUCK, PRESETS["model"], RATE)
        whole, paths = design(seats), design.paths(seats)
        images = images_of(speech, paths, RATE)
        for latency_ms in (0.0, 0.5, 1.0, 2.0, 4.0, 8.0):
            before = round(1e-3 * latency_ms * RATE)
            anew = shorten(whole, paths, spectra, RATE, loss_db=0.5, before=before)
            cut = fitted(whole, before=before)
            sirs = [float(measured_sir_db(taps, images).min()) for taps in (whole.taps, cut.taps, anew.bank.taps)]
            found.setdefault(latency_ms, []).append((*sirs, anew.noise_rise_db))
    rows: list[list[object]] = []
    for latency_ms, draws in found.items():
        whole_db, cut_db, anew_db, _ = (float(np.median(column)) for column in zip(*draws, strict=True))
        rows.append([f"{latency_ms:g} ms", whole_db, cut_db, anew_db, max(draw[3] for draw in draws)])
    return rows


def changes() -> list[list[object]]:
    """A talker jumps 40 degrees: what the fade adds between samples, and what a switch would."""
    rows: list[list[object]] = []
    for fade_ms in (5.0, 20.0, 50.0):
        separator = LiveSeparator(PUCK, SEATS, "model", sample_rate=RATE, fade_s=1e-3 * fade_ms)
        sound = recording(2.0)
        separator.push(sound[:, :RATE])
        separator.set_bearings([Talker.at("a", 60.0, distance_m=1.2), Talker.at("b", 140.0, distance_m=1.2)])
        out = separator.push(sound[:, RATE:])
        change = separator.last_change
        assert change is not None
        level = float(np.sqrt(np.mean(out**2)))
        rows.append([f"{fade_ms:.0f} ms", _db(change.step / level), _db(change.switch_step / level)])
    return rows


def _db(ratio: float) -> str:
    return f"{20 * np.log10(ratio):.1f} dB"


def words() -> list[list[object]]:
    """Loss in SIR by word length at the default tap length: the worst of eight draws of bearings."""
    rng = np.random.default_rng(TABLE_SEEDS[0])
    speech = speech_material(2, RATE)
    spectra = spectra_of(speech)
    worst: dict[str, list[tuple[float, float, float]]] = {word: [] for word in WORDS}
    lengths, cuts = [], []
    for _ in range(8):
        first = rng.uniform(-180.0, 180.0)
        bearings = (first, first + rng.uniform(40.0, 180.0))
        seats = [Talker.at(str(i), float(b), distance_m=1.2) for i, b in enumerate(bearings)]
        design = Designer(PUCK, PRESETS["model"], RATE)
        whole, paths = design(seats), design.paths(seats)
        bank = shorten(whole, paths, spectra, RATE, loss_db=0.5).bank
        images = images_of(speech, paths, RATE)
        before = predicted_sir_db(bank, paths, spectra, RATE), measured_sir_db(bank.taps, images)
        lengths.append(bank.taps.shape[-1])
        cuts.append(float((measured_sir_db(whole.taps, images) - before[1]).max()))
        for word in WORDS:
            rounded = quantise(bank.taps, word, RATE).taps
            from_taps = predicted_sir_db(type(bank)(rounded, bank.before, 0.0), paths, spectra, RATE)
            expected = sir_after_rounding_db(bank, word, paths, spectra, RATE)
            measured = before[1] - measured_sir_db(rounded, images)
            k = int(measured.argmax())
            worst[word].append(
                (float(measured[k]), float((before[0] - expected)[k]), float((before[0] - from_taps)[k]))
            )
    rows: list[list[object]] = [[f"shortened to {min(lengths)} to {max(lengths)} taps", f"{max(cuts):.2f}", None, None]]
    for word, found in worst.items():
        measured_db, expected_db, predicted_db = max(found)
        rows.append([word, f"{measured_db:.2f}", f"{expected_db:.2f}", f"{predicted_db:.2f}"])
    return rows


def main() -> None:
    """Print the tables."""
    print_table(
        "Live: 7 microphones, 2 talkers, 16 kHz, chunks of 2 ms, one core",
        ["variant", "processor", "with waiting", "longest chunk", "under-runs", "latency stated", "latency measured"],
        [cost(variant) for variant in VARIANTS],
    )
    print_table(
        "Look-ahead of `model`: SIR of the worst talker, without a room, median of eight draws, dB",
        ["look-ahead", "whole filters", "tails cut off", "made anew", "noise gain, at most more"],
        reach(),
    )
    print_table(
        "A change of bearings by 40 degrees: largest step between samples, relative to the output's RMS",
        ["fade", "added by the fade", "a switch could have added"],
        changes(),
    )
    print_table(
        "Word lengths: `model`, loss in SIR of the worst talker of eight draws, without a room, dB",
        ["word", "measured", "expected from the word length", "predicted from the rounded filters"],
        words(),
    )
    if "--no-hour" not in sys.argv:
        print_table(
            "One hour through the command's pipe in chunks of 2 ms",
            ["variant", "memory after two minutes", "growth until the end", "the command's own report"],
            [hour(variant) for variant in VARIANTS if variant in ("model", "low-latency")],
        )


if __name__ == "__main__":
    main()
