"""Spectrograms: levels over time and frequency, as a small picture for the page or a figure for a file.

Level of each cell in dB below the loudest of the recording's, over frames of 32 ms (Hann): time to the right, frequency
up, colours even to the eye for every kind of colour vision [1]_.

.. [1] S. van der Walt, N. Smith, "A better default colormap for matplotlib", SciPy 2015 (viridis).
"""

from __future__ import annotations

import struct
import zlib
from collections.abc import Sequence
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from unmix.report.figures import new_figure, plain_label, styled

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["RANGE_DB", "palette", "spectrogram_db", "spectrogram_figure", "spectrogram_png"]

Floats = NDArray[np.float64]

FRAME_S = 0.032
COLUMNS, ROWS = 720, 144
RANGE_DB = 60.0
STEPS = 64


def spectrogram_db(signal: Floats, sample_rate: int, *, columns: int = COLUMNS, rows: int = ROWS) -> Floats:
    """Level in dB re full scale of (samples,): (rows, columns), the lowest frequency first."""
    from scipy.fft import rfft
    from scipy.signal.windows import hann

    frame = max(16, round(FRAME_S * sample_rate))
    window = hann(frame, sym=False)
    centres = (np.arange(columns) + 0.5) / columns * len(signal)
    starts = np.round(centres).astype(np.intp)
    padded = np.pad(signal, (frame // 2, frame))
    frames = padded[starts[:, None] + np.arange(frame)] * window
    power = np.square(np.abs(rfft(frames, axis=1))) / np.square(window.sum() / 2.0)
    edges = np.linspace(0, power.shape[1], rows + 1).astype(np.intp)
    rows_power = np.stack([power[:, a : max(b, a + 1)].max(axis=1) for a, b in pairwise(edges)])
    return np.asarray(10.0 * np.log10(np.maximum(rows_power, 1e-14)))


def palette() -> NDArray[np.uint8]:
    """The colours, quiet to loud: (steps, 3), 0 to 255."""
    from matplotlib import colormaps

    colours = colormaps["viridis"](np.linspace(0.0, 1.0, STEPS))
    return np.asarray(np.round(255.0 * np.asarray(colours)[:, :3]), dtype=np.uint8)


def spectrogram_png(levels: Floats, top_db: float, colours: NDArray[np.uint8]) -> bytes:
    """A picture of (rows, columns) levels from `top_db` down to `RANGE_DB` below, one pixel per cell."""
    shares = np.clip((levels - top_db) / RANGE_DB + 1.0, 0.0, 1.0)
    index = np.round(shares * (len(colours) - 1)).astype(np.uint8)[::-1]
    lines = np.pad(index, ((0, 0), (1, 0)))  # each line begins with its filter: none
    header = struct.pack(">IIBBBBB", index.shape[1], index.shape[0], 8, 3, 0, 0, 0)
    return b"\x89PNG\r\n\x1a\n" + b"".join(
        _chunk(kind, data)
        for kind, data in (
            (b"IHDR", header),
            (b"PLTE", colours.tobytes()),
            (b"IDAT", zlib.compress(lines.tobytes(), 9)),
            (b"IEND", b""),
        )
    )


def _chunk(kind: bytes, data: bytes) -> bytes:
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


def spectrogram_figure(
    signals: Floats, sample_rate: int, names: Sequence[str], *, start_s: float = 0.0, top_db: float | None = None
) -> Figure:
    """Spectrograms of (signals, samples) below each other, on one scale of levels.

    start_s  time of the first sample; top_db  level of the brightest colour, by default the highest there is

    `save_figure` writes it, and raises what writing does.
    """
    levels = [spectrogram_db(signal, sample_rate) for signal in signals]
    top = max(float(level.max()) for level in levels) if top_db is None else top_db
    extent = (start_s, start_s + signals.shape[1] / sample_rate, 0.0, sample_rate / 2000.0)
    with styled():
        figure = new_figure(7.0, 0.6 + 1.3 * len(signals))
        axes: Any = figure.subplots(len(signals), 1, sharex=True, squeeze=False)[:, 0]
        for ax, level, name in zip(axes, levels, names, strict=True):
            picture = ax.imshow(
                level, origin="lower", aspect="auto", extent=extent, vmin=top - RANGE_DB, vmax=top, cmap="viridis"
            )
            ax.set_title(plain_label(name), loc="left", fontsize=9.0)
            ax.set_ylabel("kHz")
            ax.grid(False)
        axes[-1].set_xlabel("time, s")
        figure.colorbar(picture, ax=list(axes), label="dB re full scale")
    return figure
