"""Strict TOML and files that appear whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path

import msgspec
import pytest

from unmix.errors import FileError, InputError
from unmix.files import decode_toml, folder_aside, read_toml, safe_names, write_aside, write_json, write_toml


class Inner(msgspec.Struct, forbid_unknown_fields=True):
    size_m: float
    count: int = 1


class Outer(msgspec.Struct, forbid_unknown_fields=True):
    title: str = ""
    inner: Inner | None = None
    several: list[Inner] = []


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("titel = 'x'", r"there: unknown key `titel` in the top level; did you mean `title`\?"),
        ("[inner]\nsize_m = 1\ncounts = 2", r"there: unknown key `counts` in \[inner\]; did you mean `count`\?"),
        ("[[several]]\nsize_mm = 1", r"there: unknown key `size_mm` in several\[0\]; did you mean `size_m`\?"),
        ("zzz = 1", r"there: unknown key `zzz` in the top level; known keys: title, inner, several"),
        ("[inner]\nsize_m = 'big'", r"there: key `inner.size_m`: expected a number, got text"),
        ("[[several]]\nsize_m = 1\n[[several]]\ncount = 3", r"there: key `several\[1\]\.size_m` is missing"),
        ("a = 1\ntitle = 2 3", r"there: not valid TOML: .*line 2"),
        ("title = 1", r"there: key `title`: expected text, got a whole number"),
    ],
)
def test_errors_name_file_key_and_remedy(text: str, message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        decode_toml(text, Outer, where="there")
    assert "\n" not in str(caught.value)


def test_files_from_other_editors_are_read() -> None:
    """A byte-order mark and line ends of the other system."""
    assert decode_toml(b"\xef\xbb\xbftitle = 'x'\r\n", Outer, where="there").title == "x"
    with pytest.raises(InputError, match="not UTF-8"):
        decode_toml(b"title = '\xff'", Outer, where="there")


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(FileError, match=r"no\.toml: no such file"):
        read_toml(tmp_path / "no.toml", Outer)
    with pytest.raises(FileError, match="cannot be read"):
        read_toml(tmp_path, Outer)


def test_names_become_safe_and_stay_apart() -> None:
    names = ["Mate", "mate", "Jürgen Groß", "../../etc", "", "日本", "a/b", "a b"]
    safe = safe_names(names)
    assert safe == ["Mate", "mate-2", "Jurgen-Gro", "etc", "talker", "talker-2", "a-b", "a-b-2"]
    assert len({s.lower() for s in safe}) == len(names)


def test_a_file_appears_whole_or_not_at_all(tmp_path: Path) -> None:
    with pytest.raises(RuntimeError), write_aside(tmp_path / "new" / "a.txt") as aside:
        aside.write_text("half")
        raise RuntimeError
    assert list((tmp_path / "new").iterdir()) == []
    with write_aside(tmp_path / "a.txt") as aside:
        aside.write_text("whole")
        assert not (tmp_path / "a.txt").exists()
    assert [p.name for p in tmp_path.iterdir() if p.is_file()] == ["a.txt"]


def test_what_is_written_has_the_usual_permissions(tmp_path: Path) -> None:
    (tmp_path / "plain").write_text("x")
    write_json(tmp_path / "a.json", {"a": 1})
    assert (tmp_path / "a.json").stat().st_mode == (tmp_path / "plain").stat().st_mode


def test_toml_is_read_back_as_written(tmp_path: Path) -> None:
    outer = Outer('a "quoted" title', Inner(0.1), [Inner(1e-12, 3)])
    write_toml(tmp_path / "a.toml", msgspec.to_builtins(outer))
    assert read_toml(tmp_path / "a.toml", Outer) == outer
    write_toml(tmp_path / "b.toml", {"title": "x", "inner": None})
    assert read_toml(tmp_path / "b.toml", Outer) == Outer("x")


def test_json_has_no_nan(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="JSON"):
        write_json(tmp_path / "a.json", {"a": float("nan")})
    assert list(tmp_path.iterdir()) == []


def test_a_folder_fills_at_once(tmp_path: Path) -> None:
    out = tmp_path / "deep" / "out"
    with folder_aside(out) as aside:
        (aside / "a.txt").write_text("1")
        (aside / "sub").mkdir()
        (aside / "sub" / "b.txt").write_text("2")
        assert [p for p in out.rglob("*.txt") if aside not in p.parents] == []
    assert sorted(p.relative_to(out).as_posix() for p in out.rglob("*") if p.is_file()) == ["a.txt", "sub/b.txt"]
    assert not [p for p in out.iterdir() if p.name.startswith(".")]


def test_a_failure_leaves_no_folder_behind(tmp_path: Path) -> None:
    with pytest.raises(InputError), folder_aside(tmp_path / "deep" / "out") as aside:
        (aside / "a.txt").write_text("1")
        raise InputError("wrong")
    assert list(tmp_path.iterdir()) == []


def test_files_in_the_way(tmp_path: Path) -> None:
    (tmp_path / "a.txt").write_text("old")
    (tmp_path / "mine.txt").write_text("mine")
    with pytest.raises(FileError, match=r"a\.txt: exists already"), folder_aside(tmp_path, expect=["a.txt"]):
        raise AssertionError("the work must not begin")
    with pytest.raises(FileError, match=r"a\.txt: exists already"), folder_aside(tmp_path) as aside:
        (aside / "0.txt").write_text("new")
        (aside / "a.txt").write_text("new")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.txt", "mine.txt"]
    with folder_aside(tmp_path, overwrite=True, expect=["a.txt"]) as aside:
        (aside / "a.txt").write_text("new")
    assert ((tmp_path / "a.txt").read_text(), (tmp_path / "mine.txt").read_text()) == ("new", "mine")


def test_places_that_cannot_be_written(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x")
    with pytest.raises(FileError, match=r"file: cannot be written \(File exists\)"), folder_aside(tmp_path / "file"):
        pass
    with pytest.raises(FileError, match="cannot be written"), folder_aside(tmp_path / "file" / "out"):
        pass
    with pytest.raises(FileError, match="cannot be written"), write_aside(tmp_path / "file" / "a.txt"):
        pass


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_a_read_only_folder(tmp_path: Path) -> None:
    closed = tmp_path / "closed"
    closed.mkdir(mode=0o555)
    with pytest.raises(FileError, match=r"closed.*cannot be written \(Permission denied"), folder_aside(closed / "out"):
        pass
