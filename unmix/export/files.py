"""The bank's files: NumPy archive, CSV and C header, each with its fields documented in it.

What they hold is applied as

    out_k[t] = sum_m sum_j taps[k, m, j] y_m[t - j],      j = 0 .. length - 1,

k the talker, m the channel in the array's order, and out_k late by `delay` samples.
"""

from __future__ import annotations

import csv
import json
import zipfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.errors import FileError, InputError
from unmix.export.grid import BearingGrid
from unmix.export.words import BITS, Word, Words

__all__ = ["FIELDS", "GRID_FIELDS", "ExportedBank", "read_bank", "write_csv", "write_grid", "write_header", "write_npz"]

Floats = NDArray[np.float64]

FIELDS = {
    "taps": "(talkers, channels, length) filters in double precision",
    "delay": "samples by which every output is late",
    "sample_rate": "hertz",
    "names": "(talkers,) names",
    "bearings": "(talkers, 3) azimuth and elevation in degrees, distance in metres, NaN for far away",
    "positions_m": "(channels, 3) microphones in metres, in the channels' order",
    "reference_channel": "the microphone at which talkers are received",
    "variant": "name of the variant",
    "float32": "(talkers, channels, length) filters in single precision",
    "s24, s16, s12, s8": "(talkers, channels, length) fixed point: a tap is value * scale",
    "scale_s24, scale_s16, scale_s12, scale_s8": "(talkers, channels) scales, 32-bit floats",
}
"""Fields of the NumPy archive, which holds this text as JSON under `fields`."""

GRID_FIELDS = {
    "taps": "(entries, talkers, channels, length) 32-bit filters; NaN where an entry has none",
    "azimuth_deg": "(entries,) of the talker who goes round",
    "talker": "which talker that is, from zero",
    "delay": "samples by which every output is late, for all entries",
    "sample_rate": "hertz",
}

_C_TYPES: dict[Word, str] = {"float32": "float", "s24": "int32_t", "s16": "int16_t", "s12": "int16_t", "s8": "int8_t"}


@dataclass(frozen=True)
class ExportedBank:
    """A bank with all that a device's builder needs to know of it; fields as in `FIELDS`.

    words  the same filters in other word lengths
    """

    taps: Floats
    delay: int
    sample_rate: int
    names: tuple[str, ...]
    bearings: Floats
    positions_m: Floats
    reference_channel: int
    variant: str
    words: tuple[Words, ...] = ()


def write_npz(path: Path, bank: ExportedBank) -> None:
    """Write the NumPy archive."""
    arrays: dict[str, Any] = {
        "taps": bank.taps,
        "delay": bank.delay,
        "sample_rate": bank.sample_rate,
        "names": np.array(bank.names),
        "bearings": bank.bearings,
        "positions_m": bank.positions_m,
        "reference_channel": bank.reference_channel,
        "variant": np.array(bank.variant),
        "fields": np.array(json.dumps(FIELDS)),
    }
    for words in bank.words:
        arrays[words.word] = words.values.astype(_numpy_type(words.word))
        if words.word != "float32":
            arrays[f"scale_{words.word}"] = words.scale
    np.savez_compressed(path, **arrays)


def read_bank(path: str | Path) -> ExportedBank:
    """Read a NumPy archive that `unmix export` wrote. Raises FileError or InputError naming the file."""
    path = Path(path)
    try:
        with np.load(path, allow_pickle=False) as archive:
            found = {name: archive[name] for name in archive.files}
        return ExportedBank(
            taps=found["taps"],
            delay=int(found["delay"]),
            sample_rate=int(found["sample_rate"]),
            names=tuple(str(name) for name in found["names"]),
            bearings=found["bearings"],
            positions_m=found["positions_m"],
            reference_channel=int(found["reference_channel"]),
            variant=str(found["variant"]),
            words=tuple(_words(found, word) for word in _C_TYPES if word in found),
        )
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; check the path") from None
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
        raise InputError(f"{path}: not a bank of filters; give the bank.npz that `unmix export` wrote") from None


def _words(found: dict[str, NDArray[Any]], word: Word) -> Words:
    values = found[word]
    scale = found[f"scale_{word}"] if word != "float32" else np.ones(values.shape[:2], np.float32)
    return Words(word, values if word == "float32" else values.astype(np.int32), scale)


def write_csv(path: Path, bank: ExportedBank) -> None:
    """Write one line per tap: talker, channel, tap, its lag in samples behind the talker, and its values."""
    with path.open("w", encoding="utf-8", newline="") as stream:
        for line in _about(bank):
            stream.write(f"# {line}\n")
        rows = csv.writer(stream, lineterminator="\n")
        rows.writerow(["talker", "channel", "tap", "lag", "value", *(w.word for w in bank.words)])
        for (k, m, j), value in np.ndenumerate(bank.taps):
            others = [repr(w.values[k, m, j].item()) for w in bank.words]
            rows.writerow([k, m, j, j - bank.delay, repr(float(value)), *others])
        for words in bank.words:
            if words.word != "float32":
                stream.write(f"# scale_{words.word} = {words.scale.tolist()}\n")


def write_header(path: Path, bank: ExportedBank) -> None:
    """Write a C header: sizes, and one constant array per word length with its scales."""
    talkers, channels, length = bank.taps.shape
    lines = ["/*", *(f" * {_uncommented(line)}" for line in _about(bank)), " */"]
    lines += ["#ifndef UNMIX_BANK_H", "#define UNMIX_BANK_H", "#include <stdint.h>", ""]
    for name, number in (
        ("TALKERS", talkers),
        ("CHANNELS", channels),
        ("TAPS", length),
        ("DELAY", bank.delay),
        ("SAMPLE_RATE", bank.sample_rate),
    ):
        lines.append(f"#define UNMIX_{name} {number}")
    size = "[UNMIX_TALKERS][UNMIX_CHANNELS]"
    for words in bank.words:
        lines.append(f"\nstatic const {_C_TYPES[words.word]} unmix_{words.word}{size}[UNMIX_TAPS] = {{")
        lines += [f" {{ /* {_uncommented(name)} */\n{_rows(words, k)}\n }}," for k, name in enumerate(bank.names)]
        lines.append("};")
        if words.word != "float32":
            rows = ", ".join("{" + ", ".join(map(_float_literal, row)) + "}" for row in words.scale.tolist())
            lines.append(f"static const float unmix_scale_{words.word}{size} = {{{rows}}};")
    lines.append("\n#endif")
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def write_grid(path: Path, grid: BearingGrid, sample_rate: int) -> None:
    """Write the NumPy archive of a table over bearings; its fields are documented in it under `fields`."""
    np.savez_compressed(
        path,
        taps=grid.taps.astype(np.float32),
        azimuth_deg=grid.azimuth_deg,
        talker=grid.talker,
        delay=grid.delay,
        sample_rate=sample_rate,
        fields=np.array(json.dumps(GRID_FIELDS)),
    )


def _about(bank: ExportedBank) -> Sequence[str]:
    talkers, channels, length = bank.taps.shape
    seats = [
        f"talker {k}: {name}, azimuth {azimuth:.2f} deg, elevation {elevation:.2f} deg, "
        + (f"{distance:.2f} m" if np.isfinite(distance) else "far away")
        for k, (name, (azimuth, elevation, distance)) in enumerate(zip(bank.names, bank.bearings, strict=True))
    ]
    microphones = [
        f"channel {m}: x {x:.4f}, y {y:.4f}, z {z:.4f} m" for m, (x, y, z) in enumerate(bank.positions_m.tolist())
    ]
    fixed = [words.word for words in bank.words if words.word != "float32"]
    scale = [f"fixed point ({', '.join(fixed)}): a tap is value * scale[talker][channel]"] if fixed else []
    return [
        f"filters of variant {bank.variant}: {talkers} talkers, {channels} channels, {length} taps, "
        f"{bank.sample_rate} Hz",
        "out[k][t] = sum over m, j of taps[k][m][j] * y[m][t - j], full scale 1.0",
        f"every output is late by {bank.delay} samples; talkers as received at channel {bank.reference_channel}",
        *scale,
        *seats,
        *microphones,
    ]


def _rows(words: Words, talker: int) -> str:
    literal = _float_literal if words.word == "float32" else str
    return "\n".join("  {" + ", ".join(map(literal, taps)) + "}," for taps in words.values[talker].tolist())


def _float_literal(value: float) -> str:
    """A C float with the nine digits that bring it back exactly."""
    digits = f"{value:.9g}"
    return f"{digits}f" if "." in digits or "e" in digits else f"{digits}.0f"


def _uncommented(text: str) -> str:
    """Text that cannot end a C comment, nor a line."""
    return " ".join(text.replace("*/", "* /").replace("/*", "/ *").split())


def _numpy_type(word: Word) -> Any:
    if word == "float32":
        return np.float32
    return np.int32 if BITS[word] > 16 else np.int16 if BITS[word] > 8 else np.int8
