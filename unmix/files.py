"""Reading strict TOML and writing files so that nothing half-written is ever seen."""

from __future__ import annotations

import contextlib
import json
import os
import re
import shutil
import tempfile
import tomllib
import unicodedata
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any, TypeVar

import msgspec

from unmix.errors import FileError, InputError
from unmix.toml_errors import explain_error

__all__ = [
    "convert_tree",
    "decode_toml",
    "folder_aside",
    "path_from",
    "read_toml",
    "refuse_to_replace",
    "safe_names",
    "write_aside",
    "write_json",
    "write_toml",
]

T = TypeVar("T")


def read_toml(path: Path, kind: type[T]) -> T:
    """Read a TOML file into the struct `kind`; unknown keys and wrong types name file, key and remedy.

    Raises FileError when the file is missing or unreadable, InputError when its content is wrong.
    """
    try:
        text = path.read_bytes()
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; check the path") from None
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check the path and its permissions") from None
    return decode_toml(text, kind, where=str(path))


def decode_toml(text: bytes | str, kind: type[T], *, where: str) -> T:
    """Decode TOML text into the struct `kind`; `where` names its source in errors."""
    try:
        tree = tomllib.loads(text.decode("utf-8-sig") if isinstance(text, bytes) else text)
    except UnicodeDecodeError:
        raise InputError(f"{where}: not UTF-8 text; is this a TOML file?") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{where}: not valid TOML: {error}") from None
    return convert_tree(tree, kind, where=where)


def convert_tree(tree: dict[str, Any], kind: type[T], *, where: str = "") -> T:
    """Turn a tree of plain values into the struct `kind`; `where` names its source in errors."""
    try:
        return msgspec.convert(tree, kind, strict=True)
    except msgspec.ValidationError as error:
        raise InputError((f"{where}: " if where else "") + explain_error(str(error), kind)) from None


def safe_names(names: Iterable[str]) -> list[str]:
    """File names for talkers' names: letters, digits, `-` and `_` only, never empty, unique whatever the case."""
    chosen: list[str] = []
    for name in names:
        plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode()
        stem = re.sub(r"[^A-Za-z0-9_-]+", "-", plain).strip("-") or "talker"
        taken, candidate, count = {c.lower() for c in chosen}, stem, 2
        while candidate.lower() in taken:
            candidate, count = f"{stem}-{count}", count + 1
        chosen.append(candidate)
    return chosen


def path_from(folder: Path, path: Path | None) -> str | None:
    """`path` as it is seen from `folder`, for files that name each other; absolute where there is no way from there."""
    if path is None:
        return None
    try:
        return Path(os.path.relpath(path.resolve(), folder.resolve())).as_posix()
    except ValueError:  # another drive
        return str(path.resolve())


def refuse_to_replace(path: Path, *, overwrite: bool) -> None:
    """Raise FileError when `path` exists and replacing was not asked for."""
    if path.exists() and not overwrite:
        raise FileError(f"{path}: exists already; choose another place or pass --overwrite")


@contextlib.contextmanager
def write_aside(path: Path, *, overwrite: bool = False) -> Iterator[Path]:
    """Yield a temporary path beside `path` and rename it onto `path` when the block ends well.

    Missing folders are made. When the block raises, the temporary file goes and `path` is untouched. Raises FileError
    when the place cannot be written.
    """
    refuse_to_replace(path, overwrite=overwrite)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(prefix=f".{path.stem}-", suffix=path.suffix, dir=path.parent)
    except OSError as error:
        raise FileError(f"{path.parent}: cannot be written ({error.strerror}); choose another folder") from None
    os.close(handle)
    aside = Path(name)
    try:
        yield aside
        aside.chmod(0o666 & ~_umask())
        aside.replace(path)
    except OSError as error:
        if isinstance(error, FileError):
            raise
        raise FileError(f"{path}: cannot be written ({error.strerror}); is the disk full?") from None
    finally:
        aside.unlink(missing_ok=True)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def write_json(path: Path, tree: Any, *, overwrite: bool = False) -> None:
    """Write a tree of plain values as JSON, aside and renamed; NaN and infinity are refused."""
    text = json.dumps(tree, indent=2, allow_nan=False, ensure_ascii=False)
    with write_aside(path, overwrite=overwrite) as aside:
        aside.write_text(text + "\n", encoding="utf-8")


def write_toml(path: Path, tree: dict[str, Any], *, overwrite: bool = False) -> None:
    """Write a tree of plain values as TOML, aside and renamed; keys whose value is None are left out."""
    import tomli_w

    with write_aside(path, overwrite=overwrite) as aside:
        aside.write_text(tomli_w.dumps(_without_none(tree)), encoding="utf-8")


def _without_none(tree: Any) -> Any:
    if isinstance(tree, dict):
        return {k: _without_none(v) for k, v in tree.items() if v is not None}
    if isinstance(tree, list | tuple):
        return [_without_none(v) for v in tree]
    return tree


@contextlib.contextmanager
def folder_aside(path: Path, *, overwrite: bool = False, expect: Iterable[str] = ()) -> Iterator[Path]:
    """Yield a temporary folder inside `path` and move its files into `path` when the block ends well.

    Files already in `path` under the same names are replaced only with `overwrite`; others there are left alone.
    Nothing is moved before every name has been checked; the names in `expect` are checked before the work begins. When
    the block raises, nothing stays behind, folders made for it included.
    """
    for expected in expect:
        refuse_to_replace(path / expected, overwrite=overwrite)
    made_here = _missing_folders(path)
    try:
        path.mkdir(parents=True, exist_ok=True)
        aside = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=path))
    except OSError as error:
        _remove_empty(made_here)
        raise FileError(f"{path}: cannot be written ({error.strerror}); choose another folder") from None
    try:
        yield aside
        made = sorted(p.relative_to(aside) for p in aside.rglob("*") if p.is_file())
        for name in made:
            refuse_to_replace(path / name, overwrite=overwrite)
        for name in made:
            (path / name).parent.mkdir(parents=True, exist_ok=True)
            (aside / name).replace(path / name)
    except OSError as error:
        if isinstance(error, FileError):
            raise
        raise FileError(f"{path}: cannot be written ({error.strerror}); is the disk full?") from None
    finally:
        shutil.rmtree(aside, ignore_errors=True)
        _remove_empty(made_here)


def _missing_folders(path: Path) -> list[Path]:
    """`path` and those of its parents that do not exist yet, the deepest first."""
    return [folder for folder in (path, *path.parents) if not folder.exists()]


def _remove_empty(folders: Iterable[Path]) -> None:
    """Remove folders that are still empty, the deepest first; the others are in use."""
    for folder in folders:
        try:
            folder.rmdir()
        except OSError:
            return
