"""Opening an audio file, and whether it holds what its header promises.

The reading library trusts the file's length over its header and would pass a cut file on without a word.
"""

from __future__ import annotations

import struct
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

from unmix.errors import FileError

if TYPE_CHECKING:
    import soundfile

__all__ = ["missing_share", "open_audio"]

MOST_SAMPLES = 2**48
"""A file that claims more does not know its own length."""

# Writers that cannot go back to fill the header in leave one of these as the length: it says nothing.
_UNKNOWN_LENGTHS = (0xFFFFFFFF, 0x7FFFFFFF, 0x7FFFF000)
_KINDS = {b"RIFF": ("<", b"data"), b"RF64": ("<", b"data"), b"BW64": ("<", b"data"), b"FORM": (">", b"SSND")}


def open_audio(path: Path) -> soundfile.SoundFile:
    """Open a file for reading. Raises FileError when it is missing, no audio, or cut short."""
    import soundfile

    if path.is_dir():
        raise FileError(f"{path}: is a folder; name an audio file")
    try:
        missing = missing_share(path)
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; check the path") from None
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    if missing > 0.0:
        raise FileError(
            f"{path}: cut short, {max(100.0 * missing, 0.1):.1f} % of its samples are missing; copy it again"
        )
    try:
        stream = soundfile.SoundFile(path)
    except soundfile.LibsndfileError as error:
        reason = str(error).rsplit(":", 1)[-1].strip(" .")
        raise FileError(f"{path}: not readable audio ({reason}); give WAV, RF64, W64, FLAC or AIFF") from None
    if stream.frames > MOST_SAMPLES:
        stream.close()
        raise FileError(f"{path}: its header does not say how long it is; convert it to WAV")
    return stream


def missing_share(path: Path) -> float:
    """Share of the sound data that the header promises and the file lacks, 0 to 1; 0 where the header does not say.

    Looks at WAV, RF64 and BW64 (EBU Tech 3306: the true length stands in `ds64`), W64 and AIFF.
    """
    with path.open("rb") as stream:
        head, size = stream.read(16), path.stat().st_size
        stream.seek(0)
        promised, available = _data_length_w64(stream, size) if head[:4] == b"riff" else _data_length(stream, size)
    return 0.0 if promised <= available else (promised - available) / promised


def _data_length(stream: BinaryIO, file_size: int) -> tuple[int, int]:
    """Bytes of the data chunk as promised and as there are."""
    order, data = _KINDS.get(stream.read(12)[:4], ("<", b""))
    long_length: int | None = None
    while data and len(header := stream.read(8)) == 8:
        name, length = struct.unpack(f"{order}4sI", header)
        if name == b"ds64":
            body = stream.read(length)
            long_length = int.from_bytes(body[8:16], "little") if len(body) >= 16 else None
        elif name == data:
            available = file_size - stream.tell()
            if length == 0xFFFFFFFF and long_length is not None:
                return long_length, available
            return (available if length in _UNKNOWN_LENGTHS else length), available
        else:
            stream.seek(length + length % 2, 1)
    return 0, 0


def _data_length_w64(stream: BinaryIO, file_size: int) -> tuple[int, int]:
    """The same for W64: chunks are named by 16 bytes, their 64-bit lengths count the head of 24 and round up to 8."""
    stream.seek(40)
    while len(header := stream.read(24)) == 24:
        length = int.from_bytes(header[16:], "little") - 24
        if header[:4] == b"data":
            return length, file_size - stream.tell()
        stream.seek(max(length + -length % 8, 0), 1)
    return 0, 0
