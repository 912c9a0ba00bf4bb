"""What a work item's key is made of: digests of files' content, of settings, and of the numerics themselves."""

from __future__ import annotations

import hashlib
import json
from functools import lru_cache
from pathlib import Path
from typing import Any

from unmix.errors import FileError

__all__ = ["Digests", "Stamp", "digest_of", "numerics_version", "unchanged"]

SIZE = 16
"""Bytes of a digest: two of 2^40 items share one with a probability under 1e-14."""
Stamp = tuple[str, int, int, str]
"""A file's path, size, time of change in nanoseconds, and digest: what tells whether it changed while a batch ran."""
NOT_NUMERICS = ("cli", "report", "batch")


def digest_of(*parts: Any) -> str:
    """Digest of plain values; dictionaries count the same whatever the order of their keys."""
    text = json.dumps(parts, sort_keys=True, separators=(",", ":"))
    return hashlib.blake2b(text.encode(), digest_size=SIZE).hexdigest()


def unchanged(stamp: Stamp) -> bool:
    """Whether a file is what it was. On another machine a copy may bear another time: then its content decides.

    Raises FileError when it is not there.
    """
    path, size, time_ns, digest = stamp
    now = _status(Path(path))
    return now == (size, time_ns) or (now[0] == size and _digest_of_file(Path(path)) == digest)


def _status(path: Path) -> tuple[int, int]:
    try:
        status = path.stat()
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check the path") from None
    return status.st_size, status.st_mtime_ns


def _digest_of_file(path: Path) -> str:
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, _hasher).hexdigest()
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check the path") from None


class Digests:
    """Digests of files, each read once."""

    def __init__(self) -> None:
        self._known: dict[tuple[Path, tuple[int, int]], str] = {}

    def of(self, path: Path) -> tuple[str, Stamp]:
        """Digest of the content, and the stamp it was taken under. Raises FileError when it cannot be read."""
        status = _status(path)
        if (path, status) not in self._known:
            self._known[path, status] = _digest_of_file(path)
        digest = self._known[path, status]
        return digest, (str(path), *status, digest)


def _hasher() -> Any:
    return hashlib.blake2b(digest_size=SIZE)


@lru_cache(maxsize=1)
def numerics_version() -> str:
    """Digest of the package's own source, as far as results depend on it.

    No number that somebody must remember to raise: what was computed by other code counts as not computed.
    """
    package = Path(__file__).parents[1]
    hasher = _hasher()
    for path in sorted(package.rglob("*.py")):
        name = path.relative_to(package)
        if name.parts[0] not in NOT_NUMERICS:
            hasher.update(f"{name.as_posix()}\0".encode() + path.read_bytes() + b"\0")
    return str(hasher.hexdigest())
