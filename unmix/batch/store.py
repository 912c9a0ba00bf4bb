"""Where finished work items lie: one part file each, written aside and renamed, with a checksum.

    DIR/parts/ab/abcdef....part     "unmix-part DIGEST\\n", then the item's result as JSON
    DIR/scenes/DIGEST/              a rendered scene, complete or not there at all

Nothing is locked. A part's name says all its content depends on, so two runs in one folder can only write the same
thing twice; whoever renames last wins. A part cut short fails its checksum and counts as not there.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import shutil
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import msgspec
import numpy as np

from unmix.batch.scenes import SceneSource
from unmix.errors import FileError
from unmix.files import write_aside
from unmix.jobs.render import render

__all__ = ["Part", "Store", "encode_part"]

MAGIC = b"unmix-part "
FORGOTTEN_S = 3600.0
"""Unfinished files older than this are nobody's any more: parts are written in milliseconds, scenes in minutes."""
COMPLETE = "complete.json"


class Part(msgspec.Struct, kw_only=True):
    """What came out for one item.

    error      why the item failed, in one line; None when it is done
    passing    whether the failure may be gone next time: a killed worker, memory, a file
    traceback  where a defect of the program showed itself
    item       figures of the whole item: times, memory, latency, what was done
    talkers    figures of each talker
    """

    error: str | None = None
    passing: bool = False
    traceback: str | None = None
    item: dict[str, Any] = {}
    talkers: list[dict[str, Any]] = []


def encode_part(part: Part) -> bytes:
    """The part as it stands in its file."""
    body = msgspec.json.encode(part, enc_hook=_plain)
    return MAGIC + _checksum(body) + b"\n" + body


def _plain(value: Any) -> Any:
    """NumPy's numbers as Python's."""
    if isinstance(value, np.generic):
        return value.item()
    raise TypeError(f"{type(value).__name__} has no place in a part")


_decoder = msgspec.json.Decoder(Part)


def _checksum(body: bytes) -> bytes:
    return hashlib.blake2b(body, digest_size=16).hexdigest().encode()


class Store:
    """The parts and rendered scenes of a batch's folder."""

    def __init__(self, folder: str | Path) -> None:
        self.folder = Path(folder)
        self._parts, self._scenes = self.folder / "parts", self.folder / "scenes"

    def open(self) -> None:
        """Make the folder, see that it can be written, and clear away what killed runs left unfinished.

        Raises FileError when it cannot be written.
        """
        try:
            self._parts.mkdir(parents=True, exist_ok=True)
            handle, name = tempfile.mkstemp(prefix=".probe-", dir=self._parts)
            os.write(handle, b"probe")
            os.close(handle)
            Path(name).unlink()
        except OSError as error:
            raise FileError(f"{self.folder}: cannot be written ({error.strerror}); choose another --out") from None
        self._sweep()

    def _sweep(self) -> None:
        old = time.time() - FORGOTTEN_S
        for path in [*self._parts.glob("*/.*"), *self._scenes.glob(".*")]:
            with contextlib.suppress(OSError):
                if path.stat().st_mtime < old:
                    shutil.rmtree(path) if path.is_dir() else path.unlink()

    def path(self, key: str) -> Path:
        """Where the part of `key` lies, or will."""
        return self._parts / key[:2] / f"{key}.part"

    def write(self, key: str, part: bytes) -> None:
        """Keep an encoded part. Raises FileError when the place cannot be written, by name of what is wrong."""
        with write_aside(self.path(key), overwrite=True) as aside:
            aside.write_bytes(part)

    def read(self, key: str) -> Part | None:
        """The part of `key`; None when it is not there or not whole."""
        try:
            data = self.path(key).read_bytes()
        except FileNotFoundError:
            return None
        except OSError as error:
            raise FileError(f"{self.path(key)}: cannot be read ({error.strerror}); check its permissions") from None
        head, _, body = data.partition(b"\n")
        if head != MAGIC + _checksum(body):
            return None
        try:
            return _decoder.decode(body)
        except msgspec.DecodeError:
            return None

    def keys(self) -> set[str]:
        """Keys of all parts that are there, whole or not."""
        return set(self._listed())

    def _listed(self) -> Iterator[str]:
        if not self._parts.is_dir():
            return
        for shelf in os.scandir(self._parts):
            if shelf.is_dir():
                yield from (
                    e.name[:-5] for e in os.scandir(shelf.path) if e.name.endswith(".part") and e.name[0] != "."
                )

    def scene_path(self, source: SceneSource) -> Path | None:
        """The scene's file: its own, or that of the rendered scene when it is there and whole; else None."""
        if source.path is not None:
            return Path(source.path)
        folder = self._scenes / source.digest
        try:
            sizes: dict[str, int] = json.loads((folder / COMPLETE).read_text())
            whole = all((folder / name).stat().st_size == size for name, size in sizes.items())
        except (OSError, ValueError, AttributeError):
            return None
        return folder / "scene.toml" if whole else None

    def render(self, source: SceneSource) -> Path:
        """Render a scene into the folder, unless it is there, and return its file.

        The folder appears complete or not at all; of two runs that render the same scene, one's is kept. Raises what
        rendering raises, and FileError when the place cannot be written.
        """
        there = self.scene_path(source)
        if there is not None:
            return there
        folder = self._scenes / source.digest
        try:
            self._scenes.mkdir(parents=True, exist_ok=True)
            aside = Path(tempfile.mkdtemp(prefix=f".{source.digest}-", dir=self._scenes))
        except OSError as error:
            raise FileError(f"{self._scenes}: cannot be written ({error.strerror}); choose another --out") from None
        try:
            render_source(source, aside)
            aside.chmod(0o755)
            self._place(aside, folder)
        finally:
            shutil.rmtree(aside, ignore_errors=True)
        return folder / "scene.toml"

    def _place(self, aside: Path, folder: Path) -> None:
        with contextlib.suppress(OSError):
            aside.rename(folder)  # fails when another run was first
            return
        if (folder / COMPLETE).exists() and _sizes(aside) == _sizes(folder):
            return
        # What lies there is not whole: out of the way with it.
        away = Path(tempfile.mkdtemp(prefix=".away-", dir=self._scenes))
        try:
            folder.rename(away / folder.name)
            aside.rename(folder)
        except OSError as error:
            raise FileError(f"{folder}: cannot be written ({error.strerror}); remove it and run again") from None
        finally:
            shutil.rmtree(away, ignore_errors=True)


def render_source(source: SceneSource, folder: Path) -> None:
    """Render a scene's spec into `folder`, with a list of sizes that tells whether the folder is whole."""
    if source.spec is None:
        return
    render(source.spec, folder, base=source.base)
    (folder / COMPLETE).write_text(json.dumps(_sizes(folder)))


def _sizes(folder: Path) -> dict[str, int]:
    return {path.name: path.stat().st_size for path in sorted(folder.iterdir()) if path.name != COMPLETE}
