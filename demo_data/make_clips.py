"""Speak the demo's three scripts with flite's voices and store them as 16 kHz FLAC.

Run in this folder on a machine with Debian's `flite` installed: python make_clips.py
"""

from __future__ import annotations

import subprocess
import tempfile
from pathlib import Path

import numpy as np
import soundfile

HERE = Path(__file__).parent
RATE_HZ = 16000
PEAK = 0.5

SCRIPTS = {
    ("mate", "slt"): (
        "Good evening. I am handing over the control room of the Sandrin. We left Port Elling at ten past six, "
        "twelve minutes late, with two hundred and four passengers and thirty one cars. The wind is south west "
        "and freshening, so expect some roll once we are past the Skarra light."
    ),
    ("engineer", "rms"): (
        "Both main engines are running at eighty percent. Number two cooling pump was noisy this morning, so I "
        "changed over to the spare at noon. Fuel is at sixty percent. Please keep an eye on the bearing "
        "temperature, it has been climbing slowly."
    ),
    ("bosun", "awb"): (
        "The bow door is checked and locked, and its seals are dry. One lamp is out on the car deck, on the port "
        "side, next to the stairs. The old dog in the blue van is fine, its owner went down twice to look. "
        "Nothing else to report from the deck."
    ),
}


def speak(text: str, voice: str) -> np.ndarray:
    """`text` in flite's `voice`: (samples,) at 16 kHz, silence at both ends cut off."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "speech.wav"
        subprocess.run(["flite", "-voice", voice, "-t", text, "-o", str(path)], check=True)
        signal, rate = soundfile.read(path)
    if rate != RATE_HZ:
        raise SystemExit(f"flite's voice {voice} speaks at {rate} Hz, expected {RATE_HZ} Hz")
    loud = np.flatnonzero(np.abs(signal) > 0.01 * np.abs(signal).max())
    return signal[max(0, loud[0] - 800) : loud[-1] + 1600]


def main() -> None:
    """Write one clip per script."""
    for (name, voice), text in SCRIPTS.items():
        signal = speak(text, voice)
        path = HERE / f"{name}.flac"
        soundfile.write(path, PEAK * signal / np.abs(signal).max(), RATE_HZ, subtype="PCM_16")
        print(f"{path.name}: {len(signal) / RATE_HZ:.1f} s, {path.stat().st_size // 1024} KiB")


if __name__ == "__main__":
    main()
